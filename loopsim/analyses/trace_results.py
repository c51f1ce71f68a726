"""What a trace found: branches, folds, points of changing stability, thresholds, and what was proved about them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Branch:
    """One connected curve. values: (k,) of the let; x: (k, n); nets: name to (k,) volts; stable: (k,) True, False or None; lengths: (k,)
    arclength, scaled; closed: it comes back to its start."""

    values: Array
    x: Array
    nets: Mapping[str, Array]
    stable: tuple[bool | None, ...]
    lengths: Array
    closed: bool

    def to_dict(self, watch: Sequence[str]) -> dict[str, Any]:
        """The JSON form."""
        return {
            "values": self.values.tolist(),
            "nets": {net: self.nets[net].tolist() for net in watch if net in self.nets},
            "stable": list(self.stable),
            "arclength": self.lengths.tolist(),
            "closed": self.closed,
        }


@dataclass(frozen=True, eq=False)
class Fold:
    """A turning point. at: value of the let; nets: volts there; direction: "rising" where the curve ends for a rising let, else "falling";
    precision: of `at`, relative to the range; from_stable: one side of it is stable, or may be
    (undecided beside the fold), so that a circuit can sit there until it jumps;
    lands: volts after the jump, None where there is none; landing: x there; direction_of_curve: (n,) along the curve there."""

    at: float
    nets: Mapping[str, float]
    direction: str
    precision: float
    from_stable: bool
    lands: Mapping[str, float] | None
    x: Array
    landing: Array | None = None
    branch: int = 0
    direction_of_curve: Array = field(default_factory=lambda: np.zeros(0))

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {
            "at": self.at, "nets": dict(self.nets), "direction": self.direction, "precision": self.precision,
            "from_stable": self.from_stable, "lands": dict(self.lands) if self.lands is not None else None,
        }  # fmt: skip


@dataclass(frozen=True, eq=False)
class Crossing:
    """Where the stability changes without a fold. kind: "hopf" (a pair of eigenvalues crosses: frequency [Hz]) or "branch point" (two
    branches cross). precision: relative to the range."""

    kind: str
    at: float
    nets: Mapping[str, float]
    frequency: float | None
    precision: float

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {
            "at": self.at,
            "nets": dict(self.nets),
            "frequency": self.frequency,
            "precision": self.precision,
        }


@dataclass(frozen=True, eq=False)
class Thresholds:
    """Values of the let at which a net jumps when the let rises slowly from the low end, falls slowly from the high end; hysteresis: their
    distance. None where it never jumps that way. all_rising, all_falling: every jump on the way."""

    rising: float | None
    falling: float | None
    all_rising: tuple[float, ...] = ()
    all_falling: tuple[float, ...] = ()

    @property
    def hysteresis(self) -> float | None:
        return self.rising - self.falling if self.rising is not None and self.falling is not None else None

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {"rising": self.rising, "falling": self.falling, "hysteresis": self.hysteresis}


@dataclass(frozen=True, eq=False)
class Trace:
    """The characteristic of a circuit along a let.

    complete_at: values of the let at which the states were proved complete and all lie on the branches. over_range: proved for every
    value of the let. gaps: where that proof ran to its end but could not settle these intervals. notes: doubts. box: all of this holds for
    nets within +/- box [V].
    """

    circuit: str
    file: str | None
    along: str
    unit: str
    low: float
    high: float
    settings: Mapping[str, float]
    watch: tuple[str, ...]
    branches: tuple[Branch, ...]
    folds: tuple[Fold, ...]
    crossings: tuple[Crossing, ...]
    per_net: Mapping[str, Thresholds]
    counts: tuple[tuple[float, int], ...]
    complete_at: tuple[float, ...]
    stations: tuple[float, ...]
    over_range: bool
    gaps: tuple[tuple[float, float], ...]
    seconds: float
    notes: tuple[str, ...] = ()
    scale: Array = field(default_factory=lambda: np.zeros(0))
    box: float = 1e3

    @property
    def hopf(self) -> tuple[Crossing, ...]:
        """Points at which a growing oscillation appears or goes."""
        return tuple(c for c in self.crossings if c.kind == "hopf")

    @property
    def complete(self) -> bool:
        """Proved complete at both ends and at every station."""
        return len(self.complete_at) == len(self.stations)

    def thresholds(self, net: str) -> Thresholds:
        """Where a net jumps; KeyError for a net the circuit has not."""
        return self.per_net[net]

    def plot(self, path: str, nets: Sequence[str] = (), *, versus: str | None = None, overlay: Any = None) -> None:
        """Draw the nets (the watched ones) over the let, or over the net `versus`, into a file; the suffix decides: svg, png, pdf.

        overlay: measured points, as `loopsim.output.overlay.read_overlay` gives them. MissingExtra without matplotlib.
        """
        from loopsim.output.plots_trace import plot_trace

        plot_trace(self, path, tuple(nets), versus, overlay)

    def to_dataframe(self) -> Any:
        """One row a point: branch, arclength, the let, stable, then every net [V]. Needs pandas."""
        from loopsim.output.frames import trace_frame

        return trace_frame(self)

    def __repr__(self) -> str:
        return f"Trace({self.circuit} along {self.along}: {len(self.branches)} branches, {len(self.folds)} folds)"

    def __str__(self) -> str:
        """The answer as `loopsim trace` prints it."""
        from loopsim.output.trace_text import trace_text

        return trace_text(self).rstrip("\n")

    def _repr_html_(self) -> str:
        from html import escape

        return f"<pre>{escape(str(self))}</pre>"

    def to_dict(self) -> dict[str, Any]:
        """The JSON form, without the frame that every verb shares."""
        return {
            "along": self.along,
            "unit": self.unit,
            "range": [self.low, self.high],
            "branches": [branch.to_dict(self.watch) for branch in self.branches],
            "folds": [found.to_dict() for found in self.folds],
            "hopf": [c.to_dict() for c in self.hopf],
            "branch_points": [c.to_dict() for c in self.crossings if c.kind == "branch point"],
            "thresholds": {net: self.per_net[net].to_dict() for net in self.watch if net in self.per_net},
            "complete_at": list(self.complete_at),
            "stations": list(self.stations),
            "over_range": self.over_range,
            "gaps": [list(gap) for gap in self.gaps],
            "box": self.box,
            "seconds": self.seconds,
            "notes": list(self.notes),
        }
