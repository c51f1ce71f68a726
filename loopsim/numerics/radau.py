"""Radau IIA of order 5, 9 and 13 for C x' = s(t) - G x - B psi(W x + c, V x + d), singular C allowed: the driver of the kernel.

Method: E. Hairer, G. Wanner, Solving Ordinary Differential Equations II (1996), IV.5 and IV.8 (from memory). The kernel works on
arrays; this module lays them out, hands them over a stretch at a time and keeps the record of accepted steps, whose collocation
polynomials give the solution at any time without another evaluation.
"""

from __future__ import annotations

import bisect
import heapq
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import cache, cached_property, lru_cache
from time import perf_counter
from typing import Any, TypeAlias

import numpy as np
import scipy.sparse
import scipy.sparse.linalg
from numpy.typing import ArrayLike, NDArray

from loopsim.devices import phi
from loopsim.numerics.compiled import announced, have_compiler

Array: TypeAlias = NDArray[np.float64]
Indices: TypeAlias = NDArray[np.int64]

# roots of P_k(2 q - 1) - P_(k-1)(2 q - 1), recomputed with 60 digits
NODES = {
    3: (0.15505102572168219018, 0.64494897427831780982, 1.0),
    5: (0.057104196114517682193, 0.27684301363812382768, 0.58359043236891682006, 0.86024013565621944785, 1.0),
    7: (
        0.029316427159784891972, 0.14807859966848429185, 0.3369846902811542991, 0.55867151877155013208,
        0.76923386203005450092, 0.92694567131974111485, 1.0,
    ),
}  # fmt: skip
DENSE_LIMIT = 12  # unknowns up to which full L U with pivoting costs no more than the sparse one
FULL_LIMIT = 12  # unknowns of all stages together up to which Newton with every stage's own Jacobian pays
LOOKS = 8  # stretches of a step in which a crossing is looked for
RECORD_ROOM = 4_000_000  # numbers in one stretch of the record: 32 MB
FIRST_ROOM = 256  # steps in the first stretch, doubled from stretch to stretch
STRETCH = 0.25  # s that one stretch may take: so often progress is told and an interrupt is heard
INTERRUPTED = -1  # outcome beside the kernel's: stopped from outside, the steps before are kept


@dataclass(frozen=True, eq=False)
class Tableau:
    """One method of the family with k stages and order 2 k - 1.

    nodes (k,); A (k, k); A^-1 = transform diag(order_real, blocks [[re, -im], [im, re]]) inverse; error_weights (k,): the embedded
    estimate is (gamma/h C + J)^-1 (f(start) + gamma/h C (error_weights . Z)); monomials (k, k): powers q^1..q^k of the polynomial from Z.
    """

    nodes: Array
    A: Array
    A_inverse: Array
    transform: Array
    inverse: Array
    order_real: float
    pairs_real: Array
    pairs_imaginary: Array
    error_weights: Array
    monomials: Array


def _lagrange(nodes: NDArray[np.longdouble]) -> NDArray[np.longdouble]:
    """Coefficients (k, k) of the Lagrange polynomials: row j, ascending powers."""
    k = len(nodes)
    rows = np.zeros((k, k), dtype=np.longdouble)
    for j in range(k):
        row = np.array([1.0], dtype=np.longdouble)
        for i in range(k):
            if i != j:
                factor = np.array([-nodes[i], 1.0], dtype=np.longdouble) / (nodes[j] - nodes[i])
                row = np.convolve(row, factor)
        rows[j] = row
    return rows


@lru_cache(maxsize=4)
def tableau(stages: int) -> Tableau:
    """The method with 3, 5 or 7 stages, everything derived from its nodes."""
    c = np.array(NODES[stages], dtype=np.longdouble)
    basis = _lagrange(c)
    powers = np.arange(1, stages + 1)
    A = np.asarray((c[:, None] ** powers) @ (basis / powers).T, dtype=np.float64)
    values, vectors = np.linalg.eig(np.linalg.inv(A))
    real = int(np.argmin(np.abs(values.imag)))
    pairs = [i for i in np.argsort(-values.real) if values[i].imag > 1e-6]
    columns = [vectors[:, real].real / vectors[-1, real].real]
    for i in pairs:
        # M (u - i v) = (a + i b)(u - i v)  <=>  M [u v] = [u v] [[a, -b], [b, a]] ; vectors belong to a + i b
        vector = vectors[:, i] / vectors[-1, i]
        columns += [vector.real, -vector.imag]
    transform = np.column_stack(columns)
    gamma = float(values[real].real)
    # embedded formula of order k: quadrature on the nodes and the start, the start weighted by 1 / gamma
    moments = np.array([1.0 / j - (1.0 / gamma if j == 1 else 0.0) for j in range(1, stages + 1)])
    embedded = np.linalg.solve(np.asarray(c[None, :] ** (powers - 1)[:, None], dtype=np.float64), moments)
    weights = np.linalg.solve(A.T, embedded - A[-1])
    return Tableau(
        nodes=np.asarray(c, dtype=np.float64),
        A=A,
        A_inverse=np.asarray(np.linalg.inv(A), dtype=np.float64),
        transform=np.ascontiguousarray(transform),
        inverse=np.linalg.inv(transform),
        order_real=gamma,
        pairs_real=np.array([values[i].real for i in pairs]),
        pairs_imaginary=np.array([values[i].imag for i in pairs]),
        error_weights=weights,
        monomials=np.asarray((basis / c[:, None]).T, dtype=np.float64).copy(),
    )


@dataclass(frozen=True, eq=False)
class Waves:
    """Sources in time for the kernel: s(t) = base + r(t) sum_k columns[k] wave_k(t), wave 0 alone being r itself.

    forms (w,): kernel.SINE or kernel.LINEAR; data: one array of numbers a wave (layout: kernel.wave_piece); columns (w, n);
    corners(start, end): times at which some wave has a corner; fastest: shortest period of a sine [s], infinite without one.
    """

    forms: Indices
    data: tuple[Array, ...]
    columns: Array
    corners: Callable[[float, float], Sequence[float]] = field(default=lambda start, end: ())
    fastest: float = np.inf

    @cached_property
    def laid_out(self) -> tuple[tuple[Indices, Indices, Array], Indices, Array]:
        """Columns in compressed rows, where each wave's numbers start, all numbers."""
        starts = np.concatenate([[0], np.cumsum([len(numbers) for numbers in self.data])]).astype(np.int64)
        return _compressed(self.columns), starts, np.concatenate([*self.data, np.zeros(0)])


@dataclass(frozen=True, eq=False)
class Equations:
    """C x' = source - G x - B psi, psi_k = phi_k(W x + c)_k (V x + d)_k, laid out for the kernel. Build with `equations`.

    rows, control, product, storage: compressed rows (starts, columns, values) of [G B], W, V, C. pattern: (rows, columns) of the Jacobian's
    places, mass and base_jac: C and G on them; stamps: place, row (m.. for the product's part), value of B diag(.) W and B diag(.) V.
    """

    n: int
    m: int
    rows: tuple[Indices, Indices, Array]
    control: tuple[Indices, Indices, Array]
    product: tuple[Indices, Indices, Array]
    storage: tuple[Indices, Indices, Array]
    c: Array
    d: Array
    kinds: Indices
    parameters: Array
    pattern: tuple[Indices, Indices]
    mass: Array
    base_jac: Array
    stamp_place: Indices
    stamp_row: Indices
    stamp_value: Array
    dense: bool

    @cached_property
    def stage_masses(self) -> dict[int, Array]:
        """A^-1 x C by number of stages, row by row, made when first needed."""
        return {}

    def stage_mass(self, method: Tableau) -> Array:
        """A^-1 x C of all stages together, row by row."""
        stages = len(method.nodes)
        if stages not in self.stage_masses:
            product = np.kron(method.A_inverse, self.mass.reshape(self.n, self.n))
            self.stage_masses[stages] = np.asarray(product, dtype=np.float64).ravel()
        return self.stage_masses[stages]


def _compressed(matrix: Any) -> tuple[Indices, Indices, Array]:
    rows = scipy.sparse.csr_array(matrix, copy=True)
    rows.eliminate_zeros()
    return np.array(rows.indptr, dtype=np.int64), np.array(rows.indices, dtype=np.int64), np.array(rows.data, dtype=np.float64)


def _stamps(B: Any, M: Any, offset: int) -> tuple[Indices, Indices, Indices, Array]:
    """Entries (row, column, nonlinear row, value) of B diag(g) M."""
    left = scipy.sparse.csc_array(B, copy=True)
    right = scipy.sparse.csr_array(M, copy=True)
    left.eliminate_zeros()
    right.eliminate_zeros()
    rows, columns, owners, values = [], [], [], []
    for k in range(right.shape[0]):
        i = left.indices[left.indptr[k] : left.indptr[k + 1]]
        j = right.indices[right.indptr[k] : right.indptr[k + 1]]
        product = np.outer(left.data[left.indptr[k] : left.indptr[k + 1]], right.data[right.indptr[k] : right.indptr[k + 1]])
        rows.append(np.repeat(i, len(j)))
        columns.append(np.tile(j, len(i)))
        owners.append(np.full(product.size, k + offset))
        values.append(product.ravel())

    def joined(parts: list[Any]) -> Indices:
        return np.concatenate(parts).astype(np.int64) if parts else np.zeros(0, dtype=np.int64)

    return joined(rows), joined(columns), joined(owners), np.concatenate(values) if values else np.zeros(0)


def equations(
    C: Any, G: Any, B: Any, W: Any, c: ArrayLike, kinds: ArrayLike, parameters: Any = None, V: Any = None, d: ArrayLike | None = None
) -> Equations:
    """Lay the arrays of one circuit out for the kernel. C, G: (n, n); B: (n, m); W, V: (m, n); all dense or scipy sparse;
    c, d: (m,); kinds: (m,) of loopsim.devices.phi.Kind; parameters: (m, p)."""
    # copies throughout: the kernel is compiled once, for arrays that may be written to
    kinds = np.array(kinds, dtype=np.int64)
    n, m = C.shape[0], len(kinds)
    V = scipy.sparse.csr_array((m, n)) if V is None else V
    parameters = np.zeros((m, 1)) if parameters is None or np.size(parameters) == 0 else np.array(parameters, dtype=np.float64, order="C")
    rows_1, columns_1, owner_1, value_1 = _stamps(B, W, 0)
    rows_2, columns_2, owner_2, value_2 = _stamps(B, V, m)
    stamp_row, stamp_column = np.concatenate([rows_1, rows_2]), np.concatenate([columns_1, columns_2])
    mass, base = scipy.sparse.coo_array(C), scipy.sparse.coo_array(G)
    if n <= DENSE_LIMIT:
        pattern_row, pattern_column = np.divmod(np.arange(n * n, dtype=np.int64), n)
    else:
        keys = np.unique(
            np.concatenate([
                stamp_row * n + stamp_column, mass.row.astype(np.int64) * n + mass.col, base.row.astype(np.int64) * n + base.col,
                np.arange(n, dtype=np.int64) * (n + 1),
            ])
        )  # fmt: skip
        pattern_row, pattern_column = np.divmod(keys, n)
    keys = pattern_row * n + pattern_column

    def on_pattern(matrix: Any) -> Array:
        values = np.zeros(len(keys))
        np.add.at(values, np.searchsorted(keys, matrix.row.astype(np.int64) * n + matrix.col), matrix.data)
        return values

    return Equations(
        n=n,
        m=m,
        rows=_compressed(scipy.sparse.hstack([scipy.sparse.csr_array(G), scipy.sparse.csr_array(B)]) if m else G),
        control=_compressed(W) if m else (np.zeros(1, dtype=np.int64), np.zeros(0, dtype=np.int64), np.zeros(0)),
        product=_compressed(V) if m else (np.zeros(1, dtype=np.int64), np.zeros(0, dtype=np.int64), np.zeros(0)),
        storage=_compressed(C),
        c=np.array(c, dtype=np.float64),
        d=np.ones(m) if d is None else np.array(d, dtype=np.float64),
        kinds=kinds,
        parameters=parameters,
        pattern=(pattern_row, pattern_column),
        mass=on_pattern(mass),
        base_jac=on_pattern(base),
        stamp_place=np.searchsorted(keys, stamp_row * n + stamp_column).astype(np.int64),
        stamp_row=np.concatenate([owner_1, owner_2]),
        stamp_value=np.concatenate([value_1, value_2]),
        dense=n <= DENSE_LIMIT,
    )


@dataclass(frozen=True, eq=False)
class Factors:
    """Where L and U have their places; empty arrays for dense systems. Names as in kernel.factor_sparse."""

    entry_start: Indices
    entry_from: Indices
    entry_column: Indices
    lu_start: Indices
    lu_column: Indices
    lu_diagonal: Indices
    row_order: Indices
    column_order: Indices


_NONE, _NO_NUMBERS = np.zeros(0, dtype=np.int64), np.zeros(0)
NO_WAVES = Waves(_NONE, (), np.zeros((0, 1)))
DENSE_FACTORS = Factors(_NONE, _NONE, _NONE, _NONE, _NONE, _NONE, _NONE, _NONE)


@dataclass(frozen=True, eq=False)
class Path:
    """Accepted steps and what they cost.

    times (k,): starts of the steps [s]; steps (k,) [s]; starts (k, kept), polynomials (k, stages, kept): x(times + q steps) = starts +
    polynomials[0] q + ...; end, end_x (n,): where it stopped; outcome: one of kernel.DONE, TOO_SMALL, NOT_FINITE, or
    INTERRUPTED; worst: unknown that stood in the way of the last step that failed.
    """

    times: Array
    steps: Array
    starts: Array
    polynomials: Array
    end: float
    end_x: Array
    outcome: int
    accepted: int
    rejected: int
    newton_failed: int
    evaluations: int
    factorisations: int
    worst: int

    def at(self, times: ArrayLike) -> Array:
        """Kept unknowns at `times`: (times, kept); before the start and behind the end the polynomials are carried on."""
        from loopsim.numerics import kernel

        wanted = np.ascontiguousarray(np.atleast_1d(times), dtype=np.float64)
        values = np.empty((len(wanted), self.starts.shape[1]))
        if not len(self.times):
            raise ValueError("no step was accepted")
        kernel.sample(wanted, self.times, self.steps, self.starts, self.polynomials, values)
        return values

    @cached_property
    def grid(self) -> tuple[Array, Array]:
        """Starts of all steps and the end of the last: (k + 1,) and (k + 1, kept)."""
        if not len(self.times):
            return np.array([self.end]), self.starts[:0]
        last = self.starts[-1] + self.polynomials[-1].sum(axis=0)
        return np.append(self.times, self.end), np.vstack([self.starts, last])


def stages_for(rtol: float) -> int:
    """Stages that reach `rtol` with the least work, as measured (docs/explanation/speed-transient.md)."""
    return 3 if rtol > 3e-5 else 5


def inner_tolerance(rtol: Array, full: bool) -> Array:
    """Tolerance on the embedded estimate so that the curve comes out near `rtol`.

    Estimate and polynomial between the steps have the same order k + 1 in the step, so the two go in proportion; the ends of the steps are
    far better (order 2 k - 1). The factors bring the published transients within ten times `rtol`; where every stage has its own Jacobian
    Newton also takes the steps that the simplified one stumbles over, and those err most.
    """
    return np.asarray((0.05 if full else 0.15) * rtol)


def integrate(
    eq: Equations,
    x0: ArrayLike,
    start: float,
    end: float,
    source: ArrayLike,
    *,
    rtol: float | Array = 1e-6,
    atol: float | Array = 1e-9,
    waves: Waves | None = None,
    stages: int | None = None,
    peak: ArrayLike | None = None,
    kept: ArrayLike | None = None,
    corners: Sequence[float] = (),
    first_step: float | None = None,
    max_step: float = np.inf,
    fixed_step: float | None = None,
    index_two: ArrayLike | None = None,
    error_weight: ArrayLike | None = None,
    progress: Callable[[float], None] | None = None,
    keep_interrupted: bool = False,
) -> Path:
    """Solve from x0 at `start` to `end` [s].

    source (n,): constant part; waves: the rest. rtol, atol: NumPy's meaning, scalars or (n,); peak (n,): when given, rtol is relative to
    the largest size each unknown has had so far, and never less than this. kept: unknowns that are recorded (all). index_two (n,): nonzero
    for unknowns of index 2, whose error counts by the step's share of the span. error_weight (n,): 0 leaves an unknown out of error and
    convergence tests. fixed_step: take it whatever the error, for order tests. keep_interrupted: a KeyboardInterrupt
    ends the run with the steps before it instead of being raised. Never raises for a step that fails: see `Path.outcome`.
    """
    from loopsim.numerics import kernel, radau_plain

    n = eq.n
    rtol_given = np.broadcast_to(np.asarray(rtol, dtype=np.float64), (n,))
    stages = stages_for(float(np.min(rtol_given))) if stages is None else stages
    method = tableau(stages)
    inner = inner_tolerance(rtol_given, stages * n <= FULL_LIMIT)
    absolute = np.asarray(atol, dtype=np.float64) * (inner / rtol_given)
    if fixed_step is not None:
        inner, absolute, max_step, first_step = inner * 0.0, np.full(n, 1e30), fixed_step, fixed_step
    x = np.array(x0, dtype=np.float64)
    waves = waves or NO_WAVES
    marks = np.array(sorted({*corners, *waves.corners(start, end), end}), dtype=np.float64)
    marks = marks[(marks > start) & (marks <= end)]
    span = end - start
    longest = min(max_step, waves.fastest / 4.0)
    control = np.zeros(kernel.CONTROL_SIZE)
    smallest = float(np.min(inner)) if fixed_step is None else 1e-16
    control[kernel.NEWTON_LIMIT] = max(1e-5, 10 * 2.2e-16 / smallest, min(0.03, smallest**0.5)) if fixed_step is None else 1e-40
    control[kernel.MAX_STEP] = longest
    control[kernel.MIN_STEP] = 4e-16
    control[kernel.PEAK_SHARE] = 0.0 if peak is None else 1.0
    control[kernel.INDEX_TWO_SPAN] = span
    state = np.zeros(kernel.STATE_SIZE)
    state[kernel.TIME] = start
    state[kernel.STEP] = min(1e-4 * span if first_step is None else first_step, longest)
    counts = np.zeros(kernel.COUNTS_SIZE, dtype=np.int64)
    counts[kernel.FIRST] = counts[kernel.FRESH] = 1
    kept_places = np.arange(n, dtype=np.int64) if kept is None else np.array(kept, dtype=np.int64)
    peaks = np.zeros(n) if peak is None else np.maximum(np.asarray(peak, dtype=np.float64), np.abs(x))
    columns, wave_starts, wave_data = waves.laid_out
    by_arrays = not eq.dense and not have_compiler()
    factors = DENSE_FACTORS if eq.dense or by_arrays else sparse_factors(eq, x, float(state[kernel.STEP]), method)
    shape = (n, n) if eq.dense else (1, len(factors.lu_column))
    pairs = len(method.pairs_real)
    polynomial = np.zeros((stages, n))
    lu, lu_pairs = np.zeros(shape), np.zeros((pairs, *shape), dtype=np.complex128)
    pivots, pivots_pairs = np.zeros(n, dtype=np.int64), np.zeros((pairs, n), dtype=np.int64)
    jac = np.zeros(len(eq.base_jac))
    side = stages * n if stages * n <= FULL_LIMIT else 0
    state[kernel.RATE] = 1e30 if side else 1.0
    inverse_A = method.A_inverse
    mass_full = eq.stage_mass(method) if side else _NO_NUMBERS
    jac_full, lu_full, pivots_full = np.zeros(side * side), np.zeros((side, side)), np.zeros(side, dtype=np.int64)
    weights = np.ones(n) if error_weight is None else np.array(error_weight, dtype=np.float64)
    second = np.zeros(n, dtype=np.int64) if index_two is None else np.array(index_two, dtype=np.int64)
    base = np.array(source, dtype=np.float64)
    records: list[tuple[Array, Array, Array, Array]] = []
    room, repivoted = FIRST_ROOM, 0
    cap = max(16, RECORD_ROOM // max(1, len(kept_places) * (stages + 1)))
    while True:
        began = perf_counter()
        room = min(2 * room, cap)
        record = (
            np.empty(room), np.empty(room), np.empty((room, len(kept_places))), np.empty((room, stages, len(kept_places)))
        )  # fmt: skip
        done_before = int(counts[kernel.STEPS])
        try:
            if by_arrays:
                outcome, used = radau_plain.advance(
                    eq, waves, method, jacobian_values, x, peaks, control, state, counts, marks, kept_places, base, inner, absolute,
                    second, weights, polynomial, *record,
                )  # fmt: skip
            else:
                outcome, used = kernel.advance(
                    x, peaks, control, state, counts, marks, kept_places,
                    *eq.rows, *eq.control, eq.c, *eq.product, eq.d, eq.kinds, eq.parameters, *eq.storage, eq.mass, eq.base_jac,
                    eq.stamp_place, eq.stamp_row, eq.stamp_value, base, waves.forms, wave_starts, wave_data, *columns,
                    method.nodes, method.transform, method.inverse, method.order_real, method.pairs_real, method.pairs_imaginary,
                    method.error_weights, method.monomials, inner, absolute, second, weights,
                    factors.entry_start, factors.entry_from, factors.entry_column, factors.lu_start, factors.lu_column,
                    factors.lu_diagonal, factors.row_order, factors.column_order, polynomial, lu, pivots, lu_pairs, pivots_pairs, jac,
                    inverse_A, mass_full, jac_full, lu_full, pivots_full, *record,
                )  # fmt: skip
            if progress is not None:
                progress(float(state[kernel.TIME]))
        except KeyboardInterrupt:
            if not keep_interrupted:
                raise
            outcome, used = INTERRUPTED, int(counts[kernel.STEPS]) - done_before
        records.append(tuple(part[:used] for part in record))  # type: ignore[arg-type]
        pace = STRETCH / max(perf_counter() - began, 1e-9)
        room = min(room, max(16, int(0.5 * pace * used)))
        if outcome == kernel.PIVOT:
            factors = sparse_factors(eq, x, float(state[kernel.STEP]), method)
            lu = np.zeros((1, len(factors.lu_column)))
            lu_pairs = np.zeros((pairs, 1, len(factors.lu_column)), dtype=np.complex128)
            counts[kernel.SIGN] = 0
            repivoted = repivoted + 1 if used == 0 else 0
            if repivoted > 3:
                outcome = kernel.TOO_SMALL
        if outcome not in (kernel.FULL, kernel.PIVOT):
            break
    joined = records[0] if len(records) == 1 else tuple(np.concatenate(parts) for parts in zip(*records, strict=True))
    if outcome == INTERRUPTED and len(joined[0]):  # without a compiler it may have come in the middle of a step
        state[kernel.TIME] = joined[0][-1] + joined[1][-1]
        x[kept_places] = joined[2][-1] + joined[3][-1].sum(axis=0)
    return Path(  # type: ignore[misc]
        *joined,
        end=float(state[kernel.TIME]),
        end_x=x,
        outcome=int(outcome),
        accepted=int(counts[kernel.STEPS]),
        rejected=int(counts[kernel.REJECTED]),
        newton_failed=int(counts[kernel.NEWTON_FAILED]),
        evaluations=int(counts[kernel.EVALUATIONS]),
        factorisations=int(counts[kernel.FACTORS]),
        worst=int(counts[kernel.WORST]),
    )


@cache
def _compile_now() -> None:
    """One step of the smallest problem: compiles the kernel, or loads what was compiled before."""
    one = np.ones((1, 1))
    tiny = equations(one, one, one, one, [0.0], [int(phi.Kind.SATURATION)])
    integrate(tiny, [1.0], 0.0, 1e-3, [0.0], first_step=1e-3).at([0.0])


def prepare(tell: Callable[[str], None] | None = None) -> None:
    """Have the kernel ready; `tell` hears of it when it has to be compiled (once in an environment, then it is kept on disk)."""
    with announced(tell):
        _compile_now()


def jacobian_values(eq: Equations, x: Array) -> Array:
    """G + B (diag(phi' u) W + diag(phi) V) at x, on the places of eq.pattern."""
    control = _matrix(eq.control, eq.n)
    product = _matrix(eq.product, eq.n)
    w, u = control @ x + eq.c, product @ x + eq.d
    gain = np.zeros(2 * eq.m)
    for kind in np.unique(eq.kinds):
        rows = np.flatnonzero(eq.kinds == kind)
        p = eq.parameters[rows].T
        gain[rows] = phi.SLOPE[kind](w[rows], p) * u[rows]
        gain[eq.m + rows] = phi.VALUE[kind](w[rows], p)
    values = eq.base_jac.copy()
    np.add.at(values, eq.stamp_place, eq.stamp_value * gain[eq.stamp_row])
    return values


def _matrix(rows: tuple[Indices, Indices, Array], width: int) -> Any:
    starts, columns, values = rows
    return scipy.sparse.csr_array((values, columns, starts), shape=(len(starts) - 1, width))


def sparse_factors(eq: Equations, x: Array, step: float, method: Tableau) -> Factors:
    """Order of rows and columns that keeps fill small and pivots large at x (SuperLU chooses it), and the places of L and U in it."""
    n = eq.n
    rows, columns = eq.pattern
    values = method.order_real / step * eq.mass + jacobian_values(eq, x)
    matrix = scipy.sparse.csc_array((values, (rows, columns)), shape=(n, n))
    found = scipy.sparse.linalg.splu(
        matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.01, options={"SymmetricMode": True}
    )  # fmt: skip
    new_row, new_column = np.asarray(found.perm_r, dtype=np.int64), np.asarray(found.perm_c, dtype=np.int64)
    order = np.lexsort((new_column[columns], new_row[rows]))
    entry_start = np.searchsorted(new_row[rows][order], np.arange(n + 1)).astype(np.int64)
    entry_column = new_column[columns][order]
    upper: list[list[int]] = []
    places: list[list[int]] = []
    diagonal = np.zeros(n, dtype=np.int64)
    starts = np.zeros(n + 1, dtype=np.int64)
    for i in range(n):
        found_columns = {i, *entry_column[entry_start[i] : entry_start[i + 1]].tolist()}
        waiting = [k for k in found_columns if k < i]
        heapq.heapify(waiting)
        while waiting:
            for j in upper[heapq.heappop(waiting)]:
                if j not in found_columns:
                    found_columns.add(j)
                    if j < i:
                        heapq.heappush(waiting, j)
        row = sorted(found_columns)
        at = bisect.bisect_left(row, i)
        places.append(row)
        upper.append(row[at + 1 :])
        diagonal[i] = starts[i] + at
        starts[i + 1] = starts[i] + len(row)
    return Factors(
        entry_start=entry_start,
        entry_from=order.astype(np.int64),
        entry_column=entry_column.astype(np.int64),
        lu_start=starts,
        lu_column=np.array([j for row in places for j in row], dtype=np.int64),
        lu_diagonal=diagonal,
        row_order=np.argsort(new_row).astype(np.int64),
        column_order=np.argsort(new_column).astype(np.int64),
    )


def crossings(path: Path, column: int, level: float) -> tuple[Array, NDArray[np.int64]]:
    """Times at which a kept unknown crosses `level`, and the direction of each (1 up, -1 down), by bisection on the polynomials.

    A step is looked at in LOOKS stretches; a pair of crossings inside one of them is not seen.
    """
    if not len(path.times):
        return np.zeros(0), np.zeros(0, dtype=np.int64)
    coefficients = path.polynomials[:, :, column]
    base = path.starts[:, column] - level

    def value(steps: NDArray[np.int64], q: Array) -> Array:
        total = np.zeros(len(q))
        for a in range(coefficients.shape[1] - 1, -1, -1):
            total = (total + coefficients[steps, a]) * q
        return np.asarray(base[steps] + total)

    looks = np.linspace(0.0, 1.0, LOOKS + 1)
    every = np.arange(len(base))
    above = np.column_stack([value(every, np.full(len(base), q)) >= 0.0 for q in looks])
    steps, pieces = np.nonzero(above[:, 1:] != above[:, :-1])
    low, high = looks[pieces], looks[pieces + 1]
    rising = above[steps, pieces + 1]
    for _ in range(50):
        middle = 0.5 * (low + high)
        beyond = (value(steps, middle) >= 0.0) == rising
        low, high = np.where(beyond, low, middle), np.where(beyond, middle, high)
    return path.times[steps] + high * path.steps[steps], np.where(rising, 1, -1).astype(np.int64)
