"""The diode."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from loopsim.devices.contribution import (
    Branch,
    Contribution,
    Entry,
    Share,
    Symbol,
    Term,
    Unknown,
    across,
    difference,
    through,
)
from loopsim.devices.fields import Scalar, quantity
from loopsim.devices.passive import TWO
from loopsim.devices.phi import Kind
from loopsim.devices.thermal import saturation_factor, thermal_voltage


@dataclass(frozen=True)
class Diode:
    """i = I_S (exp(v / (n V_T)) - 1) - I_B (exp(-(v + V_B) / V_T) - exp(-V_B / V_T)), anode `from`, cathode `to`.

    The first term is Shockley's law (1949, from memory), the second the breakdown branch (common practice): the reverse
    current grows past I_B = breakdown_current at V_B = breakdown_voltage. v is the voltage behind series_resistance. Charge:
    junction_capacitance v (constant capacitance) and transit_time times the first term (common practice). I_S moves with
    temperature as `saturation_factor`.
    """

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = True

    saturation_current: Scalar = quantity("A", 1e-40, 1.0, "saturation current at 25 degC", 1e-14)
    ideality: Scalar = quantity("", 0.5, 10.0, "ideality factor", 1.0)
    series_resistance: Scalar = quantity("ohm", 1e-9, 1e9, "ohmic resistance in series with the junction")
    junction_capacitance: Scalar = quantity(
        "F", 0.0, 1.0, "capacitance across the junction, taken as constant"
    )
    transit_time: Scalar = quantity("s", 0.0, 1.0, "stored charge over forward current")
    breakdown_voltage: Scalar = quantity("V", 0.1, 1e5, "reverse voltage at which breakdown_current flows")
    breakdown_current: Scalar = quantity(
        "A", 1e-15, 1e3, "reverse current at the breakdown voltage; matters only with it", 1e-3
    )
    bandgap_voltage: Scalar = quantity(
        "V", 0.1, 10.0, "activation energy of the saturation current over e", 1.12
    )
    saturation_exponent: Scalar = quantity(
        "", -20.0, 20.0, "power of the absolute temperature in the saturation current", 3.0
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        scale = self.ideality * thermal_voltage(ambient)
        saturation = self.saturation_current * saturation_factor(
            ambient, self.bandgap_voltage, self.saturation_exponent, self.ideality
        )
        unknowns: list[Unknown] = []
        conductance: list[Entry] = []
        capacitance: list[Entry] = []
        branches: list[Branch] = []
        anode: Symbol = "from"
        if self.series_resistance is not None:
            anode = "junction"
            unknowns.append(Unknown("junction", "A"))
            conductance.extend(across("from", anode, 1.0 / self.series_resistance))
            branches.append(Branch("from", anode, "conductance"))
        branches.append(Branch(anode, "to", "conductance"))
        if self.junction_capacitance is not None:
            capacitance.extend(across(anode, "to", self.junction_capacitance))
        outputs = through(anode, "to", saturation)
        if self.transit_time is not None:
            # the diffusion current is an unknown d with d = I_S (exp - 1), so that the stored charge transit_time * d stays
            # linear
            unknowns.append(Unknown("diffusion_current", "A"))
            conductance.append(("diffusion_current", "diffusion_current", 1.0))
            capacitance += [
                (anode, "diffusion_current", self.transit_time),
                ("to", "diffusion_current", -self.transit_time),
            ]
            outputs = (*outputs, ("diffusion_current", -saturation))
        terms = [Term(Kind.EXPONENTIAL, difference(anode, "to", 1.0 / scale), outputs)]
        source: tuple[Share, ...] = ()
        if self.breakdown_voltage is not None:
            term, source = self._breakdown(anode, thermal_voltage(ambient))
            terms.append(term)
        return Contribution(
            tuple(unknowns),
            tuple(conductance),
            tuple(capacitance),
            source,
            terms=tuple(terms),
            branches=tuple(branches),
        )

    def _breakdown(self, anode: Symbol, thermal: Scalar) -> tuple[Term, tuple[Share, ...]]:
        """The reverse branch, and the constant that makes it nil at v = 0."""
        current, reach = self.breakdown_current, self.breakdown_voltage / thermal
        term = Term(
            Kind.EXPONENTIAL,
            difference("to", anode, 1.0 / thermal),
            through("to", anode, current),
            offset=-reach,
        )
        return term, through("to", anode, current * np.expm1(-reach))
