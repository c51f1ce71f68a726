"""Macromodels of the op-amp and the comparator: rails are pins, and any nets may be rails.

The output current comes from an ideal source to gnd inside the model; the rail pins `high` and `low` are looked at and carry no
current, but for an open collector, whose current flows from `out` to `low`.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

import numpy as np

from loopsim.devices.contribution import (
    GROUND,
    Branch,
    Contribution,
    Entry,
    Share,
    Symbol,
    Term,
    Unknown,
    across,
)
from loopsim.devices.fields import Scalar, quantity, word
from loopsim.devices.phi import Kind
from loopsim.errors import CircuitError

STAGE = 1e-3  # S, transconductance of the input stage; only its ratio to what else enters the inner balance means anything
DECISION = 200.0  # V, gain times the input that swings a delayed comparator; well past any rail: nearly the stated delay
SHARPNESS = 50.0  # how steeply the sink of a delayed open collector follows the decision
COLLECTOR_SWING = 1.0  # V, gain times the input that swings an open collector


@dataclass(frozen=True, slots=True)
class _Output:
    """Where the inner balance stands. stage: the voltage that is driven; row: of its balance."""

    stage: Symbol
    row: Symbol
    unknown: Unknown
    conductance: tuple[Entry, ...]
    branch: Branch


def _output(output_resistance: Scalar) -> _Output:
    """Without a resistance `out` itself is the driven voltage and the current into it is free; with one an inner voltage is
    driven."""
    if output_resistance is None:
        entry: Entry = ("out", "output_current", -1.0)
        return _Output(
            "out",
            "output_current",
            Unknown("output_current", "A"),
            (entry,),
            Branch(GROUND, "out", "voltage", True),
        )
    g = 1.0 / output_resistance
    entries: tuple[Entry, ...] = (("out", "out", g), ("out", "stage", -g))
    return _Output("stage", "stage", Unknown("stage", "A"), entries, Branch(GROUND, "out", "conductance"))


def _clamps(at: _Output, knee: Scalar, ratio: Scalar, above: Scalar, below: Scalar) -> tuple[Term, ...]:
    """Currents out of the inner node beyond high - above and below low + below: g k ln(1 + exp(v / k)), g = ratio * STAGE."""
    per_volt = 1.0 / knee
    weight = ratio * STAGE * knee
    return (
        Term(
            Kind.SOFTPLUS,
            ((at.stage, per_volt), ("high", -per_volt)),
            ((at.row, weight),),
            offset=above / knee,
        ),
        Term(
            Kind.SOFTPLUS,
            (("low", per_volt), (at.stage, -per_volt)),
            ((at.row, -weight),),
            offset=below / knee,
        ),
    )


def _input(
    offset: Scalar, bias: Scalar, resistance: Scalar, capacitance: Scalar
) -> tuple[tuple[Entry, ...], tuple[Entry, ...], tuple[Share, ...], tuple[Branch, ...]]:
    """G, C, s and branches of the two input pins; bias flows into both."""
    branches = [Branch("plus", GROUND, "sense"), Branch("minus", GROUND, "sense")]
    if resistance is not None:
        branches.append(Branch("plus", "minus", "conductance"))
    if capacitance is not None:
        branches.append(Branch("plus", "minus", "capacitance"))
    return (
        () if resistance is None else across("plus", "minus", 1.0 / resistance),
        () if capacitance is None else across("plus", "minus", capacitance),
        () if bias is None else (("plus", -bias), ("minus", -bias)),
        tuple(branches),
    )


_RAILS = (Branch("high", GROUND, "sense"), Branch("low", GROUND, "sense"))


@dataclass(frozen=True)
class OpAmp:
    """An input stage drives an inner node z with a capacitance, clamped at the rails, which drives `out` (common practice):

    (1 / (2 pi f_1)) dz/dt = v_d - z / A - r k softplus((z - high + headroom) / k) + r k softplus((low + headroom - z) / k),

    v_d = plus - minus + input_offset, A = gain, softplus(u) = ln(1 + exp(u)), k = knee, r = clamp_ratio, f_1 =
    gain_bandwidth; without it there is no dynamics. Where slew_rate S is given, v_d - z / A is replaced by L tanh((v_d - z /
    A) / L), L = S / (2 pi f_1), so that dz/dt is at most S; the gain at rest stays A. out = z, or z through
    output_resistance. The clamps let z past a rail by overdrive / r at most, and round the corner: where a loop with
    feedback share b turns over, z is short of it by about k ln(r / b).
    """

    pins: ClassVar[tuple[str, ...]] = ("plus", "minus", "out", "high", "low")
    polarised: ClassVar[bool] = True

    gain: Scalar = quantity("", 1e-3, 1e12, "open-loop voltage gain at DC", 1e5)
    gain_bandwidth: Scalar = quantity("Hz", 1e-3, 1e15, "gain-bandwidth product")
    slew_rate: Scalar = quantity("V/s", 1e-3, 1e15, "fastest change of the output; needs gain_bandwidth")
    output_resistance: Scalar = quantity(
        "ohm", 1e-9, 1e9, "from the inner stage to `out`; an ideal output without"
    )
    headroom: Scalar = quantity("V", -10.0, 1e3, "how far the output stays from both rails", 0.0)
    headroom_high: Scalar = quantity("V", -10.0, 1e3, "how far it stays below `high`; headroom unless given")
    headroom_low: Scalar = quantity("V", -10.0, 1e3, "how far it stays above `low`; headroom unless given")
    input_offset: Scalar = quantity("V", -1e3, 1e3, "voltage that adds to plus - minus")
    input_bias: Scalar = quantity("A", -1.0, 1.0, "current into each input")
    input_resistance: Scalar = quantity("ohm", 1e-3, 1e18, "resistance between the inputs")
    input_capacitance: Scalar = quantity("F", 0.0, 1.0, "capacitance between the inputs")
    knee: Scalar = quantity("V", 1e-6, 10.0, "softness of the rail clamps", 1e-3)
    clamp_ratio: Scalar = quantity(
        "", 1.0, 1e9, "conductance of a clamp over the transconductance of the input stage", 1000.0
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        if self.slew_rate is not None and self.gain_bandwidth is None:
            hint = "give gain_bandwidth, or leave slew_rate out"
            raise CircuitError("field-missing", "a slew_rate needs a gain_bandwidth", hint=hint)
        at = _output(self.output_resistance)
        conductance, capacitance, source, branches = _input(
            self.input_offset, self.input_bias, self.input_resistance, self.input_capacitance
        )
        conductance += at.conductance
        above = self.headroom if self.headroom_high is None else self.headroom_high
        below = self.headroom if self.headroom_low is None else self.headroom_low
        terms = _clamps(at, self.knee, self.clamp_ratio, above, below)
        if self.gain_bandwidth is not None:
            capacitance += ((at.row, at.stage, STAGE / (2.0 * np.pi * self.gain_bandwidth)),)
        if self.slew_rate is None:
            conductance += (
                (at.row, at.stage, STAGE / self.gain),
                (at.row, "plus", -STAGE),
                (at.row, "minus", STAGE),
            )
            if self.input_offset is not None:
                source += ((at.row, STAGE * self.input_offset),)
        else:
            reach = self.slew_rate / (2.0 * np.pi * self.gain_bandwidth)
            control: tuple[Share, ...] = (
                ("plus", 1.0 / reach),
                ("minus", -1.0 / reach),
                (at.stage, -1.0 / (self.gain * reach)),
            )
            offset = 0.0 if self.input_offset is None else self.input_offset / reach
            terms = (Term(Kind.SATURATION, control, ((at.row, -STAGE * reach),), offset=offset), *terms)
        return Contribution(
            (at.unknown,),
            conductance,
            capacitance,
            source,
            terms=terms,
            branches=(*branches, *_RAILS, at.branch),
        )


@dataclass(frozen=True)
class Comparator:
    """Decides plus > minus. Output `push_pull`: as the op-amp without dynamics of its own. Output `open_collector`: from
    `out` to `low` a conductance (1 - d) / (2 sink_resistance), d = tanh(gain v_d / 1 V), v_d = plus - minus + input_offset;
    nothing drives it up.

    propagation_delay t_p puts a decision y between: tau dy/dt = tanh(...) - y, tau = t_p / ln 2, so that a full swing of the
    input passes y = 0 after t_p; push_pull: tanh(gain v_d / 200 V) and an output gain of 200 V, so that gain is kept and the
    rails are reached at |y| of a few hundredths; open_collector: d = tanh(50 y), y following tanh(gain v_d / 50 V) (own;
    from common practice).
    """

    pins: ClassVar[tuple[str, ...]] = ("plus", "minus", "out", "high", "low")
    polarised: ClassVar[bool] = True

    gain: Scalar = quantity(
        "", 1e-3, 1e12, "open-loop voltage gain (open collector: slope of the decision, per volt)", 1e5
    )
    propagation_delay: Scalar = quantity(
        "s", 1e-15, 1e3, "from the crossing of the inputs to the change of the output"
    )
    output: str = word(("push_pull", "open_collector"), "what drives `out`")
    output_resistance: Scalar = quantity("ohm", 1e-9, 1e9, "of a push_pull output; an ideal output without")
    sink_resistance: Scalar = quantity(
        "ohm", 1e-6, 1e9, "from `out` to `low` when an open collector is on", 50.0
    )
    input_offset: Scalar = quantity("V", -1e3, 1e3, "voltage that adds to plus - minus")
    input_bias: Scalar = quantity("A", -1.0, 1.0, "current into each input")
    input_resistance: Scalar = quantity("ohm", 1e-3, 1e18, "resistance between the inputs")
    input_capacitance: Scalar = quantity("F", 0.0, 1.0, "capacitance between the inputs")
    headroom: Scalar = quantity("V", -10.0, 1e3, "how far a push_pull output stays from both rails", 0.0)
    knee: Scalar = quantity("V", 1e-6, 10.0, "softness of the rail clamps of a push_pull output", 1e-3)
    clamp_ratio: Scalar = quantity(
        "", 1.0, 1e9, "conductance of a clamp over the transconductance of the input stage", 1000.0
    )

    def contribution(self, ambient: Scalar) -> Contribution:
        if self.output == "open_collector":
            return self._open_collector()
        at = _output(self.output_resistance)
        conductance, capacitance, source, branches = self._inputs
        conductance += (*at.conductance, (at.row, at.stage, STAGE / self.gain))
        terms = _clamps(at, self.knee, self.clamp_ratio, self.headroom, self.headroom)
        unknowns: tuple[Unknown, ...] = (at.unknown,)
        if self.propagation_delay is None:
            conductance += ((at.row, "plus", -STAGE), (at.row, "minus", STAGE))
            if self.input_offset is not None:
                source += ((at.row, STAGE * self.input_offset),)
        else:
            reach = DECISION / self.gain
            unknowns += (Unknown("decision", "1"),)
            conductance += ((at.row, "decision", -STAGE * reach), ("decision", "decision", 1.0))
            capacitance += (("decision", "decision", self.propagation_delay / np.log(2.0)),)
            terms = (self._decide(reach, "decision", -1.0), *terms)
        return Contribution(
            unknowns, conductance, capacitance, source, terms=terms, branches=(*branches, *_RAILS, at.branch)
        )

    @property
    def _inputs(self) -> tuple[tuple[Entry, ...], tuple[Entry, ...], tuple[Share, ...], tuple[Branch, ...]]:
        return _input(self.input_offset, self.input_bias, self.input_resistance, self.input_capacitance)

    def _decide(self, reach: Scalar, row: Symbol, weight: Scalar) -> Term:
        """weight * tanh(v_d / reach) in a row."""
        control: tuple[Share, ...] = (("plus", 1.0 / reach), ("minus", -1.0 / reach))
        offset = 0.0 if self.input_offset is None else self.input_offset / reach
        return Term(Kind.SATURATION, control, ((row, weight),), offset=offset)

    def _open_collector(self) -> Contribution:
        conductance, capacitance, source, branches = self._inputs
        half = 0.5 / self.sink_resistance
        conductance += across("out", "low", half)
        factor: tuple[Share, ...] = (("out", 1.0), ("low", -1.0))
        outputs: tuple[Share, ...] = (("out", -half), ("low", half))
        unknowns: tuple[Unknown, ...] = ()
        if self.propagation_delay is None:
            decide = self._decide(COLLECTOR_SWING / self.gain, "out", 1.0)
            terms: tuple[Term, ...] = (
                Term(Kind.SATURATION, decide.control, outputs, decide.offset, factor, factor_offset=0.0),
            )
        else:
            unknowns = (Unknown("decision", "1"),)
            conductance += (("decision", "decision", 1.0),)
            capacitance += (("decision", "decision", self.propagation_delay / np.log(2.0)),)
            follow: tuple[Share, ...] = (("decision", SHARPNESS),)
            terms = (
                self._decide(SHARPNESS * COLLECTOR_SWING / self.gain, "decision", -1.0),
                Term(Kind.SATURATION, follow, outputs, 0.0, factor, factor_offset=0.0),
            )
        branches = (*branches, Branch("high", GROUND, "sense"), Branch("out", "low", "conductance"))
        return Contribution(unknowns, conductance, capacitance, source, terms=terms, branches=branches)
