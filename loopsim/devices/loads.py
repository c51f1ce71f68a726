"""The switch and loads with a law of their own, pins `from` and `to`."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from loopsim.devices.contribution import (
    GROUND,
    Branch,
    Contribution,
    Entry,
    Share,
    Symbol,
    Term,
    Timed,
    Unknown,
    across,
    difference,
    through,
)
from loopsim.devices.fields import Scalar, named, quantity
from loopsim.devices.passive import TWO
from loopsim.devices.phi import Kind
from loopsim.devices.waveforms import LONGEST, SHORTEST, Ramp
from loopsim.errors import CircuitError

FULL = 20.0  # tanh(20) is 1 to the last digit: a timed switch is fully on or off outside its transitions


@dataclass(frozen=True)
class Switch:
    """i = (g_off + (g_on - g_off) (1 + t) / 2) v with t = tanh((v_control - threshold) / width): smooth between off and on.

    `control` names the net whose voltage closes the switch. Instead, close_time and open_time may be given: it then changes
    at those times, each within transition_time, and begins open if it closes first, else closed. Own law. The conductance
    off is exact to about 1e-16 of that on.
    """

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = False

    on_resistance: Scalar = quantity("ohm", 1e-9, 1e18, "resistance when closed", 1.0)
    off_resistance: Scalar = quantity("ohm", 1e-9, 1e18, "resistance when open", 1e9)
    control: str | None = named("net", "net whose voltage to gnd closes the switch above `threshold`")
    threshold: Scalar = quantity("V", -1e6, 1e6, "control voltage at which it is half closed", 1.0)
    width: Scalar = quantity("V", 1e-9, 1e6, "control voltage from half closed to 88 % closed", 0.05)
    close_time: Scalar = quantity("s", 0.0, LONGEST, "when it begins to close")
    open_time: Scalar = quantity("s", 0.0, LONGEST, "when it begins to open")
    transition_time: Scalar = quantity("s", SHORTEST, LONGEST, "duration of a timed change", 1e-6)

    def contribution(self, ambient: Scalar) -> Contribution:
        on, off = 1.0 / self.on_resistance, 1.0 / self.off_resistance
        middle, half = 0.5 * (on + off), 0.5 * (on - off)
        conductance: tuple[Entry, ...] = across("from", "to", middle)
        branches: tuple[Branch, ...] = (Branch("from", "to", "conductance"),)
        unknowns: tuple[Unknown, ...] = ()
        supply: tuple[Share, ...] = ()
        timed: tuple[Timed, ...] = ()
        control: tuple[Share, ...]
        offset: Scalar = 0.0
        if self.control is not None:
            if self.close_time is not None or self.open_time is not None:
                raise CircuitError(
                    "field-clash", "a switch has a control net or times, not both", hint="drop one of them"
                )
            net: Symbol = ("net", self.control)
            control, offset = ((net, 1.0 / self.width),), -self.threshold / self.width
            branches = (*branches, Branch(net, GROUND, "sense"))
        else:
            unknowns = (Unknown("control", "1"),)
            conductance = (*conductance, ("control", "control", 1.0))
            control = (("control", 1.0),)
            supply, timed = self._times()
        term = Term(
            Kind.SATURATION,
            control,
            through("from", "to", half),
            offset,
            difference("from", "to"),
            factor_offset=0.0,
        )
        return Contribution(
            unknowns, conductance, source=supply, terms=(term,), timed=timed, branches=branches
        )

    def _times(self) -> tuple[tuple[Share, ...], tuple[Timed, ...]]:
        """The control's value at time 0 and its changes: -FULL open, +FULL closed."""
        if self.close_time is None and self.open_time is None:
            text = "a switch needs a control net, a close_time or an open_time"
            raise CircuitError("field-missing", text, hint="control = NET, or close_time = 1 ms")
        starts: Scalar = 0.0
        changes = []
        if self.close_time is not None:
            changes.append(Ramp(2.0 * FULL, self.transition_time, 0.0, self.close_time))
        if self.open_time is not None:
            changes.append(Ramp(-2.0 * FULL, self.transition_time, 0.0, self.open_time))
        if self.close_time is None:
            starts = FULL
        elif self.open_time is None:
            starts = -FULL
        else:
            # closed at first where it opens before it closes
            starts = FULL - 2.0 * FULL * (self.close_time < self.open_time)
        row: tuple[Share, ...] = (("control", 1.0),)
        at_zero = starts
        for change in changes:
            at_zero = at_zero + change.value(0.0)
        return (("control", at_zero),), tuple(Timed(row, change) for change in changes)


@dataclass(frozen=True)
class ConstantPowerLoad:
    """i = P / v for v above dropout_voltage V_0; within, i = (P / V_0) (2 u - u^3), u = v / V_0, which joins it smoothly;
    odd in v.

    What a switching converter with a regulated output draws (common practice); the smooth foot is our own.
    """

    pins: ClassVar[tuple[str, ...]] = TWO
    polarised: ClassVar[bool] = False

    power: Scalar = quantity("W", 0.0, 1e12, "power drawn", 1.0)
    dropout_voltage: Scalar = quantity("V", 1e-3, 1e6, "voltage below which the power falls", 1.0)

    def contribution(self, ambient: Scalar) -> Contribution:
        term = Term(
            Kind.RECIPROCAL,
            difference("from", "to", 1.0 / self.dropout_voltage),
            through("from", "to", self.power / self.dropout_voltage),
        )
        return Contribution(terms=(term,), branches=(Branch("from", "to", "conductance"),))
