"""What is proved along a characteristic: every state at the stations, then every state for every value of the let at once."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.points import INNER_LIMIT, Points, all_points, parity_holds
from loopsim.analyses.trace_curves import EDGE
from loopsim.analyses.trace_results import Branch, Fold
from loopsim.devices.phi_rows import rows_of
from loopsim.equations.ordering import blocks
from loopsim.errors import InternalError
from loopsim.numerics.certificate import certify
from loopsim.numerics.problem import Problem
from loopsim.numerics.prune import Found
from loopsim.numerics.tubes import MAX_BOXES, Region, Tubes, all_levels, points_at, region, with_level

Array: TypeAlias = NDArray[np.float64]

JOINT_GROUPS = 2  # groups with nonlinear rows that are still searched together: k of them multiply their states
SOURCE_ROUNDING = 4e-15  # relative: s along the let is a straight line through two assemblies, each rounded a few times
ON_TUBE = 1e-6  # of the picture: a traced point this near to a tube is in it


@dataclass(frozen=True, eq=False)
class Levels:
    """The equations with the let as one more unknown, its limits and the kinds of its rows; None of this for a let that moves more than
    sources."""

    problem: Problem
    kinds: NDArray[np.int64]
    limits: Array
    groups: int


def levels_of(family: Family, box: float) -> Levels | None:
    """The problem of a family, each unknown beside the row that answers for it; None where the let is not affine."""
    if not family.affine:
        return None
    system, base, rise = family.system(family.low), family.base_sources, family.rise
    order = blocks(system)
    row = np.empty(system.n, dtype=np.int64)
    for block in order:
        row[block.unknowns] = block.rows
    s = base - family.low * rise
    reach = max(abs(family.low), abs(family.high))
    error = np.where(rise != 0.0, SOURCE_ROUNDING * (np.abs(base) + np.abs(rise) * reach), 0.0)
    problem = Problem(
        system.G[row], system.B[row], system.W, system.V, rows_of(system.kinds, system.parameters), system.c, system.c, system.d, system.d,
        (s - error)[row], (s + error)[row],
    )  # fmt: skip
    limits = np.array([box if kind == "net" else INNER_LIMIT for kind, _ in system.unknowns])
    groups = sum(len(block.inner) > 0 for block in order)
    return Levels(with_level(problem, rise[row], family.low, family.high), system.kinds, limits, groups)


def states_at(family: Family, levels: Levels | None, values: Array, box: float, deadline: float) -> list[Points]:
    """Every state at each value of the let, (k,); all values in one search where the circuit is one loop, else one by one."""
    if levels is None or levels.groups > JOINT_GROUPS:
        return [all_points(family.system(float(value)), box, deadline) for value in values]
    limits = np.tile(levels.limits, (len(values), 1))
    here = values[:, None]
    found = all_levels(
        levels.problem, np.concatenate([-limits, here], axis=1), np.concatenate([limits, here], axis=1), deadline=deadline
    )
    return [_points(levels, found, float(value)) for value in values]


def _points(levels: Levels, found: Tubes, value: float) -> Points:
    x, spread, complete = points_at(levels.problem, found, value)
    n = levels.problem.n
    none = np.zeros((0, 2, n))
    listed = Found(x, spread, none, none, found.boxes, 0.0)
    doubts: tuple[str, ...] = () if complete else ("boxes left open, a fold or the end of the budget",)
    if complete and not parity_holds(levels.problem, levels.kinds, listed):
        doubts = ("the determinant signs of the points found do not add up: points may lie outside the box",)
    return Points(x[:, :-1], spread[:, :-1], len(doubts), doubts, found.boxes, levels.groups)


@dataclass(frozen=True, eq=False)
class Covered:
    """What a proof over the range came to. gaps: intervals of the let that it could not settle, none where every state for every value is
    known; finished: it was not ended by its budget. x, values: (k, n), (k,) one state of each tube and the value of the let there;
    spread: (k, n) how far the tube reaches from it; inner: (k,) it stays clear of the edge of the box."""

    gaps: tuple[tuple[float, float], ...]
    finished: bool
    x: Array
    values: Array
    spread: Array
    inner: NDArray[np.bool_]

    @property
    def complete(self) -> bool:
        """Every state for every value of the let lies in a tube or on a stretch of a traced curve."""
        return self.finished and not self.gaps


def prove_range(
    family: Family, levels: Levels, values: Array, branches: Sequence[Branch], folds: Sequence[Fold], scale: Array, deadline: float
) -> Covered:
    """Every state for every value of the let. values: edges of the pieces to begin with.

    Around each fold a region is proved to hold the traced curve alone, then every box of states and values outside is shown empty or to
    hold one state for each of its values. Where nothing is left, no branch is missing: a state outside the regions lies in a tube; tubes go
    on until an end of the range, a region or the edge of the box; a closed curve would have folds of its own, at which no tube can be; and
    the caller compares the tubes at the edge with the branches one by one.
    """
    with np.errstate(all="ignore"):
        regions = [_region(levels, f, scale) for f in folds]
    known = [one for one in regions if one is not None]
    pieces = len(values) - 1
    limits = np.tile(levels.limits, (pieces, 1))
    found = all_levels(
        levels.problem,
        np.concatenate([-limits, values[:-1, None]], axis=1),
        np.concatenate([limits, values[1:, None]], axis=1),
        regions=known,
        deadline=deadline,
    )
    gaps = _merged(found.open[:, :, -1], 1e-9 * scale[-1])
    finished = found.boxes < MAX_BOXES and time.monotonic() < deadline
    if finished:
        _nothing_excluded(levels, found, known, branches, gaps, scale)
    x, spread = found.x[:, :-1], found.spread[:, :-1]
    inner = np.all(np.abs(x) + spread < levels.limits * (1.0 - EDGE), axis=1)
    return Covered(gaps, finished, x, found.x[:, -1], spread, inner)


def _region(levels: Levels, found: Fold, scale: Array) -> Region | None:
    return region(levels.problem, np.append(found.x, found.at), np.append(found.direction_of_curve, 0.0), scale)


def _merged(intervals: Array, slack: float) -> tuple[tuple[float, float], ...]:
    """Intervals that touch joined, in ascending order. intervals: (k, 2)."""
    found: list[tuple[float, float]] = []
    for low, high in sorted(map(tuple, intervals.tolist())):
        if found and low <= found[-1][1] + slack:
            found[-1] = (found[-1][0], max(found[-1][1], high))
        else:
            found.append((low, high))
    return tuple(found)


def _nothing_excluded(
    levels: Levels, found: Tubes, known: Sequence[Region], branches: Sequence[Branch], gaps: Sequence[tuple[float, float]], scale: Array
) -> None:
    """Every traced point within the box has to lie in a tube, a region or a gap; a certified one that does not contradicts the proof."""
    low, high = levels.problem.s_low[-1], levels.problem.s_high[-1]
    points = np.concatenate([np.column_stack([b.x, b.values]) for b in branches] or [np.zeros((0, levels.problem.n))])
    inside = np.all(np.abs(points[:, :-1]) < levels.limits * (1.0 - EDGE), axis=1)
    points = points[inside & (points[:, -1] >= low) & (points[:, -1] <= high)]
    open_ = np.ones(len(points), dtype=bool)
    for start, stop in gaps:
        open_ &= (points[:, -1] < start) | (points[:, -1] > stop)
    for one in known:
        along = points @ one.row
        open_ &= (along < one.reach[0]) | (along > one.reach[1])
    slack = ON_TUBE * scale[:-1]
    for i in np.flatnonzero(open_):
        x, level = points[i, :-1], points[i, -1]
        here = (found.low <= level) & (level <= found.high)
        if np.any(np.all(np.abs(found.x[here, :-1] - x) <= found.spread[here, :-1] + slack, axis=1)):
            open_[i] = False
    for i in np.flatnonzero(open_):
        exact = _pinned(levels.problem, points[i])
        if certify(exact, points[i][None]).good[0]:
            raise InternalError(f"the curve passes a state at {points[i, -1]:g} that the proof over the range excluded; please report this")


def _pinned(problem: Problem, point: Array) -> Problem:
    """The problem at the one level of a point."""
    _, _, _, _, s, s_rad = problem.centres
    return problem.with_sources(np.append(s[:-1], point[-1])[None], np.append(s_rad[:-1], 0.0)[None])


__all__ = ["Covered", "Levels", "levels_of", "prove_range", "states_at"]
