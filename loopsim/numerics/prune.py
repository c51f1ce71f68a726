"""Every solution of G x + B psi(x) = s in a box, with proof: batched interval branch and prune.

psi_k = phi_k(w_k) u_k, w = W x + c, u = V x + d. Each box carries intervals for x, w, u, phi and psi at once, so that what is known of a
difference of two voltages is not lost when only the voltages are narrowed. A box is shown empty, shown to hold exactly one solution, or
split; what cannot be decided is returned as such. Methods (all from memory): hull consistency on the linear rows and the scalar functions
(F. Benhamou, L. Granvilliers, Handbook of Constraint Programming, 2006, ch. 16); linear relaxation by chords through one real inverse
(L. Kolev, Interval Methods for Circuit Analysis, 1993); existence by Krawczyk's operator and uniqueness by the regularity of every slope
matrix over the box (A. Neumaier, Interval Methods for Systems of Equations, 1990, ch. 5). Rounding as in `enclosure`.
"""

from __future__ import annotations

import time
from copy import copy
from dataclasses import dataclass, field
from functools import cached_property
from itertools import pairwise
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.enclosure import (
    HUGE,
    TINY,
    UNIT,
    divide_clear,
    down,
    gamma,
    middle,
    multiply,
    radius,
    scale,
    up,
)
from loopsim.numerics.newton import newton

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

BATCH = 128  # boxes per round: array calls are then well past their fixed cost, and memory stays small
SLICES = 12  # pieces a voltage is cut into by the nodal contraction
PROGRESS = 0.15  # a pass that narrows no width by this share has done its work; the box is tested and split
SMALL = 1e-7  # relative width at which an undecided box is called a cluster: a double root cannot be resolved below sqrt(2^-53) = 1e-8
NEWTON_STEPS = 12  # from the middle of a box on which the slope matrices are all regular, 4 to 9 were seen
INFLATIONS = 12  # Krawczyk with growing boxes: 1 to 3 were seen where it succeeds
RECENT = 24  # proved regions that a box is compared with: only neighbours of the last few still appear
FAR = 400.0  # width of a row's argument beyond which a cut of the argument itself comes first, for rows that grow without bound there
MAX_PASSES = 60  # narrowing passes before a box is split all the same
MAX_CLUSTERS = 400  # more undecided tiny boxes than this mean a continuum of solutions


class Rows(Protocol):
    """The scalar functions of all rows (loopsim.devices.phi_rows.PhiRows)."""

    @property
    def steep(self) -> NDArray[np.bool_]: ...
    def take(self, rows: Index) -> Rows: ...
    def value(self, w: Array) -> Array: ...
    def slope(self, w: Array) -> Array: ...
    def bounds(self, low: Array, high: Array) -> tuple[Array, Array]: ...
    def slope_bounds(self, low: Array, high: Array) -> tuple[Array, Array]: ...
    def chord(self, low: Array, high: Array) -> tuple[Array, Array, Array]: ...
    def inverse(self, low: Array, high: Array, y_low: Array, y_high: Array) -> tuple[Array, Array]: ...
    def split_points(self, low: Array, high: Array) -> Array: ...


@dataclass(frozen=True, eq=False)
class Problem:
    """The equations of one search. Row i should be the one that unknown i answers for (a matching), which the nodal contraction uses.

    G: (n, n); B: (n, m); W, V: (m, n); c_low .. d_high: (m,); s_low, s_high: (n,). Coefficients are exact as given.
    """

    G: Array
    B: Array
    W: Array
    V: Array
    rows: Rows
    c_low: Array
    c_high: Array
    d_low: Array
    d_high: Array
    s_low: Array
    s_high: Array

    @property
    def n(self) -> int:
        return int(self.G.shape[0])

    @property
    def m(self) -> int:
        return int(self.B.shape[1])

    @cached_property
    def product(self) -> Index:
        """Rows whose factor u is not simply 1."""
        if self.m == 0:
            return np.zeros(0, dtype=np.int64)
        plain = ~np.any(self.V != 0.0, axis=1) & (self.d_low == 1.0) & (self.d_high == 1.0)
        return np.flatnonzero(~plain)

    @cached_property
    def passive(self) -> tuple[float, Array] | None:
        """(least, losses (m,)): the symmetric part of every J = G + B diag(a) W with slopes a >= 0 is at least `least` - sum a losses; None
        where that is of no use.

        True of rising two-terminal elements in a linear network that only takes power (R. J. Duffin 1947; I. W. Sandberg, A. N. Willson
        1969, from memory): B_k is then d_k W_k, and what rounding left of the difference is the loss.
        """
        if self.m == 0 or len(self.product):
            return None
        symmetric = 0.5 * (self.G + self.G.T)
        least = float(np.linalg.eigvalsh(symmetric)[0]) - 16.0 * self.n * UNIT * float(np.linalg.norm(self.G))
        size = np.sum(self.W * self.W, axis=1)
        d = np.sum(self.B.T * self.W, axis=1) / np.where(size > 0.0, size, 1.0)
        if least <= 0.0 or np.any(d < 0.0) or np.any((size == 0.0) & np.any(self.B != 0.0, axis=0)):
            return None
        line = d[:, None] * self.W
        rest = np.linalg.norm(self.B.T - line, axis=1) + 4.0 * UNIT * (
            np.linalg.norm(self.B, axis=0) + np.linalg.norm(line, axis=1)
        )
        return least * (1.0 - 1e-9), rest * np.sqrt(size) * (1.0 + 1e-9)

    @cached_property
    def layout(self) -> Layout:
        """Where each quantity stands in a box."""
        n, m, q = self.n, self.m, len(self.product)
        ends = np.cumsum([0, n, m, m, q, q]).tolist()
        return Layout(*(slice(a, b) for a, b in pairwise(ends)))

    @cached_property
    def centres(self) -> tuple[Array, Array, Array, Array, Array, Array]:
        """c, d, s as centre and radius."""
        found = []
        for low, high in ((self.c_low, self.c_high), (self.d_low, self.d_high), (self.s_low, self.s_high)):
            centre = middle(low, high)
            found += [centre, np.where(low == high, 0.0, radius(low, high, centre))]
        return tuple(found)  # type: ignore[return-value]

    def with_sources(self, s: Array, s_rad: Array) -> Problem:
        """The same equations with centre and radius of s given box by box, (b, n) each, for `relax`, `newton_points` and `certify`; what
        was worked out for the equations is shared. `hull` and `nodal` go on using s_low and s_high, which have to hold every box's s."""
        other = copy(self)
        other.__dict__["centres"] = (*self.centres[:4], s, s_rad)
        return other

    @cached_property
    def magnitudes(self) -> tuple[Array, Array, Array, Array]:
        """|G|, |B|, |W|, |V|."""
        return np.abs(self.G), np.abs(self.B), np.abs(self.W), np.abs(self.V)

    @cached_property
    def table(self) -> LinearTable:
        """The linear rows G x + B psi = s, W x - w = -c, V x - u = -d over the variables (x, w, psi, u)."""
        n, m, q = self.n, self.m, len(self.product)
        total = n + 2 * m + q
        top = np.zeros((n, total))
        top[:, :n], top[:, n + m : n + 2 * m] = self.G, self.B
        mid = np.zeros((m, total))
        mid[:, :n], mid[:, n : n + m] = self.W, -np.eye(m)
        end = np.zeros((q, total))
        end[:, :n], end[:, n + 2 * m :] = self.V[self.product], -np.eye(q)
        extra, extra_low, extra_high = differences(top, self.s_low, self.s_high, n)
        low = np.concatenate([self.s_low, -self.c_high, -self.d_high[self.product], extra_low])
        high = np.concatenate([self.s_high, -self.c_low, -self.d_low[self.product], extra_high])
        return linear_table(np.concatenate([top, mid, end, extra]), low, high)

    @cached_property
    def nodal(self) -> NodalTable | None:
        """What the nodal contraction needs, None where no unknown enters its own row both ways."""
        return nodal_table(self)


@dataclass(frozen=True, eq=False)
class LinearTable:
    """Sparse rows sum_k coefficient_k z[index_k] in [low, high], padded: index, coefficient: (r, k). places: (z, l) positions of each
    variable in the flattened (r * k) terms, padded with a position that never binds."""

    index: Index
    coefficient: Array
    low: Array
    high: Array
    places: Index
    exclude: Array
    right_size: Array


def linear_table(matrix: Array, low: Array, high: Array) -> LinearTable:
    """Padded form of dense rows; all-zero rows are dropped (they bind nothing here; the caller checks them)."""
    keep = np.any(matrix != 0.0, axis=1)
    matrix, low, high = matrix[keep], low[keep], high[keep]
    counts = np.count_nonzero(matrix, axis=1)
    width = max(1, int(counts.max(initial=1)))
    index = np.full(
        (len(matrix), width), matrix.shape[1], dtype=np.int64
    )  # one past the end: a constant zero
    coefficient = np.ones((len(matrix), width))
    where: list[list[int]] = [[] for _ in range(matrix.shape[1])]
    for r, row in enumerate(matrix):
        columns = np.flatnonzero(row)
        index[r, : len(columns)] = columns
        coefficient[r, : len(columns)] = row[columns]
        for k, column in enumerate(columns):
            where[column].append(r * width + k)
    length = max(1, max((len(w) for w in where), default=1))
    places = np.full((matrix.shape[1], length), len(matrix) * width, dtype=np.int64)
    for column, spots in enumerate(where):  # type: ignore[assignment]
        places[column, : len(spots)] = spots
    size = np.maximum(np.abs(low), np.abs(high))[:, None]
    return LinearTable(
        index, coefficient, low[:, None], high[:, None], places, np.ones((width, width)) - np.eye(width), size
    )


def differences(matrix: Array, low: Array, high: Array, n: int) -> tuple[Array, Array, Array]:
    """Redundant rows: where rows share a long part exactly (all of G, or all of B), their difference with the first of them is short and
    binds two unknowns directly. Only differences that are exact in floating point are taken. n: where B begins is matrix[:, n:]."""
    found, lows, highs = [], [], []
    for part in (slice(0, n), slice(n, matrix.shape[1])):
        groups: dict[bytes, int] = {}
        for i, row in enumerate(matrix):
            if np.count_nonzero(row[part]) < 3:
                continue
            first = groups.setdefault(row[part].tobytes(), i)
            if first == i:
                continue
            difference = row - matrix[first]
            exact = np.all((difference + matrix[first] == row) & (row - difference == matrix[first]))
            if exact and np.count_nonzero(difference) < np.count_nonzero(row):
                found.append(difference)
                lows.append(float(down(np.array(low[i] - high[first]))))
                highs.append(float(up(np.array(high[i] - low[first]))))
    if not found:
        return np.zeros((0, matrix.shape[1])), np.zeros(0), np.zeros(0)
    return np.stack(found), np.array(lows), np.array(highs)


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


@dataclass(frozen=True, eq=False)
class Boxes:
    """A batch of boxes, low and high: (b, n + 2 m + 2 q), the columns x (n), w (m), psi (m), and for the q product rows u and phi.

    For a plain row phi is psi. `Layout` names the columns.
    """

    low: Array
    high: Array

    def __len__(self) -> int:
        return len(self.low)

    def pick(self, chosen: NDArray[np.bool_] | Index | slice) -> Boxes:
        return Boxes(self.low[chosen], self.high[chosen])

    def empty(self) -> NDArray[np.bool_]:
        """(b,) proved to hold nothing: some interval has its ends crossed. A NaN end crosses nothing, so it never proves."""
        return np.asarray((self.low > self.high).any(axis=1))


@dataclass(frozen=True, slots=True)
class Layout:
    """Column ranges of a box."""

    x: slice
    w: slice
    p: slice
    u: slice
    f: slice


def stack(parts: list[Boxes]) -> Boxes:
    """One batch from several."""
    if len(parts) == 1:
        return parts[0]
    return Boxes(np.concatenate([part.low for part in parts]), np.concatenate([part.high for part in parts]))


def boxes_over(problem: Problem, x_low: Array, x_high: Array) -> Boxes:
    """The boxes of x with everything that follows from x alone; x_low, x_high: (b, n)."""
    q = problem.product
    w_low, w_high = _affine(problem.W, x_low, x_high, problem.c_low, problem.c_high)
    if problem.m == 0:
        return Boxes(x_low, x_high)
    f_low, f_high = problem.rows.bounds(w_low, w_high)
    if len(q) == 0:
        return Boxes(
            np.concatenate([x_low, w_low, f_low], axis=1), np.concatenate([x_high, w_high, f_high], axis=1)
        )
    u_low, u_high = _affine(problem.V[q], x_low, x_high, problem.d_low[q], problem.d_high[q])
    p_low, p_high = f_low.copy(), f_high.copy()
    p_low[:, q], p_high[:, q] = multiply(f_low[:, q], f_high[:, q], u_low, u_high)
    return Boxes(
        np.concatenate([x_low, w_low, p_low, u_low, f_low[:, q]], axis=1),
        np.concatenate([x_high, w_high, p_high, u_high, f_high[:, q]], axis=1),
    )


def _affine(matrix: Array, x_low: Array, x_high: Array, c_low: Array, c_high: Array) -> tuple[Array, Array]:
    """matrix @ [x] + [c]: (b, r)."""
    plus, minus = np.maximum(matrix, 0.0), np.minimum(matrix, 0.0)
    low = x_low @ plus.T + x_high @ minus.T + c_low
    high = x_high @ plus.T + x_low @ minus.T + c_high
    size = np.maximum(np.abs(x_low), np.abs(x_high)) @ np.abs(matrix).T + np.maximum(
        np.abs(c_low), np.abs(c_high)
    )
    error = size * gamma(matrix.shape[1] + 2) + TINY
    return low - error, high + error


def hull(problem: Problem, boxes: Boxes) -> Boxes:
    """One pass of hull consistency: every linear row to every variable in it, then every scalar function both ways."""
    table = problem.table
    b, linear = len(boxes), len(table.places)
    pad = np.zeros((b, 1))
    z_low = np.concatenate([boxes.low[:, :linear], pad], axis=1)[:, table.index]
    z_high = np.concatenate([boxes.high[:, :linear], pad], axis=1)[:, table.index]
    first, second = table.coefficient * z_low, table.coefficient * z_high
    t_low, t_high = np.minimum(first, second), np.maximum(first, second)
    size = np.maximum(-t_low, t_high)
    if len(table.exclude) <= 24:
        others_low, others_high, others_size = (
            t_low @ table.exclude,
            t_high @ table.exclude,
            size @ table.exclude,
        )
    else:
        others_low, others_high, others_size = _others(t_low), _others(t_high), _others(size)
    # every term carries one rounding itself, the right side two more
    error = (others_size + table.right_size) * gamma(len(table.exclude) + 4) + TINY
    first = (table.low - others_high - error) / table.coefficient
    second = (table.high - others_low + error) / table.coefficient
    ends = np.empty((2, b, first.shape[1] * first.shape[2] + 1))
    ends[0, :, :-1] = down(np.minimum(first, second)).reshape(b, -1)
    ends[1, :, :-1] = up(np.maximum(first, second)).reshape(b, -1)
    ends[0, :, -1], ends[1, :, -1] = -np.inf, np.inf
    low, high = boxes.low.copy(), boxes.high.copy()
    low[:, :linear] = np.maximum(low[:, :linear], ends[0][:, table.places].max(axis=2))
    high[:, :linear] = np.minimum(high[:, :linear], ends[1][:, table.places].min(axis=2))
    if problem.m:
        _scalar(problem, low, high)
    return Boxes(low, high)


def _scalar(problem: Problem, low: Array, high: Array) -> None:
    """phi and psi to each other, in place: forward from w, back from psi."""
    at = problem.layout
    w_low, w_high = low[:, at.w], high[:, at.w]
    # a crossed interval is already empty; the functions are shown its ends in order
    safe_low, safe_high = np.minimum(w_low, w_high), np.maximum(w_low, w_high)
    lower, upper = problem.rows.bounds(safe_low, safe_high)
    q = problem.product
    p_low, p_high = low[:, at.p], high[:, at.p]
    if len(q) == 0:
        np.maximum(p_low, lower, out=p_low)
        np.minimum(p_high, upper, out=p_high)
        f_low, f_high = p_low, p_high
    else:
        u_low, u_high, fq_low, fq_high = low[:, at.u], high[:, at.u], low[:, at.f], high[:, at.f]
        f_low, f_high = np.maximum(p_low, lower), np.minimum(p_high, upper)
        f_low[:, q], f_high[:, q] = np.maximum(fq_low, lower[:, q]), np.minimum(fq_high, upper[:, q])
        pq_low, pq_high = multiply(f_low[:, q], f_high[:, q], u_low, u_high)
        pq_low, pq_high = np.maximum(pq_low, p_low[:, q]), np.minimum(pq_high, p_high[:, q])
        lower, upper = divide_clear(pq_low, pq_high, u_low, u_high)
        f_low[:, q], f_high[:, q] = np.maximum(f_low[:, q], lower), np.minimum(f_high[:, q], upper)
        lower, upper = divide_clear(pq_low, pq_high, f_low[:, q], f_high[:, q])
        low[:, at.u], high[:, at.u] = np.maximum(u_low, lower), np.minimum(u_high, upper)
        low[:, at.f], high[:, at.f] = f_low[:, q], f_high[:, q]
        p_low[:], p_high[:] = f_low, f_high
        p_low[:, q], p_high[:, q] = pq_low, pq_high
    lower, upper = problem.rows.inverse(safe_low, safe_high, f_low, f_high)
    low[:, at.w], high[:, at.w] = np.maximum(w_low, lower), np.minimum(w_high, upper)


def _others(t: Array) -> Array:
    """Sum of all other terms along the last axis, without subtracting any (prefix plus suffix sums)."""
    before = np.zeros_like(t)
    after = np.zeros_like(t)
    np.cumsum(t[..., :-1], axis=-1, out=before[..., 1:])
    after[..., :-1] = np.cumsum(t[..., :0:-1], axis=-1)[..., ::-1]
    return before + after


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
    fixed_low, fixed_high = _affine(table.off, x_low, x_high, -problem.s_high[i], -problem.s_low[i])
    term_low, term_high = _affine(
        table.keep, boxes.low[:, at.p], boxes.high[:, at.p], np.zeros(len(j)), np.zeros(len(j))
    )
    fixed_low, fixed_high = down(fixed_low + term_low), up(fixed_high + term_high)
    k = table.pair_row
    rest_low, rest_high = _affine(table.rest, x_low, x_high, table.c_low, table.c_high)
    slack = np.maximum(np.abs(x_low), np.abs(x_high)) @ table.fuzz.T * (1.0 + gamma(problem.n))
    rest_low, rest_high = down(rest_low - slack), up(rest_high + slack)
    has_product = len(problem.product) > 0
    if has_product:
        u_rest_low, u_rest_high = _affine(
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
    w_low, w_high = np.clip(w_low, known_low, known_high), np.clip(w_high, known_low, known_high)
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
    share = np.linspace(0.0, 1.0, pieces + 1).reshape((-1,) + (1,) * low.ndim)
    cuts = low + (high - low) * share
    wide = high - low > 50.0
    if np.any(wide):
        cuts = np.where(wide, np.sinh(np.arcsinh(low) + (np.arcsinh(high) - np.arcsinh(low)) * share), cuts)
    cuts = np.clip(cuts, low, high)
    cuts[0], cuts[-1] = low, high
    return np.asarray(cuts)


@dataclass(frozen=True, eq=False)
class Relaxed:
    """What a linear relaxation leaves behind for the choice of a split. impact: (b, m) share of the widths that each row's chord error
    makes; inverse: (b, n, n) of the matrix of chords, approximate."""

    boxes: Boxes
    impact: Array
    inverse: Array


def invert(matrices: Array) -> Array:
    """Approximate inverses (b, n, n); zeros where a matrix is singular or not finite (which proves nothing, and is safe)."""
    good = np.all(np.isfinite(matrices), axis=(1, 2))
    matrices = np.where(good[:, None, None], matrices, np.eye(matrices.shape[1]))
    try:
        inverse = np.linalg.inv(matrices)
    except np.linalg.LinAlgError:
        inverse = np.zeros_like(matrices)
        for i, matrix in enumerate(matrices):
            try:
                inverse[i] = np.linalg.inv(matrix)
            except np.linalg.LinAlgError:
                good[i] = False
    good &= np.all(np.abs(inverse) < 1e100, axis=(1, 2)) & np.all(np.isfinite(inverse), axis=(1, 2))
    return np.where(good[:, None, None], inverse, 0.0)


def _times(matrix: Array, vector: Array) -> Array:
    return np.asarray((matrix @ vector[..., None])[..., 0])


def relax(problem: Problem, boxes: Boxes) -> Relaxed:
    """Replace each scalar function by its chord and error, solve the linear rest by one real inverse, intersect.

    x = N (N M = I - E): x = xm + N r + E (x - xm) for any N, r the residual of the relaxed row at xm; so an inaccurate inverse only widens.
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    c, c_rad, d, d_rad, s, s_rad = problem.centres
    q = problem.product
    at = problem.layout
    x_low, x_high = boxes.low[:, at.x], boxes.high[:, at.x]
    w_low, w_high = boxes.low[:, at.w], boxes.high[:, at.w]
    xm = middle(x_low, x_high)
    rx = radius(x_low, x_high, xm)
    a, e_low, e_high = problem.rows.chord(w_low, w_high)
    em = middle(e_low, e_high)
    er = radius(e_low, e_high, em)
    lines = a
    f = np.zeros_like(a)
    u = np.ones_like(a)
    if len(q):
        um = middle(boxes.low[:, at.u], boxes.high[:, at.u])
        ur = radius(boxes.low[:, at.u], boxes.high[:, at.u], um)
        fm = middle(boxes.low[:, at.f], boxes.high[:, at.f])
        fr = radius(boxes.low[:, at.f], boxes.high[:, at.f], fm)
        f[:, q] = fm
        u[:, q] = um
        # phi u = um (a w + e) + fm (u - um) + (phi - fm)(u - um)
        lines = a * u
        er = up(np.abs(u) * er)
        er[:, q] = up(er[:, q] + up(fr * ur))
        em = em * u
        er = er + (np.abs(em) * 2.0 + np.abs(lines) * np.maximum(np.abs(w_low), np.abs(w_high))) * (
            2.0 * UNIT
        )
    slope = (
        lines[..., None] * problem.W + f[..., None] * problem.V if len(q) else lines[..., None] * problem.W
    )
    matrix = problem.G + problem.B @ slope
    inverse = invert(matrix)
    wm = _times(problem.W, xm) + c
    vm = _times(problem.V, xm) + d if len(q) else u
    inner = lines * wm + em + (f * (vm - u) if len(q) else 0.0)
    residual = s - _times(problem.G, xm) - _times(problem.B, inner)
    # rounding of the residual and of the matrix, in magnitudes
    size_x = np.abs(xm)
    inner_size = np.abs(lines) * (_times(w, size_x) + np.abs(c)) + np.abs(em)
    inner_rad = er + np.abs(lines) * c_rad
    matrix_rad = np.abs(lines) * _times(w, rx)
    if len(q):
        inner_size = inner_size + np.abs(f) * (_times(v, size_x) + np.abs(d) + np.abs(u))
        inner_rad = inner_rad + np.abs(f) * d_rad
        matrix_rad = matrix_rad + np.abs(f) * _times(v, rx)
    k = n + 2 * m + 8
    row_round = (np.abs(s) + _times(g, size_x) + _times(b, inner_size)) * gamma(k)
    matrix_round = (_times(g, rx) + _times(b, matrix_rad)) * gamma(k)
    error = np.eye(n) - inverse @ matrix
    size_n = np.abs(inverse)
    residual_rad = s_rad + row_round + matrix_round
    reach = _times(np.abs(matrix), rx)
    through = inverse @ problem.B
    spread_b = _times(b, inner_rad)
    # the product N B and N M carry rounding of their own
    x_rad = (
        _times(np.abs(through), inner_rad)
        + _times(np.abs(error), rx)
        + _times(size_n, residual_rad + (spread_b + reach + np.abs(residual)) * gamma(k))
        + rx * (4.0 * UNIT)
    )
    x_rad = up(x_rad * (1.0 + gamma(k))) + TINY
    dx = _times(inverse, residual)
    proved = np.any(inverse != 0.0, axis=(1, 2))[:, None]
    low, high = boxes.low.copy(), boxes.high.copy()
    low[:, at.x] = np.where(proved, np.maximum(x_low, down(xm + dx - x_rad)), x_low)
    high[:, at.x] = np.where(proved, np.minimum(x_high, up(xm + dx + x_rad)), x_high)
    # the same for w = W x + c, with the cancellation inside W N B kept
    w_through = problem.W @ through
    w_rad = (
        _times(np.abs(w_through), inner_rad)
        + _times(
            w,
            _times(np.abs(error), rx)
            + _times(size_n, residual_rad + 2.0 * (spread_b + reach + np.abs(residual)) * gamma(k)),
        )
        + _times(w, rx * (4.0 * UNIT) + (size_x + np.abs(dx)) * gamma(k))
        + np.abs(c) * gamma(2)
        + c_rad
    )
    w_rad = up(w_rad * (1.0 + gamma(k))) + TINY
    dw = _times(problem.W, dx)
    low[:, at.w] = np.where(proved, np.maximum(w_low, down(wm + dw - w_rad)), w_low)
    high[:, at.w] = np.where(proved, np.minimum(w_high, up(wm + dw + w_rad)), w_high)
    width = np.maximum(w_high - w_low, TINY)
    impact = np.max(np.abs(w_through) / width[:, :, None], axis=1) * inner_rad
    return Relaxed(Boxes(low, high), np.nan_to_num(impact, nan=0.0, posinf=HUGE), inverse)


def injective(problem: Problem, boxes: Boxes) -> NDArray[np.bool_]:
    """(b,) whether the equations are one to one over {x: W x + c in [w], V x + d in [u], phi in [f]}.

    The difference of two values is J (x1 - x2), J = G + B (diag(a) W + diag(f) V) with a in the slope range times u, because every row is
    scalar. All such J are regular when a positive vector is shrunk by the bound of I - N J (Neumaier 1990, from memory).
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    at = problem.layout
    a_low, a_high = problem.rows.slope_bounds(boxes.low[:, at.w], boxes.high[:, at.w])
    q = problem.product
    f = np.zeros_like(a_low)
    fr = np.zeros_like(a_low)
    if len(q):
        a_low, a_high = a_low.copy(), a_high.copy()
        a_low[:, q], a_high[:, q] = multiply(
            a_low[:, q], a_high[:, q], boxes.low[:, at.u], boxes.high[:, at.u]
        )
        f[:, q] = middle(boxes.low[:, at.f], boxes.high[:, at.f])
        fr[:, q] = radius(boxes.low[:, at.f], boxes.high[:, at.f], f[:, q])
    a = middle(a_low, a_high)
    ar = radius(a_low, a_high, a)
    slope = a[..., None] * problem.W + (f[..., None] * problem.V if len(q) else 0.0)
    matrix = problem.G + problem.B @ slope
    inverse = invert(matrix)
    error = np.abs(np.eye(n) - inverse @ matrix)
    through = np.abs(inverse @ problem.B)
    k = n + 2 * m + 8
    size_n = np.abs(inverse)
    # magnitudes of everything that was multiplied, for the rounding of N, M and N B
    size = g + b @ (np.abs(slope) + ar[..., None] * w + fr[..., None] * v)
    loose = error + (size_n @ size) * (3.0 * gamma(k))
    w_through = np.abs(problem.W @ (inverse @ problem.B)) + (w @ (size_n @ b)) * gamma(k)
    v_through = np.abs(problem.V @ (inverse @ problem.B)) + (v @ (size_n @ b)) * gamma(k) if len(q) else None
    scales = np.maximum(_times(through, ar + fr) + 1e-30, 1e-30)
    y = np.ones_like(a)
    yv = np.ones_like(a)
    z = scales
    for _ in range(6):
        load = ar * y + fr * yv
        y = _times(w_through, load) + 1e-14 * (y + _times(w, z))
        top = np.maximum(np.max(y, axis=1, keepdims=True), TINY)
        y = y / top + 1e-12
        if v_through is not None:
            yv = _times(v_through, load) / top + 1e-12
        z = _times(through, ar * y + fr * yv) * 1.01 + 1e-13 * (1.0 + scales)
    # test the vector (z, y, yv) itself
    load = ar * y + fr * yv
    slack = _times(loose, z)
    image_z = _times(through, load) + slack + _times(size_n @ b, load) * gamma(k)
    image_y = _times(w_through, load) + _times(w, slack)
    good = np.all(image_z * (1.0 + 8 * gamma(k)) < z, axis=1) & np.all(
        image_y * (1.0 + 8 * gamma(k)) < y, axis=1
    )
    if v_through is not None:
        image_v = _times(v_through, load) + _times(v, slack)
        good &= np.all(image_v * (1.0 + 8 * gamma(k)) < yv, axis=1)
    good &= np.any(inverse != 0.0, axis=(1, 2))
    if problem.passive is not None:
        least, losses = problem.passive
        good |= (a_low >= 0.0).all(axis=1) & (np.maximum(a_high, 0.0) @ losses * (1.0 + 1e-9) < least)
    return np.asarray(good)


@dataclass(frozen=True, eq=False)
class Certified:
    """Points with proof of existence: good: (b,); x: (b, n) centre; spread: (b, n) half widths within which one solution lies; row_spread:
    (b, m) and factor_spread: (b, q) the same of w and of u of the product rows, with what cancels in a difference of x left out."""

    good: NDArray[np.bool_]
    x: Array
    spread: Array
    row_spread: Array
    factor_spread: Array

    def boxes(self, problem: Problem) -> Boxes:
        """The sets that were mapped into themselves, with everything that follows from them."""
        return boxes_about(problem, self.x, self.spread, self.row_spread, self.factor_spread)


def newton_points(problem: Problem, x: Array) -> Array:
    """Plain Newton from every row of x with the centres of c, d, s; rows that leave the numbers come back as they are."""
    c, _, d, _, s, _ = problem.centres
    has_product = len(problem.product) > 0
    for _ in range(NEWTON_STEPS):
        w = _times(problem.W, x) + c
        value, slope = problem.rows.value(w), problem.rows.slope(w)
        inner = value
        lines = slope[..., None] * problem.W
        if has_product:
            u = _times(problem.V, x) + d
            inner = value * u
            lines = (slope * u)[..., None] * problem.W + value[..., None] * problem.V
        residual = _times(problem.G, x) + _times(problem.B, inner) - s
        step = _times(invert(problem.G + problem.B @ lines), residual)
        step = np.where(np.isfinite(step), step, 0.0)
        x = x - step
        if np.all(np.abs(step) <= 1e-15 * np.abs(x) + 1e-300):
            break
    return x


def certify(problem: Problem, x: Array) -> Certified:
    """Existence by Krawczyk: the set |x' - x| <= spread, |W (x' - x)| <= row_spread, |V (x' - x)| <= factor_spread, which is convex, is
    mapped into itself by x - N F + (I - N J)(x' - x).

    Bounds of w of their own keep what cancels in a difference of two unknowns that move together.
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    q = problem.product
    v = v[q]
    size_x = np.abs(x)
    at = problem.layout
    here = boxes_over(problem, x, x)
    p_mid = middle(here.low[:, at.p], here.high[:, at.p])
    p_rad = radius(here.low[:, at.p], here.high[:, at.p], p_mid)
    _, _, _, _, s, s_rad = problem.centres
    k = n + 2 * m + 8
    residual = _times(problem.G, x) + _times(problem.B, p_mid) - s
    rounding = (_times(g, size_x) + _times(b, np.abs(p_mid)) + np.abs(s)) * gamma(k)
    a = problem.rows.slope(middle(here.low[:, at.w], here.high[:, at.w])) if m else np.zeros((len(x), 0))
    f = np.zeros_like(a)
    if len(q):
        u = np.ones_like(a)
        u[:, q] = middle(here.low[:, at.u], here.high[:, at.u])
        f[:, q] = middle(here.low[:, at.f], here.high[:, at.f])
        a = a * u
    lines = a[..., None] * problem.W + (f[..., None] * problem.V if len(q) else 0.0)
    matrix = problem.G + problem.B @ lines
    inverse = invert(matrix)
    size_n = np.abs(inverse)
    through = inverse @ problem.B
    size_b = _times(b, p_rad)
    # what the rounding of N, of the residual and of their products can do, x by x
    inexact = _times(size_n, rounding + (np.abs(residual) + size_b + s_rad) * gamma(k))
    floor = np.maximum(size_x * (2.0 * UNIT), TINY)
    # x itself, then W x and V x, whose rows are multiplied into N before any magnitude is taken
    views = [
        (inverse, through, np.eye(n)),
        (problem.W @ inverse, problem.W @ through, w),
        (problem.V[q] @ inverse, problem.V[q] @ through, v),
    ]
    sizes = [np.abs(t) for _, t, _ in views]
    shifts = []
    for (rows, _, own), size in zip(views, sizes, strict=True):
        moved = np.abs(_times(rows, residual)) + _times(size, p_rad) + _times(np.abs(rows), s_rad) + _times(own, inexact)
        shifts.append(up(moved * (1.0 + gamma(k))) + _times(own, floor) + TINY)
    spreads = [shift * 2.0 for shift in shifts]
    good = np.zeros(len(x), dtype=bool)
    proved = np.any(inverse != 0.0, axis=(1, 2))
    for spread in spreads:
        proved &= np.all(np.isfinite(spread), axis=1)
    spreads = [np.where(np.isfinite(spread), spread, 1.0) for spread in spreads]
    error = np.abs(np.eye(n) - inverse @ matrix)
    for _ in range(INFLATIONS):
        spread, row_spread, factor_spread = spreads
        here = boxes_about(problem, x, spread, row_spread, factor_spread)
        a_low, a_high = problem.rows.slope_bounds(here.low[:, at.w], here.high[:, at.w]) if m else (a, a)
        if len(q):
            a_low, a_high = a_low.copy(), a_high.copy()
            a_low[:, q], a_high[:, q] = multiply(
                a_low[:, q], a_high[:, q], here.low[:, at.u], here.high[:, at.u]
            )
        ar = radius(a_low, a_high, a)
        fr = np.zeros_like(a)
        move = ar * row_spread
        steep = (np.abs(a) + ar) * _times(w, spread)
        if len(q):
            fr[:, q] = radius(here.low[:, at.f], here.high[:, at.f], f[:, q])
            move[:, q] += fr[:, q] * factor_spread
            steep[:, q] += (np.abs(f[:, q]) + fr[:, q]) * _times(v, spread)
        size_row = _times(g, spread) + _times(b, steep)
        loose = _times(error, spread) + _times(size_n, size_row + _times(b, move)) * (3.0 * gamma(k))
        images = [
            up((shift + _times(own, loose) + _times(size, move)) * (1.0 + gamma(k))) + TINY
            for shift, size, (_, _, own) in zip(shifts, sizes, views, strict=True)
        ]
        inside = proved & ~good
        for image, spread in zip(images, spreads, strict=True):
            inside &= np.all(image < spread, axis=1)
        good |= inside
        if np.all(good | ~proved):
            break
        grow = ~good[:, None]
        spreads = [
            np.where(grow & (image < 1e6 * (1.0 + largest)), np.maximum(image * 1.2, spread), spread)
            for image, spread, largest in zip(
                images, spreads, (size_x, _times(w, size_x), _times(v, size_x)), strict=True
            )
        ]
    return Certified(good, x, *spreads)


def boxes_about(problem: Problem, x: Array, spread: Array, row_spread: Array, factor_spread: Array) -> Boxes:
    """The boxes x +/- spread with w within row_spread and u within factor_spread of their middles as well; no contraction."""
    zero = spread == 0.0
    x_low, x_high = np.where(zero, x, down(x - spread)), np.where(zero, x, up(x + spread))
    if problem.m == 0:
        return Boxes(x_low, x_high)
    q = problem.product
    w_low, w_high = _about(problem.W, x, problem.c_low, problem.c_high, row_spread)
    f_low, f_high = problem.rows.bounds(w_low, w_high)
    if len(q) == 0:
        return Boxes(np.concatenate([x_low, w_low, f_low], axis=1), np.concatenate([x_high, w_high, f_high], axis=1))
    u_low, u_high = _about(problem.V[q], x, problem.d_low[q], problem.d_high[q], factor_spread)
    p_low, p_high = f_low.copy(), f_high.copy()
    p_low[:, q], p_high[:, q] = multiply(f_low[:, q], f_high[:, q], u_low, u_high)
    return Boxes(
        np.concatenate([x_low, w_low, p_low, u_low, f_low[:, q]], axis=1),
        np.concatenate([x_high, w_high, p_high, u_high, f_high[:, q]], axis=1),
    )


def _about(matrix: Array, x: Array, c_low: Array, c_high: Array, spread: Array) -> tuple[Array, Array]:
    """matrix @ x + [c] +/- spread: (b, r)."""
    low, high = _affine(matrix, x, x, c_low, c_high)
    return down(low - spread), up(high + spread)


def start_points(problem: Problem, x: Array, spread: Array) -> Boxes:
    """The boxes x +/- spread with everything that follows from x; no contraction."""
    zero = spread == 0.0
    return boxes_over(problem, np.where(zero, x, down(x - spread)), np.where(zero, x, up(x + spread)))


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


def damped_points(problem: Problem, start: Array) -> Array:
    """Damped Newton from each start, for boxes proved one to one on which plain Newton did not settle. (b, n), NaN-free."""
    c, _, d, _, s, _ = problem.centres
    has_product = len(problem.product) > 0

    def parts(x: Array) -> tuple[Array, Array]:
        w = _times(problem.W, x) + c
        return w, _times(problem.V, x) + d if has_product else np.ones_like(w)

    def residual(x: Array) -> Array:
        w, u = parts(x)
        return _times(problem.G, x) + _times(problem.B, problem.rows.value(w) * u) - s

    def jacobian(x: Array) -> Array:
        w, u = parts(x)
        lines = (problem.rows.slope(w) * u)[..., None] * problem.W
        if has_product:
            lines = lines + problem.rows.value(w)[..., None] * problem.V
        return np.asarray(problem.G + problem.B @ lines)

    return newton(residual, jacobian, start).x


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


def ends(problem: Problem, boxes: Boxes) -> Array:
    """(b, 2, n) the x part of boxes."""
    return np.stack([boxes.low[:, problem.layout.x], boxes.high[:, problem.layout.x]], axis=1)


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


def join(a: Boxes, b: Boxes) -> Boxes:
    """Hull of two batches, box by box."""
    return Boxes(np.minimum(a.low, b.low), np.maximum(a.high, b.high))


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
