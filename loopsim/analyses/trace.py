"""The whole static characteristic over a let's range, through its folds, with what was proved about it.

States are proved at both ends and at stations between; from every one of them the curve is followed both ways; a proved state that lies on
no curve yet starts a new one (a closed loop between the ends is found that way). Folds are located by Newton on the fold equations, points
where a growing pair appears by the eigenvalues. For a let that is a quasi-static input, each jump is followed to where it lands. Last,
where the let only moves sources, the proof covers every value of the let at once.
"""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.states import watched
from loopsim.analyses.trace_curves import branch, curves, matching, more_curves, starts_of, strangers
from loopsim.analyses.trace_levels import levels_of, prove_range, states_at
from loopsim.analyses.trace_results import Branch, Crossing, Fold, Thresholds, Trace
from loopsim.analyses.trace_ride import thresholds, travel_of
from loopsim.analyses.trace_turns import crossings, folds
from loopsim.circuit import Circuit
from loopsim.equations.assemble import let_range, parameter_values
from loopsim.equations.structure import check
from loopsim.errors import CircuitError
from loopsim.numerics.curve import Curve

Array: TypeAlias = NDArray[np.float64]

STATIONS = 9
DEAD = 1e-9  # V: a circuit whose nets all stay below has nothing but rounding to measure by, and is measured in millivolts
ENDED = {"stuck": "no step along them succeeded", "time": "the budget was used up"}


def trace(
    circuit: Circuit,
    along: str,
    *,
    over: tuple[float, float] | None = None,
    watch: str | Sequence[str] | None = None,
    stations: int = STATIONS,
    box: float = 1e3,
    budget: float = 60.0,
    range_budget: float = 10.0,
    settings: Mapping[str, Any] | None = None,
) -> Trace:
    """The static characteristic along a let.

    over: range [SI of the let], by default the one it was given with `in`. watch: nets of interest. stations: values between the ends at
    which the states are proved. budget: wall time [s]; range_budget: what of it the proof over the range may take, 0 to leave that out.
    CircuitError for an unknown let or net, or a let without a range.
    """
    began = time.monotonic()
    deadline = began + budget
    check(circuit)
    low, high = _range(circuit, along, over, settings)
    family = Family(circuit, {k: v for k, v in (settings or {}).items() if k != along}, along, low, high)
    nets = _watch(circuit, watch)
    values = np.linspace(low, high, stations + 2)
    levels = levels_of(family, box)
    proved = states_at(family, levels, values, box, deadline)
    scale = _scale(family, [points.x for points in proved], high - low)
    index = {name: j for j, (kind, name) in enumerate(family.system(low).unknowns) if kind == "net"}
    lines = curves(family, starts_of(values, proved), (), scale, deadline)
    drawn = _drawn(family, lines, index, scale)
    matched, notes = matching(family, drawn.branches, values, proved, scale, box)
    covered = None
    until = min(deadline, time.monotonic() + range_budget)
    while levels is not None and len(matched) == len(values) and drawn.provable and time.monotonic() < until:
        covered = prove_range(family, levels, values, drawn.branches, drawn.folds, scale, until)
        # states that were proved on the way may lie on a closed curve between two stations, or on one from beyond the box
        if not lines:
            scale = _scale(family, [covered.x - covered.spread, covered.x + covered.spread], high - low)
        starts = strangers(drawn.branches, covered.x, covered.values, covered.inner, scale)
        more = more_curves(family, starts, lines, scale, deadline)
        if len(more) == len(lines):
            break
        lines, covered = more, None
        drawn = _drawn(family, lines, index, scale)
    # a stretch between stations may be missing from the branches although its states were proved to be there
    over_range = covered is not None and covered.complete and all(line.end not in ENDED for line in lines)
    for end, reason in ENDED.items():
        broken = sum(line.end == end for line in lines)
        if broken:
            notes.append(f"{broken} of {len(lines)} branches are not followed to their ends: {reason}")
    travel = {net: travel_of(drawn.branches, net) for net in index}
    per_net = thresholds(family, drawn.branches, drawn.folds, travel, scale)
    gaps = covered.gaps if covered is not None and covered.finished else ()
    parameter = circuit.parameters[along]
    return Trace(
        circuit.name, circuit.file, along, parameter.unit, low, high,
        {name: float(v) for name, v in parameter_values(circuit, settings).items()}, nets,
        drawn.branches, drawn.folds, drawn.crossings, per_net,
        tuple((float(v), len(p.x)) for v, p in zip(values, proved, strict=True)), tuple(float(v) for v in matched),
        tuple(float(v) for v in values), over_range, gaps, time.monotonic() - began, (*notes, *drawn.lost),
        scale, box,
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class _Drawn:
    """Branches with everything that was located on them. lost: a line for each turn that could not be located."""

    branches: tuple[Branch, ...]
    folds: tuple[Fold, ...]
    crossings: tuple[Crossing, ...]
    lost: tuple[str, ...]

    @property
    def provable(self) -> bool:
        """Whether a proof over the range can end: where branches cross no box closes, however small."""
        return not self.lost and all(c.kind != "branch point" for c in self.crossings)


def _drawn(family: Family, lines: Sequence[Curve], index: Mapping[str, int], scale: Array) -> _Drawn:
    branches = tuple(branch(family, curve, index) for curve in lines)
    others = crossings(family, branches, index, scale)
    turns, lost = folds(family, branches, [c for c in others if c.kind == "branch point"], index, scale)
    return _Drawn(branches, turns, others, lost)


def _range(
    circuit: Circuit, along: str, over: tuple[float, float] | None, settings: Mapping[str, Any] | None
) -> tuple[float, float]:
    found = over if over is not None else let_range(circuit, along, settings)
    if found is None:
        parameter = circuit.parameters[along]
        raise CircuitError(
            "let-range",
            f"the let `{along}` has no range",
            parameter.span,
            f"write `let {along} = ... in LO .. HI`, or give one with --over LO..HI",
        )
    low, high = float(found[0]), float(found[1])
    if not (np.isfinite(low) and np.isfinite(high) and low < high):
        raise CircuitError("let-range", f"the range of `{along}` has to rise, not {low:g} .. {high:g}")
    return low, high


def _watch(circuit: Circuit, watch: str | Sequence[str] | None) -> tuple[str, ...]:
    if watch is None:
        return watched(circuit)
    nets = (watch,) if isinstance(watch, str) else tuple(dict.fromkeys(watch))
    for net in nets:
        if net not in circuit.nets:
            raise CircuitError("unknown-net", f"{circuit.name} has no net `{net}`")
    return nets


def _scale(family: Family, proved: Sequence[Array], width: float) -> Array:
    """Size of each unknown over all proved states, (k, n) each, and of the let: its range."""
    known = np.concatenate([x for x in proved if len(x)] or [np.ones((1, family.system(family.low).n))])
    size = np.maximum(np.ptp(known, axis=0), 0.1 * np.max(np.abs(known), axis=0))
    nets = np.array([kind == "net" for kind, _ in family.system(family.low).unknowns])
    if np.max(size[nets], initial=0.0) < DEAD:
        return np.append(np.full(len(size), 1e-3), width)
    floor = np.where(nets, 1e-2 * max(float(np.max(size[nets], initial=0.0)), 1e-3), 1e-12)
    return np.append(np.maximum(size, floor), width)


__all__ = ["STATIONS", "Branch", "Crossing", "Fold", "Thresholds", "Trace", "trace"]
