"""Bipolar and field-effect transistors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from loopsim.devices.contribution import Branch, Contribution, Entry, Share, Term, Unknown, across
from loopsim.devices.fields import Scalar, quantity
from loopsim.devices.phi import Kind
from loopsim.devices.thermal import REFERENCE, saturation_factor, temperature_ratio, thermal_voltage


@dataclass(frozen=True)
class BipolarNpn:
    """Ebers-Moll in transport form (J. J. Ebers, J. L. Moll 1954; transport form from memory), per polarity p = +1 for npn,
    -1 for pnp:

    I_F = I_S (exp(p v_BE / (n V_T)) - 1), I_R = I_S (exp(p v_BC / (n V_T)) - 1),
    i_C = p ((I_F - I_R) m - I_R / B_R), i_B = p (I_F / B_F + I_R / B_R), i_E = -(i_C + i_B),
    with m = 1, or m = 1 - p v_BC / V_A where early_voltage V_A is given (J. M. Early 1952, linear form, from memory).
    Charges: constant capacitances, and transit_time * I_F between base and emitter. The gains hold at every temperature.
    """

    pins: ClassVar[tuple[str, ...]] = ("collector", "base", "emitter")
    polarised: ClassVar[bool] = True
    polarity: ClassVar[float] = 1.0

    saturation_current: Scalar = quantity("A", 1e-40, 1.0, "transport saturation current at 25 degC", 1e-14)
    forward_gain: Scalar = quantity("", 1e-3, 1e9, "collector over base current, forward", 100.0)
    reverse_gain: Scalar = quantity(
        "", 1e-6, 1e9, "emitter over base current with collector and emitter exchanged", 1.0
    )
    ideality: Scalar = quantity("", 0.5, 10.0, "ideality factor of both junctions", 1.0)
    early_voltage: Scalar = quantity("V", 0.1, 1e9, "Early voltage")
    base_emitter_capacitance: Scalar = quantity(
        "F", 0.0, 1.0, "capacitance between base and emitter, taken as constant"
    )
    base_collector_capacitance: Scalar = quantity(
        "F", 0.0, 1.0, "capacitance between base and collector, taken as constant"
    )
    transit_time: Scalar = quantity("s", 0.0, 1.0, "charge stored in the base over forward transport current")
    bandgap_voltage: Scalar = quantity(
        "V", 0.1, 10.0, "activation energy of the saturation current over e", 1.12
    )
    saturation_exponent: Scalar = quantity(
        "", -20.0, 20.0, "power of the absolute temperature in the saturation current", 3.0
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        p = self.polarity
        per_volt = p / (self.ideality * thermal_voltage(ambient))
        saturation = self.saturation_current * saturation_factor(
            ambient, self.bandgap_voltage, self.saturation_exponent, self.ideality
        )
        forward: tuple[Share, ...] = (("base", per_volt), ("emitter", -per_volt))
        reverse: tuple[Share, ...] = (("base", per_volt), ("collector", -per_volt))
        transport = p * saturation
        base_forward, base_reverse = transport / self.forward_gain, transport / self.reverse_gain
        unknowns: tuple[Unknown, ...] = ()
        conductance: tuple[Entry, ...] = ()
        capacitance: tuple[Entry, ...] = ()
        diffusion: tuple[Share, ...] = ()
        if self.transit_time is not None:
            # d = I_F as an unknown keeps the stored charge linear
            unknowns = (Unknown("diffusion_current", "A"),)
            conductance = (("diffusion_current", "diffusion_current", 1.0),)
            diffusion = (("diffusion_current", -saturation),)
            charge = p * self.transit_time
            capacitance = (("base", "diffusion_current", charge), ("emitter", "diffusion_current", -charge))
        if self.base_emitter_capacitance is not None:
            capacitance += across("base", "emitter", self.base_emitter_capacitance)
        if self.base_collector_capacitance is not None:
            capacitance += across("base", "collector", self.base_collector_capacitance)
        terms: tuple[Term, ...]
        if self.early_voltage is None:
            terms = (
                Term(
                    Kind.EXPONENTIAL,
                    forward,
                    (
                        ("collector", transport),
                        ("base", base_forward),
                        ("emitter", -transport - base_forward),
                        *diffusion,
                    ),
                ),
                Term(
                    Kind.EXPONENTIAL,
                    reverse,
                    (
                        ("collector", -transport - base_reverse),
                        ("base", base_reverse),
                        ("emitter", transport),
                    ),
                ),
            )
        else:
            rise: tuple[Share, ...] = (
                ("base", -p / self.early_voltage),
                ("collector", p / self.early_voltage),
            )
            terms = (
                Term(
                    Kind.EXPONENTIAL,
                    forward,
                    (("collector", transport), ("emitter", -transport)),
                    factor=rise,
                ),
                Term(
                    Kind.EXPONENTIAL,
                    reverse,
                    (("collector", -transport), ("emitter", transport)),
                    factor=rise,
                ),
                Term(
                    Kind.EXPONENTIAL,
                    forward,
                    (("base", base_forward), ("emitter", -base_forward), *diffusion),
                ),
                Term(Kind.EXPONENTIAL, reverse, (("base", base_reverse), ("collector", -base_reverse))),
            )
        branches = (
            Branch("base", "emitter", "conductance"),
            Branch("base", "collector", "conductance"),
            Branch("collector", "emitter", "conductance"),
        )
        return Contribution(unknowns, conductance, capacitance, terms=terms, branches=branches)


@dataclass(frozen=True)
class BipolarPnp(BipolarNpn):
    """The npn's law with every voltage and current reversed; its parameters are positive numbers all the same."""

    polarity: ClassVar[float] = -1.0


@dataclass(frozen=True)
class MosfetN:
    """Charge-sheet interpolation between weak and strong inversion, symmetric in drain and source, per polarity p = +1 (n)
    or -1 (p):

    i_D = p I_0 (F(f) (1 + p lambda v_DS) - F(r) (1 - p lambda v_DS)), F(u) = ln(1 + exp(u / 2))^2, I_0 = 2 n K V_T^2,
    f = (v_P - p v_SB) / V_T, r = (v_P - p v_DB) / V_T, v_P = (p v_GB - V_th) / n, K = transconductance, n = slope_factor
    (C. C. Enz, F. Krummenacher, E. A. Vittoz 1995, from memory). In strong inversion and saturation i_D = K (v_GS - V_th)^2
    / (2 n) with source at body. Gate and body carry no current. The channel's modulation takes part in both directions, so that
    exchanging drain and source turns the current round exactly.
    """

    pins: ClassVar[tuple[str, ...]] = ("drain", "gate", "source", "body")
    polarised: ClassVar[bool] = True
    polarity: ClassVar[float] = 1.0

    threshold: Scalar = quantity(
        "V", -100.0, 100.0, "gate voltage at which the channel forms; positive if off at 0 V", 0.7
    )
    transconductance: Scalar = quantity(
        "A/V^2", 1e-15, 1e6, "mobility, oxide capacitance, width over length multiplied", 1e-3
    )
    slope_factor: Scalar = quantity("", 1.0, 10.0, "gate voltage over channel voltage in weak inversion", 1.3)
    channel_modulation: Scalar = quantity(
        "1/V", 0.0, 10.0, "relative rise of the current per volt of drain voltage"
    )
    gate_source_capacitance: Scalar = quantity(
        "F", 0.0, 1.0, "capacitance between gate and source, taken as constant"
    )
    gate_drain_capacitance: Scalar = quantity(
        "F", 0.0, 1.0, "capacitance between gate and drain, taken as constant"
    )
    threshold_drift: Scalar = quantity(
        "V/K", -0.1, 0.1, "change of the threshold per kelvin, mostly negative"
    )
    mobility_exponent: Scalar = quantity(
        "", -10.0, 10.0, "transconductance falls with this power of the absolute temperature"
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        p, n = self.polarity, self.slope_factor
        thermal = thermal_voltage(ambient)
        threshold, transconductance = self.threshold, self.transconductance
        if self.threshold_drift is not None:
            threshold = threshold + self.threshold_drift * (ambient - REFERENCE)
        if self.mobility_exponent is not None:
            transconductance = transconductance * temperature_ratio(ambient) ** (-self.mobility_exponent)
        specific = p * (2.0 * n * transconductance * thermal * thermal)
        gate, body, channel = p / (n * thermal), p * (1.0 - 1.0 / n) / thermal, p / thermal
        offset = -threshold / (n * thermal)
        rise: tuple[Share, ...] = ()
        fall: tuple[Share, ...] = ()
        if self.channel_modulation is not None:
            slope = p * self.channel_modulation
            rise = (("drain", slope), ("source", -slope))
            fall = (("drain", -slope), ("source", slope))
        terms = (
            Term(
                Kind.CHARGE_SHEET,
                (("gate", gate), ("body", body), ("source", -channel)),
                (("drain", specific), ("source", -specific)),
                offset=offset,
                factor=rise,
            ),
            Term(
                Kind.CHARGE_SHEET,
                (("gate", gate), ("body", body), ("drain", -channel)),
                (("drain", -specific), ("source", specific)),
                offset=offset,
                factor=fall,
            ),
        )
        capacitance: tuple[Entry, ...] = ()
        coupled: tuple[Branch, ...] = ()
        if self.gate_source_capacitance is not None:
            capacitance += across("gate", "source", self.gate_source_capacitance)
            coupled += (Branch("gate", "source", "capacitance"),)
        if self.gate_drain_capacitance is not None:
            capacitance += across("gate", "drain", self.gate_drain_capacitance)
            coupled += (Branch("gate", "drain", "capacitance"),)
        branches = (
            Branch("drain", "source", "conductance"),
            Branch("gate", "source", "sense"),
            Branch("body", "source", "sense"),
        )
        return Contribution(capacitance=capacitance, terms=terms, branches=branches + coupled)


@dataclass(frozen=True)
class MosfetP(MosfetN):
    """The n-channel law with every voltage and current reversed; its parameters are positive numbers all the same."""

    polarity: ClassVar[float] = -1.0
