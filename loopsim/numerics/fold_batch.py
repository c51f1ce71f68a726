"""The fold of many systems at once: each row of a batch its own equations, one Newton iteration for all.

A fold is F(y, l) = 0 with a singular Jacobian J. Singularity is said by one number g instead of a null vector: with fixed borders b, c,
[J b; c^T 0] (v, g) = (0, 1), and its transpose gives the left vector u; g vanishes exactly where J is singular, and its derivative is
-u^T (dJ v). So each step solves systems one larger than J, not twice as large (A. Griewank, G. W. Reddien, IMA J. Numer. Anal. 4
(1984); W. Govaerts, Numerical Methods for Bifurcations of Dynamical Equilibria, 2000, ch. 3; both from memory).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.newton import solve

Array: TypeAlias = NDArray[np.float64]

STEPS = 40
TIGHT = 1e-11  # last step of level and state over their sizes: quadratic convergence then leaves rounding only
LARGEST = 0.5  # of the sizes: a longer step is shortened to this


class FoldEquations(Protocol):
    """F(y, l) for a batch. y: (b, n), level: (b,); residual, slope (dF/dl): (b, n); jacobian: (b, n, n); bend: u^T d(J v)/dy (b, n);
    level_bend: u^T d(J v)/dl (b,)."""

    def residual(self, y: Array, level: Array) -> Array: ...
    def jacobian(self, y: Array, level: Array) -> Array: ...
    def slope(self, y: Array, level: Array) -> Array: ...
    def bend(self, y: Array, level: Array, u: Array, v: Array) -> Array: ...
    def level_bend(self, y: Array, level: Array, u: Array, v: Array) -> Array: ...


@dataclass(frozen=True, eq=False)
class Folds:
    """y: (b, n), level: (b,), converged: (b,); left: (b, n) u of each."""

    y: Array
    level: Array
    converged: NDArray[np.bool_]
    left: Array


def null_vectors(jacobian: Array) -> tuple[Array, Array]:
    """(left, right) singular vectors of the smallest singular value, (n,) each: good borders near a fold."""
    left, _, right = np.linalg.svd(jacobian)
    return left[:, -1], right[-1]


def solve_folds(equations: FoldEquations, y: Array, level: Array, left: Array, right: Array, size: Array, level_size: float) -> Folds:
    """Newton from y (b, n), level (b,). left, right: (n,) borders, near the null vectors; size: (n,), level_size: what a step is measured
    by. A row that leaves the numbers or has not settled after STEPS comes back not converged."""
    b, n = y.shape
    y, level = y.copy(), level.copy()
    done = np.zeros(b, dtype=bool)
    broken = np.zeros(b, dtype=bool)
    u = np.zeros((b, n))
    last = np.full(b, np.inf)
    with np.errstate(all="ignore"):
        for _ in range(STEPS):
            bordered = _bordered(equations.jacobian(y, level), left, right)
            v, g = _null(bordered, n)
            u, _ = _null(np.swapaxes(bordered, 1, 2), n)
            bordered[:, :n, n] = equations.slope(y, level)
            bordered[:, n, :n] = -equations.bend(y, level, u, v)
            bordered[:, n, n] = -equations.level_bend(y, level, u, v)
            step = solve(bordered, -np.concatenate([equations.residual(y, level), g[:, None]], axis=1))
            broken |= ~np.isfinite(step).all(axis=1)
            step[broken | done] = 0.0
            length = np.maximum(np.max(np.abs(step[:, :n]) / size, axis=1), np.abs(step[:, n]) / level_size)
            step *= np.minimum(1.0, LARGEST / np.maximum(length, LARGEST))[:, None]
            y += step[:, :n]
            level += step[:, n]
            # or it stands still on rounding
            done |= ~broken & ((length < TIGHT) | ((length < 1e-8) & (length >= 0.5 * last)))
            last = length
            if (done | broken).all():
                break
    return Folds(y, level, done & ~broken, u)


def _bordered(jacobian: Array, left: Array, right: Array) -> Array:
    b, n, _ = jacobian.shape
    found = np.zeros((b, n + 1, n + 1))
    found[:, :n, :n] = jacobian
    found[:, :n, n] = left
    found[:, n, :n] = right
    return found


def _null(bordered: Array, n: int) -> tuple[Array, Array]:
    """(vector, g) of each matrix: (b, n), (b,)."""
    right = np.zeros((len(bordered), n + 1))
    right[:, n] = 1.0
    found = solve(bordered, right)
    return found[:, :n], found[:, n]


__all__ = ["FoldEquations", "Folds", "null_vectors", "solve_folds"]
