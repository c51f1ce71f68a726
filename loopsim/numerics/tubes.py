"""Every solution of F(x, l) = 0 for every level l of a range at once, with proof.

The level is one more unknown, held by one more row l = l; each box then carries the interval of levels it speaks for. A box is shown empty,
shown to hold exactly one x for each of its levels (a tube), shown to lie in a region that holds one stretch of a known curve and nothing
else, or split, across an unknown or across the level. Regions are proved with another last row: t . (x, l) = r for every r of an
interval, the arclength form, which stays regular where the curve turns (a parametric form of Krawczyk's test; H. B. Keller 1977 for the
row; both from memory). All else, rounding too, is that of `prune`.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.balances import nodal
from loopsim.numerics.boxes import Boxes, boxes_about, boxes_over, ends, join, stack
from loopsim.numerics.certificate import certify, damped_points, injective, newton_points
from loopsim.numerics.enclosure import TINY, UNIT, gamma, middle, radius
from loopsim.numerics.hull import hull
from loopsim.numerics.problem import Problem
from loopsim.numerics.prune import MAX_PASSES, PROGRESS, SMALL, distinct, split, take
from loopsim.numerics.relaxation import relax

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

LARGEST_STRETCH = 16.0  # scaled arclength on each side: a whole characteristic is 2 to 4 long
SMALLEST_STRETCH = 1e-7
ROOM = (1024.0, 128.0, 16.0, 4.0, 2.0, 1.0)  # how many times wider than the curve's own box a region is tried
MAX_BOXES = 20_000
DISTANT = 0.999  # a level is cut before anything else where it carries this share of what an unknown does


@dataclass(frozen=True, eq=False)
class Region:
    """Where one stretch of a curve and nothing else lies: low, high: (w, psi, u, phi columns of a box); row: (n,) of (x, l), level last;
    reach: (2,) interval of row . (x, l). x: (n,) its middle."""

    low: Array
    high: Array
    row: Array
    reach: Array
    x: Array


@dataclass(frozen=True, eq=False)
class Tubes:
    """x, spread: (k, n), level last: one solution within x +/- spread for each level of [low, high]: (k,) each. open: (r, 2, n) boxes that
    could not be settled. boxes: how many were looked at."""

    x: Array
    spread: Array
    low: Array
    high: Array
    open: Array
    boxes: int

    @property
    def complete(self) -> bool:
        """Every solution for every level asked for lies in a tube or in a known region."""
        return len(self.open) == 0


@dataclass
class _Work:
    problem: Problem
    regions: Sequence[Region]
    tubes: list[tuple[Array, Array, float, float]] = field(default_factory=list)
    open: list[Array] = field(default_factory=list)
    boxes: int = 0


def with_level(problem: Problem, rise: Array, low: float, high: float) -> Problem:
    """The problem with the level as its last unknown: G x + B psi = s + l rise, l in [low, high]. rise: (n,); s as of l = 0."""
    n, m = problem.n, problem.m
    G = np.zeros((n + 1, n + 1))
    G[:n, :n], G[:n, n], G[n, n] = problem.G, -rise, 1.0
    column = np.zeros((m, 1))
    return replace(
        problem,
        G=G,
        B=np.concatenate([problem.B, np.zeros((1, m))]),
        W=np.concatenate([problem.W, column], axis=1),
        V=np.concatenate([problem.V, column], axis=1),
        s_low=np.append(problem.s_low, low),
        s_high=np.append(problem.s_high, high),
    )


def region(problem: Problem, x: Array, direction: Array, size: Array) -> Region | None:
    """The longest region about a point of a curve that can be proved to hold nothing but the stretch of the curve through it.

    x: (n,) with the level last; direction: (n,) of the curve there; size: (n,) of each unknown, in which lengths are measured.
    """
    row = direction / size**2
    row = row / np.linalg.norm(row * size)
    centre = float(row @ x)
    G = problem.G.copy()
    G[-1] = row
    stretch = LARGEST_STRETCH
    while stretch > SMALLEST_STRETCH:
        reach = np.array([centre - stretch, centre + stretch])
        arc = replace(problem, G=G, s_low=np.append(problem.s_low[:-1], reach[0]), s_high=np.append(problem.s_high[:-1], reach[1]))
        sure = certify(arc, x[None])
        if sure.good[0]:
            for room in ROOM:
                here = boxes_about(arc, sure.x, sure.spread * room, sure.row_spread * room, sure.factor_spread * room)
                if injective(arc, here)[0]:
                    return Region(here.low[0, arc.n :], here.high[0, arc.n :], row, reach, x)
        stretch *= 0.5
    return None


def all_levels(
    problem: Problem,
    x_low: Array,
    x_high: Array,
    *,
    regions: Sequence[Region] = (),
    deadline: float = np.inf,
    max_boxes: int = MAX_BOXES,
) -> Tubes:
    """Every solution in the boxes [x_low, x_high]: (b, n) each, level last, for every level in them. problem: of `with_level`.
    deadline: time.monotonic() after which the rest is left open."""
    work = _Work(problem, regions)
    queue = [boxes_over(problem, x_low, x_high)] if len(x_low) else []
    with np.errstate(all="ignore"):
        while queue and time.monotonic() < deadline and work.boxes < max_boxes:
            queue.extend(_round(work, take(queue), deadline))
        work.open += [ends(problem, part) for part in queue]
    n = problem.n
    none = np.zeros((0, n))
    return Tubes(
        np.stack([t[0] for t in work.tubes]) if work.tubes else none,
        np.stack([t[1] for t in work.tubes]) if work.tubes else none,
        np.array([t[2] for t in work.tubes]),
        np.array([t[3] for t in work.tubes]),
        np.concatenate(work.open) if work.open else np.zeros((0, 2, n)),
        work.boxes,
    )


def points_at(problem: Problem, found: Tubes, level: float) -> tuple[Array, Array, bool]:
    """Of a search over single levels, the different solutions at one of them: x, spread (k, n), and whether they are all."""
    here = found.low == level
    x, spread, doubtful = distinct(problem, list(zip(found.x[here], found.spread[here], strict=True)))
    left = len(found.open) and np.any((found.open[:, 0, -1] <= level) & (found.open[:, 1, -1] >= level))
    return x, spread, not doubtful and not left


def _sources(problem: Problem, boxes: Boxes) -> Problem:
    """The problem with the level of each box as the right side of its last row."""
    n = problem.n
    _, _, _, _, s, s_rad = problem.centres
    low, high = boxes.low[:, n - 1], boxes.high[:, n - 1]
    centre = middle(low, high)
    s, s_rad = np.tile(s, (len(boxes), 1)), np.tile(s_rad, (len(boxes), 1))
    s[:, n - 1] = centre
    s_rad[:, n - 1] = np.where(low == high, 0.0, radius(low, high, centre))
    return problem.with_sources(s, s_rad)


def _round(work: _Work, boxes: Boxes, deadline: float) -> list[Boxes]:
    """Narrow a batch until it stands still, settle what can be settled, split the rest once."""
    problem = work.problem
    work.boxes += len(boxes)
    columns = problem.n + problem.m
    still: list[Boxes] = []
    impacts: list[Array] = []
    for turn in range(MAX_PASSES):
        boxes = boxes.pick(~_known(work, boxes))
        if len(boxes) == 0:
            break
        before = boxes.high[:, :columns] - boxes.low[:, :columns]
        boxes, impact, kept = _narrow(problem, boxes)
        if len(boxes) == 0:
            break
        floor = 1e-9 * (1.0 + np.abs(boxes.low[:, :columns]))
        after = boxes.high[:, :columns] - boxes.low[:, :columns]
        moving: NDArray[np.bool_] = np.any((after < (1.0 - PROGRESS) * before[kept]) & (before[kept] > floor), axis=1)
        if turn == MAX_PASSES - 1 or time.monotonic() > deadline:
            moving[:] = False
        if not moving.all():
            still.append(boxes.pick(~moving))
            impacts.append(impact[~moving])
            boxes = boxes.pick(moving)
        if len(boxes) == 0:
            break
    if not still:
        return []
    boxes, impact = stack(still), np.concatenate(impacts)
    rest = np.flatnonzero(~_known(work, boxes))
    rest = rest[_settle(work, boxes.pick(rest))]
    return [_cut(problem, boxes.pick(rest), impact[rest])] if len(rest) else []


def _narrow(problem: Problem, boxes: Boxes) -> tuple[Boxes, Array, Index]:
    """One pass of everything that narrows: what is left alive, (b, m + 1) impact of each row and of the level, which box each was."""
    tag = np.arange(len(boxes))
    none = np.zeros((0, problem.m + 1))
    for contract in (hull, nodal, hull):
        boxes = contract(problem, boxes)
        alive = ~boxes.empty()
        if not alive.all():
            boxes, tag = boxes.pick(alive), tag[alive]
        if len(boxes) == 0:
            return boxes, none, tag
    at = problem.layout
    held = _sources(problem, boxes)
    relaxed = relax(held, boxes)
    width = np.maximum(boxes.high[:, at.w] - boxes.low[:, at.w], TINY)
    moved = np.abs(relaxed.inverse[:, :, -1] @ problem.W.T) * held.centres[5][:, -1:]
    level = np.nan_to_num((moved / width).max(axis=1, initial=0.0), nan=0.0)
    alive = ~relaxed.boxes.empty()
    impact = np.concatenate([relaxed.impact, level[:, None]], axis=1)
    return relaxed.boxes.pick(alive), impact[alive], tag[alive]


def _known(work: _Work, boxes: Boxes) -> NDArray[np.bool_]:
    """(b,) lies wholly in a region, whose curve is known."""
    n = work.problem.n
    inside = np.zeros(len(boxes), dtype=bool)
    x_low, x_high = boxes.low[:, :n], boxes.high[:, :n]
    for known in work.regions:
        within = ((boxes.low[:, n:] >= known.low) & (boxes.high[:, n:] <= known.high)).all(axis=1)
        if not within.any():
            continue
        plus, minus = np.maximum(known.row, 0.0), np.minimum(known.row, 0.0)
        error = (np.maximum(np.abs(x_low), np.abs(x_high)) @ np.abs(known.row)) * gamma(n + 2) + TINY
        low, high = x_low @ plus + x_high @ minus - error, x_high @ plus + x_low @ minus + error
        inside |= within & (low >= known.reach[0]) & (high <= known.reach[1])
    return inside


def _settle(work: _Work, boxes: Boxes) -> NDArray[np.bool_]:
    """(b,) which boxes are still open; tubes and boxes too small to go on with are recorded."""
    problem, n = work.problem, work.problem.n
    open_ = np.ones(len(boxes), dtype=bool)
    candidates = np.flatnonzero(injective(problem, boxes)) if len(boxes) else np.zeros(0, dtype=np.int64)
    if len(candidates):
        part = boxes.pick(candidates)
        held = _sources(problem, part)
        start = middle(part.low[:, :n], part.high[:, :n])
        sure = certify(held, newton_points(held, start))
        if not sure.good.all():
            sure = certify(held, np.where(sure.good[:, None], sure.x, damped_points(held, start)))
        joined = join(part, sure.boxes(held))
        # one to one over the hull of the box and the tube: the tube is the only solution that either holds, level by level
        closed = sure.good & injective(problem, joined)
        for i in np.flatnonzero(closed):
            work.tubes.append((sure.x[i], sure.spread[i], float(part.low[i, n - 1]), float(part.high[i, n - 1])))
        open_[candidates[closed]] = False
    x_low, x_high = boxes.low[:, : n - 1], boxes.high[:, : n - 1]
    size = np.max((x_high - x_low) / (1.0 + np.maximum(np.abs(x_low), np.abs(x_high))), axis=1)
    tiny = open_ & (size < SMALL)
    if np.any(tiny):
        work.open.append(ends(problem, boxes.pick(tiny)))
        open_ &= ~tiny
    return open_


def _cut(problem: Problem, boxes: Boxes, impact: Array) -> Boxes:
    """Each box in two: across the level where that does most for the widths, else as `prune` does."""
    n = problem.n
    low, high = boxes.low[:, n - 1], boxes.high[:, n - 1]
    # a level that can be cut no further is a point
    wide = high - low > 64.0 * UNIT * np.maximum(np.abs(low), np.abs(high))
    rows = impact[:, :-1].sum(axis=1)
    level = wide & (impact[:, -1] >= DISTANT * rows)
    parts = []
    if level.any():
        chosen = boxes.pick(level)
        one, two = Boxes(chosen.low, chosen.high.copy()), Boxes(chosen.low.copy(), chosen.high)
        cut = 0.5 * (low[level] + high[level])
        one.high[:, n - 1] = cut
        two.low[:, n - 1] = cut
        parts += [one, two]
    if not level.all():
        parts.append(split(problem, boxes.pick(~level), impact[~level, :-1]))
    return stack(parts)


__all__ = ["Region", "Tubes", "all_levels", "points_at", "region", "with_level"]
