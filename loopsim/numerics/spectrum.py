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
ROUNDING = 20.0 * 2.0**-53  # backward error of the eigenvalue solver, relative to the norm


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
    """Finite eigenvalues for each Jacobian: (batch, n, n), with the common C: (n, n)."""
    batch, n, _ = jacobians.shape
    none = Spectrum(np.zeros(0, dtype=complex), np.zeros(0))
    if n == 0 or not np.any(dynamics):
        return [none] * batch
    rows, columns = equilibrate(dynamics)
    left, sigma, right = np.linalg.svd(dynamics * rows[:, None] * columns)
    rank = int(np.count_nonzero(sigma > RANK * sigma[0]))
    # x = columns * right.T y, equations times left.T rows
    a = -(left.T @ (jacobians * rows[:, None] * columns[None, :]) @ right.T)
    a11, a12, a21, a22 = a[:, :rank, :rank], a[:, :rank, rank:], a[:, rank:, :rank], a[:, rank:, rank:]
    e = sigma[:rank]
    if rank == n:
        return _ordinary(a11 / e[:, None])
    r, c = equilibrate(a22)
    block = a22 * r[:, :, None] * c[:, None, :]
    singular = np.linalg.svd(block, compute_uv=False)
    regular = singular[:, -1] > SINGULAR * singular[:, 0]
    inner = np.linalg.solve(block[regular], a21[regular] * r[regular][:, :, None])
    reduced = (a11[regular] - (a12[regular] * c[regular][:, None, :]) @ inner) / e[:, None]
    found: list[Spectrum] = [none] * batch
    for i, spectrum in zip(np.flatnonzero(regular), _ordinary(reduced), strict=True):
        found[i] = spectrum
    for i in np.flatnonzero(~regular):
        found[i] = _constrained(a11[i], a12[i], a21[i], a22[i], e)
    return found


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
    return _ordinary(np.linalg.solve(mass, matrix)[None])[0]


def _null(matrix: Array) -> Array:
    """Orthonormal basis of the null space."""
    if matrix.shape[0] == 0:
        return np.eye(matrix.shape[1])
    _, sigma, right = np.linalg.svd(matrix)
    rank = int(np.count_nonzero(sigma > SINGULAR * max(float(sigma[0]), 1e-300)))
    return np.asarray(right[rank:].T)


def _ordinary(matrices: Array) -> list[Spectrum]:
    """Eigenvalues of each M from M and from its inverse, the more accurate one each."""
    if len(matrices) == 0:
        return []
    forward, forward_error = _eigen(matrices)
    backward, backward_error = np.full(forward.shape, np.nan + 0j), np.full(forward.shape, np.inf)
    with np.errstate(all="ignore"):
        clear = (
            np.isfinite(np.linalg.cond(matrices))
            if matrices.shape[1]
            else np.zeros(len(matrices), dtype=bool)
        )
        if np.any(clear):
            inverse = np.linalg.inv(matrices[clear])
            finite = np.isfinite(inverse).all(axis=(1, 2))
            rows = np.flatnonzero(clear)[finite]
            if len(rows):
                mu, mu_error = _eigen(inverse[finite])
                lam = 1.0 / np.where(mu == 0.0, np.nan, mu)
                backward[rows] = lam
                # the inverse itself was rounded: its relative error is the condition number times the unit roundoff, entrywise small for
                # graded matrices; charge it once more
                backward_error[rows] = 2.0 * np.abs(lam) ** 2 * mu_error
    found = []
    for one, one_error, two, two_error in zip(forward, forward_error, backward, backward_error, strict=True):
        order_one, order_two = (
            np.argsort(np.abs(one)),
            np.argsort(np.abs(np.where(np.isfinite(two), two, np.inf))),
        )
        a, a_error, b, b_error = one[order_one], one_error[order_one], two[order_two], two_error[order_two]
        better = np.isfinite(b_error) & (b_error < a_error)
        # the cut between the two lists must not part a conjugate pair
        count = int(np.count_nonzero(better))
        if (
            0 < count < len(a)
            and abs(b[count - 1].imag) > 0.0
            and np.isclose(b[count - 1], np.conj(b[count]), rtol=1e-6)
        ):
            count += 1
        values = np.concatenate([b[:count], a[count:]])
        errors = np.concatenate([b_error[:count], a_error[count:]])
        order = np.lexsort((-values.imag, -values.real))
        found.append(Spectrum(values[order], errors[order]))
    return found


def _eigen(matrices: Array) -> tuple[Complex, Array]:
    """Eigenvalues with first-order error bounds: the solver's backward error times the condition of each eigenvalue.

    Rows and columns are balanced by powers of two first, which is exact.
    """
    balanced = np.array(matrices)
    for _ in range(4):
        off = np.abs(balanced) * (1.0 - np.eye(balanced.shape[1]))
        rows, columns = off.sum(axis=2), off.sum(axis=1)
        with np.errstate(divide="ignore", invalid="ignore"):
            factor = np.where(
                (rows > 0.0) & (columns > 0.0), np.exp2(np.round(0.5 * np.log2(columns / rows))), 1.0
            )
        factor = np.where(np.isfinite(factor) & (factor > 0.0), factor, 1.0)
        balanced = balanced * factor[:, :, None] / factor[:, None, :]
    values, vectors = np.linalg.eig(balanced)
    values, vectors = values.astype(complex), vectors.astype(complex)
    norm = np.linalg.norm(balanced, axis=(1, 2))
    with np.errstate(all="ignore"):
        try:
            dual = np.linalg.inv(vectors)
            condition = np.linalg.norm(dual, axis=2) * np.linalg.norm(vectors, axis=1)
        except np.linalg.LinAlgError:
            condition = np.full(values.shape, 1e8)
    condition = np.where(np.isfinite(condition), np.clip(condition, 1.0, 1e8), 1e8)
    return values, ROUNDING * norm[:, None] * condition
