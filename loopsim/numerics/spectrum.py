"""Finite eigenvalues of C x' = -J x with singular C, with an error bound each; the sign of a determinant, scale-safe.

The pencil is reduced to an ordinary matrix M of the size of C's rank by eliminating what has no dynamics; if M and its inverse are both
solved, slow modes come from the inverse and fast ones from M, each where its rounding error is smaller, so that 1e-12 s and 1e3 s can
stand in one circuit. Equations with hidden constraints (index 2) are projected on them first.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]
Complex: TypeAlias = NDArray[np.complex128]

RANK = 1e-11  # a singular value of the equilibrated C below this share of the largest is a zero: capacitors of 1 aF beside 1 F
SINGULAR = 1e-13  # reciprocal condition of an equilibrated block below which it is treated as singular
CLEAR = 1e-9  # relative error below which an eigenvalue needs no second look
ROUNDING = 20.0 * 2.0**-53  # backward error of the eigenvalue solver, relative to the norm
UNIT = 2.0**-53  # unit roundoff of IEEE double


@dataclass(frozen=True, eq=False)
class Spectrum:
    """values: (r,) complex [1/s], largest real part first; errors: (r,) bound of the rounding error of each, first order."""

    values: Complex
    errors: Array


def equilibrate(matrix: Array) -> tuple[Array, Array]:
    """Row and column factors (powers of two, so exact) that bring the largest entries of each towards 1; 1 for empty ones.

    matrix: (..., r, c); factors: (..., r), (..., c).
    """
    size = np.abs(matrix)
    rows = np.ones(size.shape[:-1])
    columns = np.ones((*size.shape[:-2], size.shape[-1]))
    for _ in range(3):
        top = (size * columns[..., None, :]).max(axis=-1, initial=0.0)
        rows = np.where(top > 0.0, np.sqrt(rows / np.where(top > 0.0, top, 1.0)), 1.0)
        top = (size * rows[..., :, None]).max(axis=-2, initial=0.0)
        columns = np.where(top > 0.0, np.sqrt(columns / np.where(top > 0.0, top, 1.0)), 1.0)
    return np.exp2(np.round(np.log2(rows))), np.exp2(np.round(np.log2(columns)))


def determinant_signs(matrices: Array) -> NDArray[np.int64]:
    """(batch,) sign of each determinant; 0 where the matrix is singular to working precision."""
    batch, n, _ = matrices.shape
    if n == 0:
        return np.ones(batch, dtype=np.int64)
    rows, columns = equilibrate(matrices)
    scaled = matrices * rows[:, :, None] * columns[:, None, :]
    sign, _ = np.linalg.slogdet(scaled)
    sigma = np.linalg.svd(scaled, compute_uv=False)
    clear = sigma[:, -1] > SINGULAR * 1e-3 * sigma[:, 0]
    return np.where(clear, np.sign(sign), 0.0).astype(np.int64)


def spectra(jacobians: Array, dynamics: Array) -> list[Spectrum]:
    """Finite eigenvalues for each Jacobian: (batch, n, n), with a common C: (n, n), or with one C each: (batch, n, n)."""
    batch, n, _ = jacobians.shape
    none = Spectrum(np.zeros(0, dtype=complex), np.zeros(0))
    if n == 0 or not np.any(dynamics):
        return [none] * batch
    if n == 1:
        return _single(jacobians[:, 0, 0], np.broadcast_to(dynamics, jacobians.shape)[:, 0, 0])
    if dynamics.ndim == 2:
        dynamics = dynamics[None]
    rows, columns = equilibrate(dynamics)
    balanced = dynamics * rows[:, :, None] * columns[:, None, :]
    left, sigma, right = np.linalg.svd(balanced)
    rank = np.broadcast_to(np.count_nonzero(sigma > RANK * sigma[:, :1], axis=1), (batch,))
    # x = columns * right.T y, equations times left.T rows
    turn, back = np.swapaxes(left, 1, 2), np.swapaxes(right, 1, 2)
    scaled = jacobians * rows[:, :, None] * columns[:, None, :]
    a = -(turn @ scaled @ back)
    rounded = (2 * n + 6) * UNIT * (np.abs(turn) @ np.abs(scaled) @ np.abs(back))
    # what is left of C beside the singular values, and the rounding of this very product
    beside = np.abs(turn @ balanced @ back - sigma[:, None, :] * np.eye(n))
    beside += (2 * n + 6) * UNIT * (np.abs(turn) @ np.abs(balanced) @ np.abs(back))
    sigma, beside = np.broadcast_to(sigma, (batch, n)), np.broadcast_to(beside, a.shape)
    found: list[Spectrum] = [none] * batch
    for r in np.unique(rank[rank > 0]).tolist():
        which = np.flatnonzero(rank == r)
        settled = _of_rank(a[which], rounded[which], sigma[which, :r, None], beside[which, :r, :r])
        for i, spectrum in zip(which.tolist(), settled, strict=True):
            found[i] = spectrum
    return found


def _single(jacobians: Array, dynamics: Array) -> list[Spectrum]:
    """One unknown: -J / C, (batch,) each, whose error is that of one division."""
    none = Spectrum(np.zeros(0, dtype=complex), np.zeros(0))
    moves = (dynamics != 0.0).tolist()
    values = -jacobians / np.where(dynamics != 0.0, dynamics, 1.0)
    return [
        Spectrum(values[i : i + 1].astype(complex), np.abs(values[i : i + 1]) * ROUNDING) if moves[i] else none
        for i in range(len(values))
    ]


def _of_rank(a: Array, rounded: Array, e: Array, beside: Array) -> list[Spectrum]:
    """e x1' = a11 x1 + a12 x2, 0 = a21 x1 + a22 x2 for each of a batch. e: (batch, r, 1) positive; rounded: error bound of a's entries;
    beside: (batch, r, r) what of C stands beside e."""
    rank = e.shape[1]
    unsure = beside / e
    if rank == a.shape[1]:
        return _ordinary(a / e, rounded / e, unsure)
    r, c = equilibrate(a[:, rank:, rank:])
    block = a[:, rank:, rank:] * r[:, :, None] * c[:, None, :]
    singular = np.linalg.svd(block, compute_uv=False)
    regular = singular[:, -1] > SINGULAR * singular[:, 0]
    k = np.flatnonzero(regular)
    reduced, slips = _eliminated(a[k], rounded[k], block[k], r[k], c[k])
    settled = iter(_ordinary(reduced / e[k], slips / e[k], unsure[k]))
    return [
        next(settled)
        if regular[i]
        else _constrained(a[i, :rank, :rank], a[i, :rank, rank:], a[i, rank:, :rank], a[i, rank:, rank:], e[i, :, 0])
        for i in range(len(a))
    ]


def _eliminated(a: Array, rounded: Array, block: Array, r: Array, c: Array) -> tuple[Array, Array]:
    """a11 - a12 a22^-1 a21, and a first-order bound of what rounding did to each of its entries: (batch, rank, rank) both.

    a: (batch, n, n) with a22 = block / (r c) its lower right part; rounded: the bound for the entries of a. The solve is charged with a
    backward error in each row of the block (N. J. Higham, Accuracy and Stability of Numerical Algorithms, ch. 9, from memory).
    """
    size = block.shape[-1]
    rank = a.shape[-1] - size
    r, c = r[:, :, None], c[:, None, :]
    a12, a21 = a[:, :rank, rank:] * c, a[:, rank:, :rank] * r
    inner = np.linalg.solve(block, a21)
    solved = 3.0 * size * UNIT * np.abs(block).max(axis=-1, keepdims=True) + rounded[:, rank:, rank:] * r * c
    inner_error = np.abs(np.linalg.inv(block)) @ (rounded[:, rank:, :rank] * r + solved @ np.abs(inner))
    product = rounded[:, :rank, rank:] * c + (size + 2) * UNIT * np.abs(a12)
    slips = rounded[:, :rank, :rank] + product @ np.abs(inner) + np.abs(a12) @ inner_error
    return a[:, :rank, :rank] - a12 @ inner, np.asarray(slips)


def _constrained(a11: Array, a12: Array, a21: Array, a22: Array, e: Array) -> Spectrum:
    """Index 2: some algebraic rows hold no algebraic unknown and so bind the dynamic ones; both are projected away."""
    left, sigma, right = np.linalg.svd(a22)
    rank = int(np.count_nonzero(sigma > SINGULAR * max(sigma[0], 1e-300)))
    b12, b21 = a12 @ right.T, left.T @ a21
    core = a11 - (b12[:, :rank] / sigma[:rank]) @ b21[:rank]
    outer, constraint = b12[:, rank:], b21[rank:]
    keep_x = _null(constraint)
    keep_row = _null(outer.T)
    mass = keep_row.T @ (e[:, None] * keep_x)
    matrix = keep_row.T @ core @ keep_x
    if mass.shape[0] == 0:
        return Spectrum(np.zeros(0, dtype=complex), np.zeros(0))
    if mass.shape[0] != mass.shape[1] or np.linalg.cond(mass) > 1.0 / SINGULAR:
        # deeper constraints than index 2: nothing is claimed
        return Spectrum(np.array([0.0 + 0.0j]), np.array([np.inf]))
    reduced = np.linalg.solve(mass, matrix)[None]
    return _ordinary(reduced, np.zeros_like(reduced), np.zeros_like(reduced))[0]


def _null(matrix: Array) -> Array:
    """Orthonormal basis of the null space."""
    if matrix.shape[0] == 0:
        return np.eye(matrix.shape[1])
    _, sigma, right = np.linalg.svd(matrix)
    rank = int(np.count_nonzero(sigma > SINGULAR * max(float(sigma[0]), 1e-300)))
    return np.asarray(right[rank:].T)


def _ordinary(matrices: Array, slips: Array, unsure: Array) -> list[Spectrum]:
    """Eigenvalues of each M from M and, where those are blurred, from its inverse, the more accurate one each.

    slips: (batch, r, r) bound of what rounding did to each entry of M before; unsure: (batch, r, r) bound of E where M stands for
    (1 + E)^-1 M.
    """
    if len(matrices) == 0:
        return []
    slips = slips + unsure @ np.abs(matrices)
    values, errors, drift = _eigen(matrices, slips)
    errors = errors + drift
    with np.errstate(all="ignore"):
        # an inverse helps only where an eigenvalue is blurred by larger ones
        blurred = np.flatnonzero(~(errors <= CLEAR * np.abs(values)).all(axis=1))
        if len(blurred):
            clear = blurred[np.isfinite(np.linalg.cond(matrices[blurred]))]
            inverse = np.linalg.inv(matrices[clear])
            finite = np.isfinite(inverse).all(axis=(1, 2))
            rows = clear[finite]
            if len(rows):
                # what rounding did to the inverse is charged as a backward error of each entry of M; its eigenvectors are those of M, so
                # they say what the slips of M do as well
                charged = slips[rows] + 3.0 * matrices.shape[1] * UNIT * np.abs(matrices[rows])
                mu, mu_error, drift = _eigen(inverse[finite], charged)
                lam = np.asarray(1.0 / np.where(mu == 0.0, np.nan, mu), dtype=complex)
                lam_error = 2.0 * np.abs(lam) ** 2 * mu_error + drift
                values[rows], errors[rows] = _merged(values[rows], errors[rows], lam, lam_error)
    return ordered(values, errors)


def ordered(values: Complex, errors: Array) -> list[Spectrum]:
    """Spectra from (batch, r) eigenvalues and errors, largest real part first."""
    order = np.lexsort((-values.imag, -values.real), axis=-1)
    values, errors = np.take_along_axis(values, order, axis=1), np.take_along_axis(errors, order, axis=1)
    return [Spectrum(value, error) for value, error in zip(values, errors, strict=True)]


def _merged(values: Complex, errors: Array, lam: Complex, lam_error: Array) -> tuple[Complex, Array]:
    """The same eigenvalues found twice, (batch, r) each: the slow ones from the second list where its errors are smaller."""
    one = np.argsort(np.abs(values), axis=1)
    two = np.argsort(np.abs(np.where(np.isfinite(lam), lam, np.inf)), axis=1)
    a, a_error = np.take_along_axis(values, one, axis=1), np.take_along_axis(errors, one, axis=1)
    b, b_error = np.take_along_axis(lam, two, axis=1), np.take_along_axis(lam_error, two, axis=1)
    count = np.count_nonzero(np.isfinite(b_error) & (b_error < a_error), axis=1)
    # the cut between the two lists must not part a conjugate pair
    width = values.shape[1]
    each = np.arange(len(values))
    last, following = b[each, np.maximum(count - 1, 0)], b[each, np.minimum(count, width - 1)]
    paired = (np.abs(last.imag) > 0.0) & (np.abs(last - following.conj()) <= 1e-6 * np.abs(following))
    count = count + ((count > 0) & (count < width) & paired)
    slow = np.arange(width) < count[:, None]
    return np.where(slow, b, a), np.where(slow, b_error, a_error)


def _eigen(matrices: Array, slips: Array) -> tuple[Complex, Array, Array]:
    """(eigenvalues, first-order bounds: the solver's backward error times the condition of each eigenvalue, what entrywise changes up to
    `slips` do to an eigenvalue with these eigenvectors).

    Rows and columns are balanced by powers of two first, which is exact.
    """
    balanced, moved = np.array(matrices), np.array(slips)
    others = 1.0 - np.eye(balanced.shape[1])
    for _ in range(4):
        off = np.abs(balanced) * others
        rows, columns = off.sum(axis=2), off.sum(axis=1)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            factor = np.where(
                (rows > 0.0) & (columns > 0.0), np.exp2(np.round(0.5 * np.log2(columns / rows))), 1.0
            )
        factor = np.where(np.isfinite(factor) & (factor > 0.0), factor, 1.0)
        if (factor == 1.0).all():
            break
        balanced = balanced * factor[:, :, None] / factor[:, None, :]
        moved = moved * factor[:, :, None] / factor[:, None, :]
    values, vectors = np.linalg.eig(balanced)
    values, vectors = values.astype(complex), vectors.astype(complex)
    norm = np.linalg.norm(balanced, axis=(1, 2))
    with np.errstate(all="ignore"):
        try:
            dual = np.linalg.inv(vectors)
            condition = np.linalg.norm(dual, axis=2) * np.linalg.norm(vectors, axis=1)
            drift = np.sum((np.abs(dual) @ moved) * np.swapaxes(np.abs(vectors), 1, 2), axis=2)
        except np.linalg.LinAlgError:
            condition = np.full(values.shape, 1e8)
            drift = 1e8 * np.linalg.norm(moved, axis=(1, 2))[:, None] * np.ones(values.shape)
    condition = np.where(np.isfinite(condition), np.clip(condition, 1.0, 1e8), 1e8)
    drift = np.where(np.isfinite(drift), 2.0 * drift, np.inf)  # twice: room for the growth of rounding in an elimination
    return values, ROUNDING * norm[:, None] * condition, drift
