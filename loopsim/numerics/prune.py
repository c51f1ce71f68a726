"""Every solution of G x + B psi(x) = s in a box, with proof: batched interval branch and prune.

psi_k = phi_k(w_k) u_k, w = W x + c, u = V x + d. `Boxes` carry intervals for all of them. A box is shown empty, shown to hold
exactly one solution, or split; what cannot be decided is returned as such. The steps: `hull`, `balances`, `relaxation`,
`certificate`; rounding as in `enclosure`.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.balances import nodal, slices
from loopsim.numerics.boxes import Boxes, boxes_over, ends, join, stack, start_points
from loopsim.numerics.certificate import certify, damped_points, injective, newton_points
from loopsim.numerics.enclosure import TINY, middle
from loopsim.numerics.hull import hull
from loopsim.numerics.problem import Problem
from loopsim.numerics.relaxation import relax

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

BATCH = 128  # boxes per round: array calls are then well past their fixed cost, and memory stays small
PROGRESS = 0.2  # a pass that narrows no width by this share has done its work; the box is tested and split
SMALL = 1e-7  # relative width at which an undecided box is called a cluster: a double root cannot be resolved below sqrt(2^-53) = 1e-8
RECENT = 24  # proved regions that a box is compared with: only neighbours of the last few still appear
FAR = 400.0  # width of a row's argument beyond which a cut of the argument itself comes first, for rows that grow without bound there
MAX_PASSES = 60  # narrowing passes before a box is split all the same
MAX_CLUSTERS = 400  # more undecided tiny boxes than this mean a continuum of solutions


@dataclass(frozen=True, eq=False)
class Found:
    """What a search proved.

    x, spread: (k, n): one solution each within x +/- spread, all different. clusters: (l, 2, n) small boxes that may hold any number;
    left: (r, 2, n) boxes not looked into within the budget. boxes: how many were examined. complete: every solution in the start box is
    among x. share_left: part of the start box's log-volume-free measure still open (boxes left per boxes examined).
    """

    x: Array
    spread: Array
    clusters: Array
    left: Array
    boxes: int
    seconds: float
    notes: tuple[str, ...] = field(default=())

    @property
    def complete(self) -> bool:
        return len(self.clusters) == 0 and len(self.left) == 0


@dataclass
class _Search:
    """Working state of one search: what is proved so far."""

    problem: Problem
    scale: Array
    boxes: int = 0
    points: list[tuple[Array, Array]] = field(default_factory=list)
    regions: list[Boxes] = field(default_factory=list)
    clusters: list[Boxes] = field(default_factory=list)
    doubtful: bool = False


def search(
    problem: Problem,
    low: Array,
    high: Array,
    *,
    deadline: float = np.inf,
    scale: Array | None = None,
    max_boxes: int = 10_000_000,
) -> Found:
    """Every solution with x in [low, high]: (n,) each. deadline: time.monotonic() after which the rest is left. scale: (n,) size of each
    unknown for the word small (default 1)."""
    began = time.monotonic()
    state = _Search(problem, np.ones(problem.n) if scale is None else scale)
    queue: list[Boxes] = [boxes_over(problem, low[None].astype(float), high[None].astype(float))]
    ended = False
    with np.errstate(over="ignore", invalid="ignore", divide="ignore", under="ignore"):
        while queue:
            if time.monotonic() > deadline or state.boxes > max_boxes or len(state.clusters) > MAX_CLUSTERS:
                ended = True
                break
            batch = take(queue)
            queue.extend(_round(state, batch, deadline))
    left = [ends(problem, part) for part in queue] if ended else []
    x, spread, doubtful = distinct(problem, state.points)
    clusters = [ends(problem, part) for part in state.clusters] + doubtful
    n = problem.n
    return Found(
        x,
        spread,
        np.concatenate(clusters) if clusters else np.zeros((0, 2, n)),
        np.concatenate(left) if left else np.zeros((0, 2, n)),
        state.boxes,
        time.monotonic() - began,
    )


def take(queue: list[Boxes]) -> Boxes:
    """Up to BATCH boxes from the end of the queue."""
    taken: list[Boxes] = []
    count = 0
    while queue and count < BATCH:
        part = queue.pop()
        room = BATCH - count
        if len(part) > room:
            queue.append(part.pick(slice(room, None)))
            part = part.pick(slice(0, room))
        taken.append(part)
        count += len(part)
    return stack(taken)


def _round(state: _Search, boxes: Boxes, deadline: float) -> list[Boxes]:
    """Narrow a batch until it stands still, settle what can be settled, split the rest once."""
    problem = state.problem
    state.boxes += len(boxes)
    settled: list[Boxes] = []
    impacts: list[Array] = []
    columns = problem.n + problem.m
    for _ in range(MAX_PASSES):
        before_low, before_high = boxes.low[:, :columns], boxes.high[:, :columns]
        boxes, impact, tag = narrow(problem, boxes)
        if len(boxes) == 0:
            break
        before = before_high[tag] - before_low[tag]
        floor = 1e-9 * (1.0 + np.abs(boxes.low[:, :columns]))
        after = boxes.high[:, :columns] - boxes.low[:, :columns]
        moving = ((after < (1.0 - PROGRESS) * before) & (before > floor)).any(axis=1)
        if not moving.all():
            settled.append(boxes.pick(~moving))  # type: ignore[arg-type]
            impacts.append(impact[~moving])
            boxes, impact = boxes.pick(moving), impact[moving]  # type: ignore[arg-type]
        if len(boxes) == 0:
            break
        if time.monotonic() > deadline:
            settled.append(boxes)
            impacts.append(impact)
            break
    else:
        settled.append(boxes)
        impacts.append(impact)
    if not settled:
        return []
    boxes, impact = stack(settled), np.concatenate(impacts)
    rest = _settle(state, boxes)
    boxes, impact = boxes.pick(rest), impact[rest]
    return [split(problem, boxes, impact)] if len(boxes) else []


def narrow(problem: Problem, boxes: Boxes) -> tuple[Boxes, Array, Index]:
    """One pass of everything that narrows: what is left alive, (b, m) impact of each row on its widths, which box each was."""
    tag = np.arange(len(boxes))
    for contract in (hull, nodal, hull):
        boxes = contract(problem, boxes)
        empty = boxes.empty()
        if empty.any():
            boxes, tag = boxes.pick(~empty), tag[~empty]
            if len(boxes) == 0:
                return boxes, np.zeros((0, problem.m)), tag
    relaxed = relax(problem, boxes)
    alive = ~relaxed.boxes.empty()
    return relaxed.boxes.pick(alive), relaxed.impact[alive], tag[alive]


def _settle(state: _Search, boxes: Boxes) -> NDArray[np.bool_]:
    """(b,) which boxes are still open after the uniqueness test and the test for smallness; the others are recorded in `state`."""
    problem = state.problem
    at = problem.layout
    open_ = np.ones(len(boxes), dtype=bool)
    for region in state.regions[-RECENT:]:
        open_ &= _outside(boxes, region, problem.n)
    candidates = np.flatnonzero(open_)
    if len(candidates):
        candidates = candidates[injective(problem, boxes.pick(candidates))]
    if len(candidates):
        part = boxes.pick(candidates)
        points = newton_points(problem, middle(part.low[:, at.x], part.high[:, at.x]))
        certified = certify(problem, points)
        if not certified.good.all():
            points = np.where(
                certified.good[:, None],
                points,
                damped_points(problem, middle(part.low[:, at.x], part.high[:, at.x])),
            )
            certified = certify(problem, points)
        joined = join(part, certified.boxes(problem))
        # one to one over the hull of the box and the point: the point is the only solution either holds
        closed = certified.good & injective(problem, joined)
        for i in np.flatnonzero(closed):
            state.points.append((certified.x[i], certified.spread[i]))
            state.regions.append(joined.pick(slice(i, i + 1)))
        open_[candidates[closed]] = False
    x_low, x_high = boxes.low[:, at.x], boxes.high[:, at.x]
    size = np.max((x_high - x_low) / (state.scale + np.maximum(np.abs(x_low), np.abs(x_high))), axis=1)
    tiny = open_ & (size < SMALL)
    if problem.m:
        w_low, w_high = boxes.low[:, at.w], boxes.high[:, at.w]
        tiny &= np.max((w_high - w_low) / (1.0 + np.abs(w_low)), axis=1) < 100.0 * SMALL
    if np.any(tiny):
        state.clusters.append(boxes.pick(tiny))
        open_ &= ~tiny
    return open_


def _outside(boxes: Boxes, region: Boxes, n: int) -> NDArray[np.bool_]:
    """(b,) not wholly within a region that is known to hold one solution. The x columns do not count: the proof there was of w, u, phi."""
    return np.asarray(
        ((boxes.low[:, n:] < region.low[:, n:]) | (boxes.high[:, n:] > region.high[:, n:])).any(axis=1)
    )


def split(problem: Problem, boxes: Boxes, impact: Array) -> Boxes:
    """Each box in two across the unknown that carries the most chord error: the sum over its rows of their impact times its share of
    their width. Where the leading row moves with that unknown alone, the cut is where its chord error is largest, else the middle.

    Cutting unknowns, not rows, and summing made rings of inverters grow linearly (4, 8, 16 stages: 27, 51, 209 boxes; cutting the row of
    largest impact: 319, 5,653, no end); a preference for a feedback vertex set then only cost boxes.
    """
    at = problem.layout
    b = np.arange(len(boxes))
    x_low, x_high = boxes.low[:, at.x], boxes.high[:, at.x]
    size = x_high - x_low
    relative = size / (1e-3 + np.abs(x_low) + np.abs(x_high))
    j = np.argmax(relative, axis=1)
    low, high = x_low[b, j], x_high[b, j]
    cut = slices(low, high, 64)[31]
    if problem.m:
        w_low, w_high = boxes.low[:, at.w], boxes.high[:, at.w]
        share = np.abs(problem.W) * size[:, None, :] / np.maximum(w_high - w_low, TINY)[:, :, None]
        score = impact[:, :, None] * np.minimum(share, 1.0)
        score = np.where((relative > 1e-10)[:, None, :], score, 0.0)
        total = score.sum(axis=1)
        by_row = total.max(axis=1) > 1e-6
        j = np.where(by_row, np.argmax(total, axis=1), j)
        k = np.argmax(score[b, :, j], axis=1)
        low, high = x_low[b, j], x_high[b, j]
        cut = slices(low, high, 64)[31]
        alone = by_row & (np.count_nonzero(problem.W, axis=1) == 1)[k]
        tangent = problem.rows.split_points(w_low, w_high)[b, k]
        points = (tangent - problem.c_low[k]) / np.where(alone, problem.W[k, j], 1.0)
        cut = np.where(alone & (points > low) & (points < high), points, cut)
        # a difference of two wide unknowns is cut itself: cutting either of them hardly narrows it
        far = by_row & ~alone & problem.rows.steep[k] & ((w_high - w_low)[b, k] > FAR)
        j = np.where(far, at.w.start + k, j)
        cut = np.where(far, tangent, cut)
    one, two = Boxes(boxes.low, boxes.high.copy()), Boxes(boxes.low.copy(), boxes.high)
    one.high[b, j] = cut
    two.low[b, j] = cut
    return stack([one, two])


def distinct(problem: Problem, points: list[tuple[Array, Array]]) -> tuple[Array, Array, list[Array]]:
    """The different solutions among certified points; pairs that overlap without a proof of being one are returned as doubtful boxes."""
    n = problem.n
    if not points:
        return np.zeros((0, n)), np.zeros((0, n)), []
    x = np.stack([p for p, _ in points])
    spread = np.stack([s for _, s in points])
    # only neighbours in the widest coordinate can overlap
    lead = int(np.argmax(np.ptp(x, axis=0)))
    order = np.argsort(x[:, lead], kind="stable")
    reach = float(np.max(spread[:, lead]))
    kept: list[int] = []
    doubtful: list[Array] = []
    for i in order:
        near = []
        for k in reversed(kept):
            if x[i, lead] - x[k, lead] > 2.1 * reach:
                break
            if np.all(np.abs(x[i] - x[k]) <= (spread[i] + spread[k]) * (1.0 + 1e-12)):
                near.append(k)
        for k in near:
            pair = join(
                start_points(problem, x[i][None], spread[i][None]),
                start_points(problem, x[k][None], spread[k][None]),
            )
            if not injective(problem, pair)[0]:
                doubtful.append(ends(problem, pair))
        if not near:
            kept.append(int(i))
    return x[kept], spread[kept], doubtful
