"""The nodal contraction: an unknown, or the argument of a row, narrowed by one equation in which several terms move with it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.boxes import Boxes, affine
from loopsim.numerics.enclosure import HUGE, TINY, UNIT, down, gamma, multiply, scale, up

if TYPE_CHECKING:
    from loopsim.numerics.problem import Problem, Rows

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

SLICES = 12  # pieces a voltage is cut into by the nodal contraction


@dataclass(frozen=True, eq=False)
class NodalTable:
    """For each quantity z (an unknown, or the argument of a row) with at least two terms of one equation moving with it: those terms,
    flattened to length t.

    columns: (u,) where z stands in a box; equation: (u,) the row of G used; own: (u,) coefficient of z itself in it; off: (u, n) G of the
    rest; keep: (u, m) B of terms that do not move with z; pair_column: (t,) position in `columns`; pair_row: (t,) row k; weight: (t,) B;
    lever: (t,) how w_k moves with z; rest: (t, n) what of x moves w_k besides; fuzz: (t, n) rounding of lever and rest, times |x|;
    c_low, c_high: (t,) its constant; factor_lever, factor_rest the same of V; gather: (t, u) 0/1 sum of terms per quantity.
    """

    columns: Index
    equation: Index
    own: Array
    off: Array
    keep: Array
    pair_row: Index
    pair_column: Index
    weight: Array
    lever: Array
    rest: Array
    fuzz: Array
    c_low: Array
    c_high: Array
    factor_lever: Array
    factor_rest: Array
    gather: Array
    rows: Rows

    @cached_property
    def keeps(self) -> bool:
        """Whether any equation holds terms that do not move with its quantity."""
        return bool(np.any(self.keep != 0.0))

    @cached_property
    def fuzzy(self) -> bool:
        """Whether any lever was rounded."""
        return bool(np.any(self.fuzz != 0.0))


@dataclass(frozen=True, slots=True)
class _Lever:
    """One quantity of a NodalTable under construction: its column, its equation, and per row k: (lever, rest, fuzz, c_low, c_high)."""

    column: int
    equation: int
    rows: tuple[int, ...]
    levers: tuple[tuple[float, Array, Array, float, float], ...]


def nodal_table(problem: Problem) -> NodalTable | None:
    """Collect unknowns in their own equations and arguments that several rows share; one term alone is served by hull consistency."""
    found = _own_unknowns(problem) + _shared_arguments(problem)
    if not found:
        return None
    n = problem.n
    equation = np.array([one.equation for one in found], dtype=np.int64)
    columns = np.array([one.column for one in found], dtype=np.int64)
    off, keep = problem.G[equation].copy(), problem.B[equation].copy()
    own = np.zeros(len(found))
    pairs = [
        (u, k, lever) for u, one in enumerate(found) for k, lever in zip(one.rows, one.levers, strict=True)
    ]
    which = np.array([u for u, _, _ in pairs], dtype=np.int64)
    ks = np.array([k for _, k, _ in pairs], dtype=np.int64)
    keep[which, ks] = 0.0
    factor_lever, factor_rest = np.zeros(len(ks)), problem.V[ks].copy()
    for u, one in enumerate(found):
        if one.column < n:
            own[u], off[u, one.column] = off[u, one.column], 0.0
    for i, (u, k, _) in enumerate(pairs):
        if found[u].column < n:
            factor_lever[i], factor_rest[i, found[u].column] = problem.V[k, found[u].column], 0.0
    gather = np.zeros((len(ks), len(found)))
    gather[np.arange(len(ks)), which] = 1.0
    parts = [lever for _, _, lever in pairs]
    return NodalTable(
        columns, equation, own, off, keep, ks, which, problem.B[equation[which], ks], np.array([p[0] for p in parts]),
        np.stack([p[1] for p in parts]), np.stack([p[2] for p in parts]), np.array([p[3] for p in parts]),
        np.array([p[4] for p in parts]), factor_lever, factor_rest, gather, problem.rows.take(ks),
    )  # fmt: skip


def _own_unknowns(problem: Problem) -> list[_Lever]:
    """Unknowns in the equations that answer for them."""
    moves = (problem.W != 0.0) | (problem.V != 0.0)
    none = np.zeros(problem.n)
    found = []
    for j in range(problem.n):
        ks = np.flatnonzero((problem.B[j] != 0.0) & moves[:, j])
        if len(ks) == 0 or len(ks) + (problem.G[j, j] != 0.0) < 2:
            continue
        levers = []
        for k in ks:
            rest = problem.W[k].copy()
            rest[j] = 0.0
            levers.append(
                (float(problem.W[k, j]), rest, none, float(problem.c_low[k]), float(problem.c_high[k]))
            )
        found.append(_Lever(j, j, tuple(ks.tolist()), tuple(levers)))
    return found


def _shared_arguments(problem: Problem) -> list[_Lever]:
    """Rows whose arguments are multiples of one difference (a pair of diodes back to back): only together they bound it."""
    found = []
    taken: set[int] = set()
    for first in range(problem.m):
        if first in taken or np.count_nonzero(problem.W[first]) < 2:
            continue
        lead = int(np.argmax(np.abs(problem.W[first])))
        group, levers = [], []
        for k in range(first, problem.m):
            ratio = float(problem.W[k, lead] / problem.W[first, lead])
            line = ratio * problem.W[first]
            fuzz = np.abs(problem.W[k] - line) + 4.0 * UNIT * (np.abs(problem.W[k]) + np.abs(line))
            if ratio == 0.0 or np.any(fuzz > 1e-12 * np.abs(problem.W[k]).max()):
                continue
            # w_k = ratio (w_first - c_first) + c_k, up to the rounding of the ratio
            ends = (problem.c_low[k] - ratio * problem.c_low[first], problem.c_high[k] - ratio * problem.c_high[first],
                    problem.c_low[k] - ratio * problem.c_high[first], problem.c_high[k] - ratio * problem.c_low[first])  # fmt: skip
            room = (
                8.0
                * UNIT
                * (
                    abs(problem.c_high[k])
                    + abs(problem.c_low[k])
                    + abs(ratio) * (abs(problem.c_low[first]) + abs(problem.c_high[first]))
                )
            )
            group.append(k)
            levers.append(
                (ratio, np.zeros(problem.n), fuzz, float(min(ends) - room), float(max(ends) + room))
            )
        if len(group) < 2:
            continue
        taken |= set(group)
        equation = int(np.argmax(np.max(np.abs(problem.B[:, group]), axis=1)))
        used = [i for i, k in enumerate(group) if problem.B[equation, k] != 0.0]
        if len(used) >= 2:
            found.append(
                _Lever(
                    problem.n + first, equation, tuple(group[i] for i in used), tuple(levers[i] for i in used)
                )
            )
    return found


def nodal(problem: Problem, boxes: Boxes) -> Boxes:
    """Narrow each unknown by its own equation with everything else at its extremes: slices in which it cannot balance are cut off.

    A node equation is monotone in its own voltage for most nodes, where this solves it at both ends of everything else; slices serve the
    others too.
    """
    table = problem.nodal
    if table is None:
        return boxes
    j, t = table.columns, len(table.pair_row)
    at = problem.layout
    x_low, x_high = boxes.low[:, at.x], boxes.high[:, at.x]
    i = table.equation
    fixed_low, fixed_high = affine(table.off, x_low, x_high, -problem.s_high[i], -problem.s_low[i])
    if table.keeps:
        none = np.zeros(len(j))
        term_low, term_high = affine(table.keep, boxes.low[:, at.p], boxes.high[:, at.p], none, none)
        fixed_low, fixed_high = down(fixed_low + term_low), up(fixed_high + term_high)
    k = table.pair_row
    rest_low, rest_high = affine(table.rest, x_low, x_high, table.c_low, table.c_high)
    if table.fuzzy:
        slack = np.maximum(np.abs(x_low), np.abs(x_high)) @ table.fuzz.T * (1.0 + gamma(problem.n))
        rest_low, rest_high = down(rest_low - slack), up(rest_high + slack)
    has_product = len(problem.product) > 0
    if has_product:
        u_rest_low, u_rest_high = affine(
            table.factor_rest, x_low, x_high, problem.d_low[k], problem.d_high[k]
        )
    own_low, own_high = boxes.low[:, j], boxes.high[:, j]
    cuts = slices(own_low, own_high, SLICES)  # (q + 1, b, u)
    start, stop = cuts[:-1], cuts[1:]
    ts, te = start[:, :, table.pair_column], stop[:, :, table.pair_column]
    reach_low, reach_high = scale(table.lever, ts, te)
    w_low, w_high = down(rest_low + reach_low), up(rest_high + reach_high)
    # the interval of w itself is known too; a slice that misses it is empty, but stays here clipped and is left to the row test
    known_low, known_high = boxes.low[:, at.w][:, k], boxes.high[:, at.w][:, k]
    missed = (w_high < known_low) | (w_low > known_high)
    w_low = np.minimum(np.maximum(w_low, known_low), known_high)
    w_high = np.minimum(np.maximum(w_high, known_low), known_high)
    f_low, f_high = table.rows.bounds(w_low, w_high)
    if has_product:
        reach_low, reach_high = scale(table.factor_lever, ts, te)
        f_low, f_high = multiply(f_low, f_high, down(u_rest_low + reach_low), up(u_rest_high + reach_high))
    f_low, f_high = scale(table.weight, f_low, f_high)
    size = np.maximum(np.abs(f_low), np.abs(f_high)) @ table.gather
    sum_low, sum_high = f_low @ table.gather, f_high @ table.gather
    own_term_low, own_term_high = scale(table.own, start, stop)
    low = sum_low + own_term_low + fixed_low
    high = sum_high + own_term_high + fixed_high
    error = (
        size
        + np.maximum(np.abs(own_term_low), np.abs(own_term_high))
        + np.maximum(np.abs(fixed_low), np.abs(fixed_high))
    )
    error = error * gamma(t + 4) + TINY
    hit = (low - error <= 0.0) & (high + error >= 0.0) & ((missed.astype(float) @ table.gather) == 0.0)
    some = hit.any(axis=0)
    first = hit.argmax(axis=0)
    last = SLICES - 1 - hit[::-1].argmax(axis=0)
    new_low = np.where(some, np.take_along_axis(start, first[None], axis=0)[0], HUGE)
    new_high = np.where(some, np.take_along_axis(stop, last[None], axis=0)[0], -HUGE)
    low, high = boxes.low.copy(), boxes.high.copy()
    low[:, j], high[:, j] = np.maximum(own_low, new_low), np.minimum(own_high, new_high)
    return Boxes(low, high)


def slices(low: Array, high: Array, pieces: int) -> Array:
    """(pieces + 1, ...) ascending cut points from low to high: even, or even in the inverse hyperbolic sine over more than 50 units."""
    share = (np.arange(pieces + 1) / pieces).reshape((-1,) + (1,) * low.ndim)
    cuts = low + (high - low) * share
    wide = high - low > 50.0
    if wide.any():
        cuts = np.where(wide, np.sinh(np.arcsinh(low) + (np.arcsinh(high) - np.arcsinh(low)) * share), cuts)
    cuts = np.minimum(np.maximum(cuts, low), high)
    cuts[0], cuts[-1] = low, high
    return np.asarray(cuts)
