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
from dataclasses import dataclass, field
from functools import cached_property
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.enclosure import HUGE, TINY, UNIT, divide_clear, down, gamma, middle, multiply, radius, scale, up

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

BATCH = 128  # boxes per round: array calls are then well past their fixed cost, and memory stays small
SLICES = 12  # pieces a voltage is cut into by the nodal contraction
PROGRESS = 0.15  # a pass that narrows no width by this share has done its work; the box is tested and split
SMALL = 1e-7  # relative width at which an undecided box is called a cluster: a double root cannot be resolved below sqrt(2^-53) = 1e-8
NEWTON_STEPS = 12  # from the middle of a box on which the slope matrices are all regular, 4 to 9 were seen
INFLATIONS = 12  # Krawczyk with growing boxes: 1 to 3 were seen where it succeeds
MAX_CLUSTERS = 400  # more undecided tiny boxes than this mean a continuum of solutions


class Rows(Protocol):
    """The scalar functions of all rows (loopsim.devices.phi_rows.PhiRows)."""

    def take(self, rows: Index) -> "Rows": ...
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
    def centres(self) -> tuple[Array, Array, Array, Array, Array, Array]:
        """c, d, s as centre and radius."""
        found = []
        for low, high in ((self.c_low, self.c_high), (self.d_low, self.d_high), (self.s_low, self.s_high)):
            centre = middle(low, high)
            found += [centre, np.where(low == high, 0.0, radius(low, high, centre))]
        return tuple(found)  # type: ignore[return-value]

    @cached_property
    def magnitudes(self) -> tuple[Array, Array, Array, Array]:
        """|G|, |B|, |W|, |V|."""
        return np.abs(self.G), np.abs(self.B), np.abs(self.W), np.abs(self.V)

    @cached_property
    def table(self) -> "LinearTable":
        """The linear rows G x + B psi = s, W x - w = -c, V x - u = -d over the variables (x, w, psi, u)."""
        n, m, q = self.n, self.m, len(self.product)
        total = n + 2 * m + q
        top = np.zeros((n, total))
        top[:, :n], top[:, n + m : n + 2 * m] = self.G, self.B
        mid = np.zeros((m, total))
        mid[:, :n], mid[:, n : n + m] = self.W, -np.eye(m)
        end = np.zeros((q, total))
        end[:, :n], end[:, n + 2 * m :] = self.V[self.product], -np.eye(q)
        low = np.concatenate([self.s_low, -self.c_high, -self.d_high[self.product]])
        high = np.concatenate([self.s_high, -self.c_low, -self.d_low[self.product]])
        return linear_table(np.concatenate([top, mid, end]), low, high)

    @cached_property
    def nodal(self) -> "NodalTable | None":
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


def linear_table(matrix: Array, low: Array, high: Array) -> LinearTable:
    """Padded form of dense rows; all-zero rows are dropped (they bind nothing here; the caller checks them)."""
    keep = np.any(matrix != 0.0, axis=1)
    matrix, low, high = matrix[keep], low[keep], high[keep]
    counts = np.count_nonzero(matrix, axis=1)
    width = max(1, int(counts.max(initial=1)))
    index = np.full((len(matrix), width), matrix.shape[1], dtype=np.int64)  # one past the end: a constant zero
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
    for column, spots in enumerate(where):
        places[column, : len(spots)] = spots
    return LinearTable(index, coefficient, low, high, places, np.ones((width, width)) - np.eye(width))


@dataclass(frozen=True, eq=False)
class NodalTable:
    """For each unknown j with at least two terms of its own row moving with it: the terms (j, k) flattened to length t.

    unknowns: (u,); own: (u,) G_jj; off: (u, n) rest of the row; keep: (u, m) B of terms that do not move with x_j;
    pair_unknown: (t,) position in `unknowns`; pair_row: (t,) row k; weight: (t,) B_jk; lever: (t,) W_kj; rest: (t, n) W_k without j;
    factor_lever, factor_rest the same of V; gather: (t, u) 0/1 sum of terms per unknown.
    """

    unknowns: Index
    own: Array
    off: Array
    keep: Array
    pair_row: Index
    pair_unknown: Index
    weight: Array
    lever: Array
    rest: Array
    factor_lever: Array
    factor_rest: Array
    gather: Array
    rows: Rows


def nodal_table(problem: Problem) -> NodalTable | None:
    """Collect the pairs; an unknown whose row moves with it through one term only is served by hull consistency already."""
    moves = (problem.W != 0.0) | (problem.V != 0.0)
    pairs: list[tuple[int, int]] = []
    unknowns = []
    for j in range(problem.n):
        ks = np.flatnonzero((problem.B[j] != 0.0) & moves[:, j])
        if len(ks) == 0 or len(ks) + (problem.G[j, j] != 0.0) < 2:
            continue
        pairs += [(len(unknowns), int(k)) for k in ks]
        unknowns.append(j)
    if not unknowns:
        return None
    which = np.array([u for u, _ in pairs], dtype=np.int64)
    ks = np.array([k for _, k in pairs], dtype=np.int64)
    js = np.array(unknowns, dtype=np.int64)
    off = problem.G[js].copy()
    off[np.arange(len(js)), js] = 0.0
    keep = problem.B[js].copy()
    keep[which, ks] = 0.0
    rest, factor_rest = problem.W[ks].copy(), problem.V[ks].copy()
    here = np.arange(len(ks))
    lever, factor_lever = rest[here, js[which]].copy(), factor_rest[here, js[which]].copy()
    rest[here, js[which]] = 0.0
    factor_rest[here, js[which]] = 0.0
    gather = np.zeros((len(ks), len(js)))
    gather[here, which] = 1.0
    return NodalTable(
        js, problem.G[js, js], off, keep, ks, which, problem.B[js[which], ks], lever, rest, factor_lever, factor_rest, gather,
        problem.rows.take(ks),
    )


@dataclass(frozen=True, eq=False)
class Boxes:
    """A batch of boxes: x: (b, n), w, f (phi), p (psi): (b, m), u: (b, q), each as low and high."""

    x_low: Array
    x_high: Array
    w_low: Array
    w_high: Array
    f_low: Array
    f_high: Array
    p_low: Array
    p_high: Array
    u_low: Array
    u_high: Array

    def __len__(self) -> int:
        return len(self.x_low)

    def pick(self, chosen: NDArray[np.bool_] | Index | slice) -> "Boxes":
        return Boxes(*(getattr(self, name)[chosen] for name in _FIELDS))

    def empty(self) -> NDArray[np.bool_]:
        """(b,) proved to hold nothing: some interval has its ends crossed (or is not a number, which is never proof: see below)."""
        crossed = np.any(self.x_low > self.x_high, axis=1)
        for low, high in ((self.w_low, self.w_high), (self.f_low, self.f_high), (self.p_low, self.p_high), (self.u_low, self.u_high)):
            crossed |= np.any(low > high, axis=1)
        return np.asarray(crossed)


_FIELDS = ("x_low", "x_high", "w_low", "w_high", "f_low", "f_high", "p_low", "p_high", "u_low", "u_high")


def stack(parts: list[Boxes]) -> Boxes:
    """One batch from several."""
    return parts[0] if len(parts) == 1 else Boxes(*(np.concatenate([getattr(p, name) for p in parts]) for name in _FIELDS))


def start_box(problem: Problem, low: Array, high: Array) -> Boxes:
    """A batch of one: x in [low, high], the rest as wide as that allows."""
    x_low, x_high = low[None].astype(float), high[None].astype(float)
    w_low, w_high = _affine(problem.W, x_low, x_high, problem.c_low, problem.c_high)
    q = problem.product
    u_low, u_high = _affine(problem.V[q], x_low, x_high, problem.d_low[q], problem.d_high[q])
    f_low, f_high = problem.rows.bounds(w_low, w_high) if problem.m else (w_low, w_high)
    p_low, p_high = _product(problem, f_low, f_high, u_low, u_high)
    return Boxes(x_low, x_high, w_low, w_high, f_low, f_high, p_low, p_high, u_low, u_high)


def _affine(matrix: Array, x_low: Array, x_high: Array, c_low: Array, c_high: Array) -> tuple[Array, Array]:
    """matrix @ [x] + [c]: (b, r)."""
    plus, minus = np.maximum(matrix, 0.0), np.minimum(matrix, 0.0)
    low = x_low @ plus.T + x_high @ minus.T + c_low
    high = x_high @ plus.T + x_low @ minus.T + c_high
    size = np.maximum(np.abs(x_low), np.abs(x_high)) @ np.abs(matrix).T + np.maximum(np.abs(c_low), np.abs(c_high))
    error = size * gamma(matrix.shape[1] + 2) + TINY
    return low - error, high + error


def _product(problem: Problem, f_low: Array, f_high: Array, u_low: Array, u_high: Array) -> tuple[Array, Array]:
    q = problem.product
    if len(q) == 0:
        return f_low, f_high
    p_low, p_high = f_low.copy(), f_high.copy()
    p_low[:, q], p_high[:, q] = multiply(f_low[:, q], f_high[:, q], u_low, u_high)
    return p_low, p_high


def hull(problem: Problem, boxes: Boxes) -> Boxes:
    """One pass of hull consistency: every linear row to every variable in it, then every scalar function both ways."""
    n, m = problem.n, problem.m
    table = problem.table
    b = len(boxes)
    zero = np.zeros((b, 1))
    z_low = np.concatenate([boxes.x_low, boxes.w_low, boxes.p_low, boxes.u_low, zero], axis=1)
    z_high = np.concatenate([boxes.x_high, boxes.w_high, boxes.p_high, boxes.u_high, zero], axis=1)
    first, second = table.coefficient * z_low[:, table.index], table.coefficient * z_high[:, table.index]
    t_low, t_high = np.minimum(first, second), np.maximum(first, second)
    size = np.maximum(np.abs(t_low), np.abs(t_high))
    if table.exclude.shape[0] <= 24:
        others_low, others_high, others_size = t_low @ table.exclude, t_high @ table.exclude, size @ table.exclude
    else:
        others_low, others_high, others_size = _others(t_low), _others(t_high), _others(size)
    # every term carries one rounding itself, the right side two more
    error = (others_size + np.abs(table.high)[:, None] + np.abs(table.low)[:, None]) * gamma(table.exclude.shape[0] + 4) + TINY
    rest_low = table.low[:, None] - others_high - error
    rest_high = table.high[:, None] - others_low + error
    first, second = rest_low / table.coefficient, rest_high / table.coefficient
    new_low = down(np.minimum(first, second)).reshape(b, -1)
    new_high = up(np.maximum(first, second)).reshape(b, -1)
    new_low = np.concatenate([new_low, np.full((b, 1), -np.inf)], axis=1)[:, table.places].max(axis=2)
    new_high = np.concatenate([new_high, np.full((b, 1), np.inf)], axis=1)[:, table.places].min(axis=2)
    z_low, z_high = np.maximum(z_low[:, :-1], new_low), np.minimum(z_high[:, :-1], new_high)
    x_low, x_high = z_low[:, :n], z_high[:, :n]
    w_low, w_high = z_low[:, n : n + m], z_high[:, n : n + m]
    p_low, p_high = z_low[:, n + m : n + 2 * m], z_high[:, n + m : n + 2 * m]
    u_low, u_high = z_low[:, n + 2 * m :], z_high[:, n + 2 * m :]
    return _scalar(problem, x_low, x_high, w_low, w_high, boxes.f_low, boxes.f_high, p_low, p_high, u_low, u_high)


def _others(t: Array) -> Array:
    """Sum of all other terms along the last axis, without subtracting any (prefix plus suffix sums)."""
    before = np.zeros_like(t)
    after = np.zeros_like(t)
    np.cumsum(t[..., :-1], axis=-1, out=before[..., 1:])
    after[..., :-1] = np.cumsum(t[..., :0:-1], axis=-1)[..., ::-1]
    return before + after


def _scalar(
    problem: Problem, x_low: Array, x_high: Array, w_low: Array, w_high: Array, f_low: Array, f_high: Array,
    p_low: Array, p_high: Array, u_low: Array, u_high: Array,
) -> Boxes:
    """phi and psi to each other: forward from w, back from psi."""
    if problem.m == 0:
        return Boxes(x_low, x_high, w_low, w_high, f_low, f_high, p_low, p_high, u_low, u_high)
    # a crossed interval is already empty; keep its ends finite and ordered so that the functions see no nonsense
    crossed = w_low > w_high
    safe_low, safe_high = np.where(crossed, w_high, w_low), np.where(crossed, w_low, w_high)
    lower, upper = problem.rows.bounds(safe_low, safe_high)
    f_low, f_high = np.maximum(f_low, lower), np.minimum(f_high, upper)
    q = problem.product
    if len(q) == 0:
        f_low, f_high = np.maximum(f_low, p_low), np.minimum(f_high, p_high)
        p_low, p_high = f_low, f_high
    else:
        plain = np.ones(problem.m, dtype=bool)
        plain[q] = False
        f_low[:, plain] = np.maximum(f_low[:, plain], p_low[:, plain])
        f_high[:, plain] = np.minimum(f_high[:, plain], p_high[:, plain])
        p_low, p_high = p_low.copy(), p_high.copy()
        p_low[:, plain], p_high[:, plain] = f_low[:, plain], f_high[:, plain]
        fq_low, fq_high = f_low[:, q], f_high[:, q]
        lower, upper = multiply(fq_low, fq_high, u_low, u_high)
        p_low[:, q], p_high[:, q] = np.maximum(p_low[:, q], lower), np.minimum(p_high[:, q], upper)
        lower, upper = divide_clear(p_low[:, q], p_high[:, q], u_low, u_high)
        f_low[:, q], f_high[:, q] = np.maximum(fq_low, lower), np.minimum(fq_high, upper)
        lower, upper = divide_clear(p_low[:, q], p_high[:, q], f_low[:, q], f_high[:, q])
        u_low, u_high = np.maximum(u_low, lower), np.minimum(u_high, upper)
    lower, upper = problem.rows.inverse(safe_low, safe_high, f_low, f_high)
    w_low, w_high = np.maximum(w_low, lower), np.minimum(w_high, upper)
    return Boxes(x_low, x_high, w_low, w_high, f_low, f_high, p_low, p_high, u_low, u_high)


def nodal(problem: Problem, boxes: Boxes) -> Boxes:
    """Narrow each unknown by its own row with everything else at its extremes: slices of it in which the row cannot balance are cut off.

    A node equation is monotone in its own voltage for most nodes, where this solves it at both ends of everything else; slices serve the
    others too.
    """
    table = problem.nodal
    if table is None:
        return boxes
    j, t = table.unknowns, len(table.pair_row)
    x_low, x_high = boxes.x_low, boxes.x_high
    fixed_low, fixed_high = _affine(table.off, x_low, x_high, -problem.s_high[j], -problem.s_low[j])
    term_low, term_high = _affine(table.keep, boxes.p_low, boxes.p_high, np.zeros(len(j)), np.zeros(len(j)))
    fixed_low, fixed_high = down(fixed_low + term_low), up(fixed_high + term_high)
    k = table.pair_row
    rest_low, rest_high = _affine(table.rest, x_low, x_high, problem.c_low[k], problem.c_high[k])
    has_product = len(problem.product) > 0
    if has_product:
        u_rest_low, u_rest_high = _affine(table.factor_rest, x_low, x_high, problem.d_low[k], problem.d_high[k])
    own_low, own_high = x_low[:, j], x_high[:, j]
    cuts = slices(own_low, own_high, SLICES)  # (q + 1, b, u)
    start, stop = cuts[:-1], cuts[1:]
    ts, te = start[:, :, table.pair_unknown], stop[:, :, table.pair_unknown]
    reach_low, reach_high = scale(table.lever, ts, te)
    w_low, w_high = down(rest_low + reach_low), up(rest_high + reach_high)
    # the interval of w itself is known too; a slice that misses it is empty, but stays here clipped and is left to the row test
    known_low, known_high = boxes.w_low[:, k], boxes.w_high[:, k]
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
    error = (size + np.maximum(np.abs(own_term_low), np.abs(own_term_high)) + np.maximum(np.abs(fixed_low), np.abs(fixed_high)))
    error = error * gamma(t + 4) + TINY
    hit = (low - error <= 0.0) & (high + error >= 0.0) & ((missed.astype(float) @ table.gather) == 0.0)
    some = hit.any(axis=0)
    first = hit.argmax(axis=0)
    last = SLICES - 1 - hit[::-1].argmax(axis=0)
    new_low = np.where(some, np.take_along_axis(start, first[None], axis=0)[0], HUGE)
    new_high = np.where(some, np.take_along_axis(stop, last[None], axis=0)[0], -HUGE)
    x_low, x_high = x_low.copy(), x_high.copy()
    x_low[:, j], x_high[:, j] = np.maximum(own_low, new_low), np.minimum(own_high, new_high)
    return Boxes(x_low, x_high, *(getattr(boxes, name) for name in _FIELDS[2:]))


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
    makes."""

    boxes: Boxes
    impact: Array


def invert(matrices: Array) -> Array:
    """Approximate inverses (b, n, n); zeros where a matrix is singular or not finite (a zero preconditioner proves nothing, and is safe)."""
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
    xm = middle(boxes.x_low, boxes.x_high)
    rx = radius(boxes.x_low, boxes.x_high, xm)
    a, e_low, e_high = problem.rows.chord(boxes.w_low, boxes.w_high)
    em = middle(e_low, e_high)
    er = radius(e_low, e_high, em)
    lines = a
    f = np.zeros_like(a)
    fr = np.zeros_like(a)
    u = np.ones_like(a)
    if len(q):
        um = middle(boxes.u_low, boxes.u_high)
        ur = radius(boxes.u_low, boxes.u_high, um)
        fm = middle(boxes.f_low[:, q], boxes.f_high[:, q])
        fr[:, q] = radius(boxes.f_low[:, q], boxes.f_high[:, q], fm)
        f[:, q] = fm
        u[:, q] = um
        # phi u = um (a w + e) + fm (u - um) + (phi - fm)(u - um)
        lines = a * u
        er = up(np.abs(u) * er)
        er[:, q] = up(er[:, q] + up(fr[:, q] * ur))
        em = em * u
        er = er + (np.abs(em) * 2.0 + np.abs(lines) * 1.0 * np.maximum(np.abs(boxes.w_low), np.abs(boxes.w_high))) * (2.0 * UNIT)
    slope = lines[..., None] * problem.W + f[..., None] * problem.V if len(q) else lines[..., None] * problem.W
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
    x_low = np.where(proved, np.maximum(boxes.x_low, down(xm + dx - x_rad)), boxes.x_low)
    x_high = np.where(proved, np.minimum(boxes.x_high, up(xm + dx + x_rad)), boxes.x_high)
    # the same for w = W x + c, with the cancellation inside W N B kept
    w_through = problem.W @ through
    w_rad = (
        _times(np.abs(w_through), inner_rad)
        + _times(w, _times(np.abs(error), rx) + _times(size_n, residual_rad + 2.0 * (spread_b + reach + np.abs(residual)) * gamma(k)))
        + _times(w, rx * (4.0 * UNIT) + (size_x + np.abs(dx)) * gamma(k))
        + np.abs(c) * gamma(2)
        + c_rad
    )
    w_rad = up(w_rad * (1.0 + gamma(k))) + TINY
    dw = _times(problem.W, dx)
    w_low = np.where(proved, np.maximum(boxes.w_low, down(wm + dw - w_rad)), boxes.w_low)
    w_high = np.where(proved, np.minimum(boxes.w_high, up(wm + dw + w_rad)), boxes.w_high)
    width = np.maximum(boxes.w_high - boxes.w_low, TINY)
    impact = np.max(np.abs(w_through) / width[:, :, None], axis=1) * inner_rad
    narrowed = Boxes(x_low, x_high, w_low, w_high, *(getattr(boxes, name) for name in _FIELDS[4:]))
    return Relaxed(narrowed, np.nan_to_num(impact, nan=0.0, posinf=HUGE))


def injective(problem: Problem, w_low: Array, w_high: Array, u_low: Array, u_high: Array, f_low: Array, f_high: Array) -> NDArray[np.bool_]:
    """(b,) whether the equations are one to one over {x: W x + c in [w], V x + d in [u], phi in [f]}.

    The difference of two values is J (x1 - x2), J = G + B (diag(a) W + diag(f) V) with a in the slope range times u, because every row is
    scalar. All such J are regular when a positive vector is shrunk by the bound of I - N J (Neumaier 1990, from memory).
    """
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    a_low, a_high = problem.rows.slope_bounds(w_low, w_high)
    q = problem.product
    f = np.zeros_like(a_low)
    fr = np.zeros_like(a_low)
    if len(q):
        a_low, a_high = a_low.copy(), a_high.copy()
        a_low[:, q], a_high[:, q] = multiply(a_low[:, q], a_high[:, q], u_low, u_high)
        f[:, q] = middle(f_low[:, q], f_high[:, q])
        fr[:, q] = radius(f_low[:, q], f_high[:, q], f[:, q])
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
    good = np.all(image_z * (1.0 + 8 * gamma(k)) < z, axis=1) & np.all(image_y * (1.0 + 8 * gamma(k)) < y, axis=1)
    if v_through is not None:
        image_v = _times(v_through, load) + _times(v, slack)
        good &= np.all(image_v * (1.0 + 8 * gamma(k)) < yv, axis=1)
    return np.asarray(good & np.any(inverse != 0.0, axis=(1, 2)))


@dataclass(frozen=True, eq=False)
class Certified:
    """Points with proof of existence: good: (b,); x: (b, n) centre; spread: (b, n) half widths within which one solution lies."""

    good: NDArray[np.bool_]
    x: Array
    spread: Array


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
    """Existence by Krawczyk: the box x +/- spread is mapped into itself by x - N F + (I - N J)(box - x)."""
    n, m = problem.n, problem.m
    g, b, w, v = problem.magnitudes
    q = problem.product
    size_x = np.abs(x)
    at = start_points(problem, x, np.zeros_like(x))
    p_mid = middle(at.p_low, at.p_high)
    p_rad = radius(at.p_low, at.p_high, p_mid)
    _, _, _, _, s, s_rad = problem.centres
    k = n + 2 * m + 8
    residual = _times(problem.G, x) + _times(problem.B, p_mid) - s
    residual_rad = (_times(g, size_x) + _times(b, np.abs(p_mid)) + np.abs(s)) * gamma(k) + s_rad
    a = problem.rows.slope(middle(at.w_low, at.w_high)) if m else np.zeros((len(x), 0))
    f = np.zeros_like(a)
    if len(q):
        u = np.ones_like(a)
        u[:, q] = middle(at.u_low, at.u_high)
        f[:, q] = middle(at.f_low[:, q], at.f_high[:, q])
        a = a * u
    lines = a[..., None] * problem.W + (f[..., None] * problem.V if len(q) else 0.0)
    matrix = problem.G + problem.B @ lines
    inverse = invert(matrix)
    size_n = np.abs(inverse)
    through = np.abs(inverse @ problem.B)
    size_b = _times(b, p_rad)
    shift = (
        np.abs(_times(inverse, residual))
        + _times(through, p_rad)
        + _times(size_n, residual_rad + (np.abs(residual) + size_b) * gamma(k))
    )
    shift = up(shift * (1.0 + gamma(k))) + np.maximum(size_x * (2.0 * UNIT), TINY)
    spread = shift * 2.0
    good = np.zeros(len(x), dtype=bool)
    proved = np.any(inverse != 0.0, axis=(1, 2)) & np.all(np.isfinite(spread), axis=1)
    spread = np.where(np.isfinite(spread), spread, 1.0)
    for _ in range(INFLATIONS):
        here = start_points(problem, x, spread)
        a_low, a_high = problem.rows.slope_bounds(here.w_low, here.w_high) if m else (a, a)
        if len(q):
            a_low, a_high = a_low.copy(), a_high.copy()
            a_low[:, q], a_high[:, q] = multiply(a_low[:, q], a_high[:, q], here.u_low, here.u_high)
        ar = radius(a_low, a_high, a)
        fr = np.zeros_like(a)
        if len(q):
            fr[:, q] = radius(here.f_low[:, q], here.f_high[:, q], f[:, q])
        move = ar * _times(w, spread) + fr * _times(v, spread)
        size_row = _times(g, spread) + _times(b, (np.abs(a) + ar) * _times(w, spread) + (np.abs(f) + fr) * _times(v, spread))
        error = _times(np.abs(np.eye(n) - inverse @ matrix), spread)
        image = shift + error + _times(through, move) + _times(size_n, size_row + _times(b, move)) * (3.0 * gamma(k))
        image = up(image * (1.0 + gamma(k))) + TINY
        inside = np.all(image < spread, axis=1) & proved & ~good
        good |= inside
        if np.all(good | ~proved):
            break
        grow = ~good[:, None] & (image < 1e6 * (1.0 + size_x))
        spread = np.where(grow, np.maximum(image * 1.2, spread), spread)
    return Certified(good, x, spread)


def start_points(problem: Problem, x: Array, spread: Array) -> Boxes:
    """The boxes x +/- spread with everything that follows from x; no contraction."""
    x_low, x_high = down(x - spread), up(x + spread)
    zero = spread == 0.0
    x_low, x_high = np.where(zero, x, x_low), np.where(zero, x, x_high)
    w_low, w_high = _affine(problem.W, x_low, x_high, problem.c_low, problem.c_high)
    q = problem.product
    u_low, u_high = _affine(problem.V[q], x_low, x_high, problem.d_low[q], problem.d_high[q])
    f_low, f_high = problem.rows.bounds(w_low, w_high) if problem.m else (w_low, w_high)
    p_low, p_high = _product(problem, f_low, f_high, u_low, u_high)
    return Boxes(x_low, x_high, w_low, w_high, f_low, f_high, p_low, p_high, u_low, u_high)


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


def _width(boxes: Boxes) -> Array:
    return np.concatenate([boxes.x_high - boxes.x_low, boxes.w_high - boxes.w_low], axis=1)


def narrow(problem: Problem, boxes: Boxes) -> tuple[Boxes, Array]:
    """One pass of everything that narrows; (what is left alive, impact of each row on its widths). Dead boxes are dropped in between."""
    for contract in (hull, hull, nodal, hull):
        boxes = contract(problem, boxes)
        boxes = boxes.pick(~boxes.empty())
        if len(boxes) == 0:
            return boxes, np.zeros((0, problem.m))
    relaxed = relax(problem, boxes)
    alive = ~relaxed.boxes.empty()
    boxes, impact = relaxed.boxes.pick(alive), relaxed.impact[alive]
    if len(boxes) == 0:
        return boxes, impact
    boxes = hull(problem, boxes)
    alive = ~boxes.empty()
    return boxes.pick(alive), impact[alive]


def search(
    problem: Problem, low: Array, high: Array, *, deadline: float = np.inf, scale: Array | None = None, max_boxes: int = 10_000_000
) -> Found:
    """Every solution with x in [low, high]: (n,) each. deadline: time.monotonic() after which the rest is left. scale: (n,) size of each
    unknown for the word small (default 1)."""
    began = time.monotonic()
    state = _Search(problem, np.ones(problem.n) if scale is None else scale)
    queue: list[Boxes] = [start_box(problem, low, high)]
    ended = False
    with np.errstate(over="ignore", invalid="ignore", divide="ignore", under="ignore"):
        while queue:
            if time.monotonic() > deadline or state.boxes > max_boxes or len(state.clusters) > MAX_CLUSTERS:
                ended = True
                break
            batch = _take(queue)
            queue_next = _round(state, batch)
            queue.extend(queue_next)
    left = [np.stack([b.x_low, b.x_high], axis=1) for b in queue] if ended else []
    x, spread, doubtful = _distinct(problem, state.points)
    clusters = [np.stack([b.x_low, b.x_high], axis=1) for b in state.clusters] + doubtful
    n = problem.n
    return Found(
        x, spread, np.concatenate(clusters) if clusters else np.zeros((0, 2, n)), np.concatenate(left) if left else np.zeros((0, 2, n)),
        state.boxes, time.monotonic() - began,
    )


def _take(queue: list[Boxes]) -> Boxes:
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


def _round(state: _Search, boxes: Boxes) -> list[Boxes]:
    """Narrow a batch until it stands still, settle what can be settled, split the rest once."""
    problem = state.problem
    state.boxes += len(boxes)
    settled: list[Boxes] = []
    impacts: list[Array] = []
    for _ in range(60):
        before = _width(boxes)
        tag = np.arange(len(boxes))
        boxes, impact, tag = _narrow_tagged(problem, boxes, tag)
        if len(boxes) == 0:
            break
        floor = 1e-9 * (1.0 + np.maximum(np.abs(np.concatenate([boxes.x_low, boxes.w_low], 1)), 0.0))
        gain = np.where(before[tag] > floor, 1.0 - _width(boxes) / np.maximum(before[tag], TINY), 0.0)
        moving = np.max(gain, axis=1) > PROGRESS
        still = ~moving
        if np.any(still):
            settled.append(boxes.pick(still))
            impacts.append(impact[still])
        boxes = boxes.pick(moving)
        if len(boxes) == 0:
            break
    else:
        settled.append(boxes)
        impacts.append(impact[moving])
    if not settled:
        return []
    boxes, impact = stack(settled), np.concatenate(impacts)
    rest = _settle(state, boxes)
    boxes, impact = boxes.pick(rest), impact[rest]
    return [_split(problem, boxes, impact)] if len(boxes) else []


def _narrow_tagged(problem: Problem, boxes: Boxes, tag: Index) -> tuple[Boxes, Array, Index]:
    """`narrow`, keeping which box is which."""
    for contract in (hull, hull, nodal, hull):
        boxes = contract(problem, boxes)
        alive = ~boxes.empty()
        boxes, tag = boxes.pick(alive), tag[alive]
        if len(boxes) == 0:
            return boxes, np.zeros((0, problem.m)), tag
    relaxed = relax(problem, boxes)
    alive = ~relaxed.boxes.empty()
    boxes, impact, tag = relaxed.boxes.pick(alive), relaxed.impact[alive], tag[alive]
    if len(boxes) == 0:
        return boxes, impact, tag
    boxes = hull(problem, boxes)
    alive = ~boxes.empty()
    return boxes.pick(alive), impact[alive], tag[alive]


def _settle(state: _Search, boxes: Boxes) -> NDArray[np.bool_]:
    """(b,) which boxes are still open after the uniqueness test and the test for smallness; the others are recorded in `state`."""
    problem = state.problem
    open_ = np.ones(len(boxes), dtype=bool)
    for region in state.regions:
        open_ &= ~_within(boxes, region)
    candidates = np.flatnonzero(open_)
    if len(candidates):
        part = boxes.pick(candidates)
        one = injective(problem, part.w_low, part.w_high, part.u_low, part.u_high, part.f_low, part.f_high)
        candidates = candidates[one]
    if len(candidates):
        part = boxes.pick(candidates)
        points = newton_points(problem, middle(part.x_low, part.x_high))
        certified = certify(problem, points)
        here = start_points(problem, certified.x, certified.spread)
        joined = _join(part, here)
        whole = injective(problem, joined.w_low, joined.w_high, joined.u_low, joined.u_high, joined.f_low, joined.f_high)
        # one to one over the hull of the box and the point: the point is the only solution either holds
        closed = certified.good & whole
        for i in np.flatnonzero(closed):
            state.points.append((certified.x[i], certified.spread[i]))
            state.regions.append(joined.pick(slice(i, i + 1)))
        open_[candidates[closed]] = False
    size = np.max((boxes.x_high - boxes.x_low) / (state.scale + np.maximum(np.abs(boxes.x_low), np.abs(boxes.x_high))), axis=1)
    w_size = np.max((boxes.w_high - boxes.w_low) / (1.0 + np.abs(boxes.w_low)), axis=1) if problem.m else size
    tiny = open_ & (size < SMALL) & (w_size < 100.0 * SMALL)
    if np.any(tiny):
        state.clusters.append(boxes.pick(tiny))
        open_ &= ~tiny
    return open_


def _within(boxes: Boxes, region: Boxes) -> NDArray[np.bool_]:
    inside = np.ones(len(boxes), dtype=bool)
    for name in ("w", "u", "f"):
        low, high = getattr(boxes, f"{name}_low"), getattr(boxes, f"{name}_high")
        inside &= np.all((low >= getattr(region, f"{name}_low")) & (high <= getattr(region, f"{name}_high")), axis=1)
    return np.asarray(inside)


def _join(a: Boxes, b: Boxes) -> Boxes:
    """Hull of two batches, box by box."""
    ends = []
    for name in _FIELDS:
        choose = np.minimum if name.endswith("_low") else np.maximum
        ends.append(choose(getattr(a, name), getattr(b, name)))
    return Boxes(*ends)


def _split(problem: Problem, boxes: Boxes, impact: Array) -> Boxes:
    """Each box in two across the row whose chord error matters most; across the widest unknown where no row matters."""
    b = np.arange(len(boxes))
    halves_a = {name: getattr(boxes, name).copy() for name in _FIELDS}
    halves_b = {name: getattr(boxes, name).copy() for name in _FIELDS}
    x_size = (boxes.x_high - boxes.x_low) / (1e-3 + np.abs(boxes.x_low) + np.abs(boxes.x_high))
    j = np.argmax(x_size, axis=1)
    by_row = np.zeros(len(boxes), dtype=bool)
    if problem.m:
        k = np.argmax(impact, axis=1)
        w_low, w_high = boxes.w_low[b, k], boxes.w_high[b, k]
        room = (w_high - w_low) > 1e-9 * (1.0 + np.abs(w_low))
        by_row = (impact[b, k] > 1e-6) & room
        points = problem.rows.split_points(boxes.w_low, boxes.w_high)[b, k]
        rows = b[by_row]
        halves_a["w_high"][rows, k[by_row]] = points[by_row]
        halves_b["w_low"][rows, k[by_row]] = points[by_row]
    rows = b[~by_row]
    if len(rows):
        cuts = slices(boxes.x_low[rows, j[rows]], boxes.x_high[rows, j[rows]], 64)[31]
        halves_a["x_high"][rows, j[rows]] = cuts
        halves_b["x_low"][rows, j[rows]] = cuts
    return stack([Boxes(**halves_a), Boxes(**halves_b)])


def _distinct(problem: Problem, points: list[tuple[Array, Array]]) -> tuple[Array, Array, list[Array]]:
    """The different solutions among certified points; pairs that overlap without a proof of being one are returned as doubtful boxes."""
    n = problem.n
    if not points:
        return np.zeros((0, n)), np.zeros((0, n)), []
    x = np.stack([p for p, _ in points])
    spread = np.stack([s for _, s in points])
    kept: list[int] = []
    doubtful: list[Array] = []
    for i in range(len(x)):
        same = False
        for k in kept:
            if np.all(np.abs(x[i] - x[k]) <= (spread[i] + spread[k]) * (1.0 + 1e-12)):
                pair = _join(start_points(problem, x[i][None], spread[i][None]), start_points(problem, x[k][None], spread[k][None]))
                same = True
                if not injective(problem, pair.w_low, pair.w_high, pair.u_low, pair.u_high, pair.f_low, pair.f_high)[0]:
                    doubtful.append(np.stack([pair.x_low, pair.x_high], axis=1))
                break
        if not same:
            kept.append(i)
    return x[kept], spread[kept], doubtful
