"""Linear parts and static curves with two pins, `from` and `to`."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from loopsim.devices.contribution import (
    Branch,
    Contribution,
    Term,
    Unknown,
    across,
    branch_entries,
    difference,
    through,
)
from loopsim.devices.curves import CurveValues, everywhere
from loopsim.devices.fields import Scalar, named, needed, quantity
from loopsim.devices.thermal import REFERENCE
from loopsim.errors import CircuitError

TWO = ("from", "to")


@dataclass(frozen=True)
class Resistor:
    """i = v / R, R = resistance (1 + temperature_coefficient (ambient - 25 degC)). Ohm's law; the linear coefficient is
    common practice."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = False

    resistance: Scalar = needed("ohm", 1e-9, 1e18, "resistance at 25 degC")
    temperature_coefficient: Scalar = quantity(
        "1/K", -0.1, 0.1, "relative change of the resistance per kelvin"
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        resistance = self.resistance
        if self.temperature_coefficient is not None:
            drift = 1.0 + self.temperature_coefficient * (ambient - REFERENCE)
            if not everywhere(drift > 0.0):
                text = "the temperature coefficient turns the resistance negative at this temperature"
                raise CircuitError("field-range", text, hint="a linear coefficient holds near 25 degC only")
            resistance = resistance * drift
        return Contribution(
            conductance=across("from", "to", 1.0 / resistance),
            branches=(Branch("from", "to", "conductance"),),
        )


@dataclass(frozen=True)
class Conductance:
    """i = g v. Ohm's law."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = False

    conductance: Scalar = needed("S", 0.0, 1e12, "conductance")

    def contribution(self, ambient: Scalar) -> Contribution:
        return Contribution(
            conductance=across("from", "to", self.conductance),
            branches=(Branch("from", "to", "conductance"),),
        )


@dataclass(frozen=True)
class Capacitor:
    """i = C dv/dt; open at DC."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = False

    capacitance: Scalar = needed("F", 0.0, 1e6, "capacitance")

    def contribution(self, ambient: Scalar) -> Contribution:
        return Contribution(
            capacitance=across("from", "to", self.capacitance),
            branches=(Branch("from", "to", "capacitance"),),
        )


@dataclass(frozen=True)
class Inductor:
    """v = L di/dt (and what couplings add); a short circuit at DC. Its current is an unknown."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = False

    inductance: Scalar = needed("H", 1e-18, 1e6, "inductance")

    def contribution(self, ambient: Scalar) -> Contribution:
        # L di/dt - (v_from - v_to) = 0: with this sign C is positive semidefinite
        return Contribution(
            unknowns=(Unknown("current", "V"),),
            conductance=branch_entries("from", "to"),
            capacitance=(("current", "current", self.inductance),),
            branches=(Branch("from", "to", "voltage"),),
        )


@dataclass(frozen=True)
class CurveConductance:
    """i = f(v): a static curve, polynomial through the origin or piecewise linear."""

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = True

    curve: CurveValues = named("curve", "current over voltage, in V and A")

    def contribution(self, ambient: Scalar) -> Contribution:
        term = Term(
            self.curve.kind, difference("from", "to"), through("from", "to"), parameters=self.curve.parameters
        )
        return Contribution(terms=(term,), branches=(Branch("from", "to", "conductance"),))
