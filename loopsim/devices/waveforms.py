"""Sources in time: value at a time and the times at which it has corners, which an integrator must hit.

Fields may be arrays of shape (batch,); values then have that shape too. Before `delay` a waveform rests at its starting value.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, ClassVar

import numpy as np

from loopsim.devices.curves import everywhere
from loopsim.devices.fields import FieldSpec, Scalar, needed, quantity, specs_of
from loopsim.errors import CircuitError

LARGEST = 1e12  # V or A; a source beyond that is a slip of the pen
LONGEST = 1e12  # s
SHORTEST = 1e-18  # s
MAX_CORNERS = 1_000_000  # of one waveform over one transient


def _times(values: Iterable[Any], start: float, end: float) -> list[float]:
    """The distinct ones within [start, end], ascending."""
    found = np.unique(np.concatenate([np.ravel(np.asarray(v, dtype=float)) for v in values] or [np.zeros(0)]))
    return [float(t) for t in found if start <= t <= end]


def _rise(t: Scalar, duration: Scalar) -> Scalar:
    """0 before 0, 1 after `duration`, straight between."""
    return np.minimum(np.maximum(t / duration, 0.0), 1.0)


@dataclass(frozen=True, eq=False)
class Sine:
    """offset + amplitude sin(2 pi frequency (t - delay) + phase); before `delay` its value at `delay`."""

    amplitude: Scalar = needed("signal", -LARGEST, LARGEST, "peak value")
    frequency: Scalar = needed("Hz", 0.0, 1e18, "cycles per second")
    offset: Scalar = quantity("signal", -LARGEST, LARGEST, "mean value", 0.0)
    phase: Scalar = quantity("", -1e6, 1e6, "phase at the delay, in radians", 0.0)
    delay: Scalar = quantity("s", 0.0, LONGEST, "when it begins to move", 0.0)

    def value(self, t: float) -> Scalar:
        angle = 2.0 * np.pi * self.frequency * np.maximum(t - self.delay, 0.0) + self.phase
        return self.offset + self.amplitude * np.sin(angle)

    def corners(self, start: float, end: float) -> list[float]:
        return _times([self.delay], start, end)


@dataclass(frozen=True, eq=False)
class Square:
    """From `low` up to `high` within `rise`, there for `width`, back within `fall`, every `period`; the first rise begins at
    `delay`."""

    high: Scalar = needed("signal", -LARGEST, LARGEST, "upper value")
    period: Scalar = needed("s", SHORTEST, LONGEST, "from one rise to the next")
    low: Scalar = quantity("signal", -LARGEST, LARGEST, "lower value", 0.0)
    width: Scalar = quantity(
        "s", 0.0, LONGEST, "time at the upper value; unless given, rise and fall lie half a period apart"
    )
    rise: Scalar = quantity(
        "s", SHORTEST, LONGEST, "duration of the rise; a thousandth of the period unless given"
    )
    fall: Scalar = quantity(
        "s", SHORTEST, LONGEST, "duration of the fall; a thousandth of the period unless given"
    )
    delay: Scalar = quantity("s", 0.0, LONGEST, "when the first rise begins", 0.0)

    def __post_init__(self) -> None:
        rise, width, fall = self.shape
        if not everywhere(rise + width + fall <= self.period * (1.0 + 1e-12)) or not everywhere(width >= 0.0):
            raise CircuitError(
                "waveform-times",
                "rise, width and fall of a square wave take longer than its period",
                hint="lengthen the period",
            )

    @property
    def shape(self) -> tuple[Scalar, Scalar, Scalar]:
        """Rise, width at the top, fall [s]."""
        rise = self.period / 1000.0 if self.rise is None else self.rise
        fall = self.period / 1000.0 if self.fall is None else self.fall
        width = 0.5 * self.period - 0.5 * (rise + fall) if self.width is None else self.width
        return rise, width, fall

    def value(self, t: float) -> Scalar:
        rise, width, fall = self.shape
        since = t - self.delay
        # before the delay nothing has risen; a time of 0 within the period says just that
        within = np.maximum(since, 0.0) - self.period * np.floor(np.maximum(since, 0.0) / self.period)
        share = _rise(within, rise) - _rise(within - rise - width, fall)
        return self.low + (self.high - self.low) * share

    def corners(self, start: float, end: float) -> list[float]:
        rise, width, fall = self.shape
        offsets = (0.0 * self.period, rise, rise + width, rise + width + fall)
        first = np.maximum(np.floor((start - self.delay) / self.period), 0.0)
        count = float(np.max(np.maximum((end - self.delay) / self.period - first, -1.0))) + 2.0
        if 4.0 * count > MAX_CORNERS:
            raise CircuitError(
                "waveform-times",
                f"a square wave makes {4.0 * count:.0f} corners within this time",
                hint="shorten the run",
            )
        cycles = np.arange(max(0, int(count)))
        starts = (
            np.asarray(self.delay + first * self.period)[..., None]
            + cycles * np.asarray(self.period)[..., None]
        )
        return _times([starts + np.asarray(offset)[..., None] for offset in offsets], start, end)


@dataclass(frozen=True, eq=False)
class Ramp:
    """From `from` to `to` along a straight line that begins at `start` and takes `duration`."""

    to: Scalar = needed("signal", -LARGEST, LARGEST, "last value")
    duration: Scalar = needed("s", SHORTEST, LONGEST, "how long the change takes")
    from_: Scalar = quantity("signal", -LARGEST, LARGEST, "first value", 0.0)
    start: Scalar = quantity("s", 0.0, LONGEST, "when the change begins", 0.0)

    def value(self, t: float) -> Scalar:
        return self.from_ + (self.to - self.from_) * _rise(t - self.start, self.duration)

    def corners(self, start: float, end: float) -> list[float]:
        return _times([self.start, self.start + self.duration], start, end)


@dataclass(frozen=True, eq=False)
class Points:
    """Straight lines through (times[j], values[j]), constant before the first and after the last. times ascend."""

    form: ClassVar[str] = "points"

    times: tuple[Scalar, ...]
    values: tuple[Scalar, ...]

    def __post_init__(self) -> None:
        if not self.times or len(self.times) != len(self.values):
            raise CircuitError(
                "waveform-times", "a waveform of points needs a time and a value for each point"
            )
        if not all(everywhere(a < b) for a, b in pairwise(self.times)):
            raise CircuitError(
                "waveform-times",
                "the points of a waveform must ascend in time",
                hint="a jump needs a short ramp",
            )

    def value(self, t: float) -> Scalar:
        total = self.values[0]
        for j in range(1, len(self.times)):
            gap = self.times[j] - self.times[j - 1]
            total = total + (self.values[j] - self.values[j - 1]) * _rise(t - self.times[j - 1], gap)
        return total

    def corners(self, start: float, end: float) -> list[float]:
        return _times(self.times, start, end)


WAVEFORMS: Mapping[str, type] = {"sine": Sine, "square": Square, "ramp": Ramp, "points": Points}


def waveform_specs(form: str) -> dict[str, FieldSpec]:
    """The fields of a waveform by its word; `points` has none, it is a list of pairs."""
    return {} if form == "points" else specs_of(WAVEFORMS[form])


def waveform(
    form: str, fields: Mapping[str, Scalar], points: Sequence[tuple[Scalar, Scalar]] = ()
) -> Sine | Square | Ramp | Points:
    """The waveform `form` with its numbers put in; `points`: (time, value) pairs of that form."""
    if form == "points":
        return Points(tuple(time for time, _ in points), tuple(value for _, value in points))
    given = {"from_" if name == "from" else name: value for name, value in fields.items()}
    found = WAVEFORMS[form](**given)
    assert isinstance(found, Sine | Square | Ramp)
    return found
