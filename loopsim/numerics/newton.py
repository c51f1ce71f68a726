"""Damped Newton on many starts at once."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]

MAX_STEPS = 80  # 5 V, 1 kohm, diode: starts from -2 to 1.5 V took 10 to 37 steps
MIN_DAMPING = 2.0**-14  # below this the direction itself is wrong


@dataclass(frozen=True, eq=False)
class Roots:
    """x: (batch, n) where each start ended; converged: (batch,); steps: how many were taken in all."""

    x: Array
    converged: NDArray[np.bool_]
    steps: int


def solve(matrices: Array, right: Array) -> Array:
    """matrices (batch, n, n) \\ right (batch, n); rows of a singular or non-finite matrix come back as NaN."""
    try:
        return np.asarray(np.linalg.solve(matrices, right[..., None])[..., 0])
    except np.linalg.LinAlgError:
        out = np.full(right.shape, np.nan)
        for i, (matrix, side) in enumerate(zip(matrices, right, strict=True)):
            try:
                out[i] = np.linalg.solve(matrix, side)
            except np.linalg.LinAlgError:
                continue
        return out


def newton(
    residual: Callable[[Array], Array],
    jacobian: Callable[[Array], Array],
    x: Array,
    *,
    tolerance: float = 1e-12,
    max_steps: int = MAX_STEPS,
) -> Roots:
    """Solve residual(x) = 0 from every row of `x` at once, by damped Newton.

    x: (batch, n); residual(x): (batch, n); jacobian(x): (batch, n, n); tolerance: largest last step, relative to 1 + |x|.
    Damping by the natural monotonicity test: Deuflhard, Newton Methods for Nonlinear Problems (2004), ch. 3 (from memory).
    """
    x = np.array(x, dtype=float)
    batch = len(x)
    converged = np.zeros(batch, dtype=bool)
    lost = np.zeros(batch, dtype=bool)
    damping = np.ones(batch)
    steps = 0
    with np.errstate(all="ignore"):
        f = residual(x)
        for count in range(1, max_steps + 1):
            steps = count
            matrices = jacobian(x)
            step = solve(matrices, -f)
            lost |= ~np.isfinite(step).all(axis=1)
            step = np.where(lost[:, None], 0.0, step)
            size = np.max(np.abs(step) / (1.0 + np.abs(x)), axis=1)
            active = ~(converged | lost)
            trial = x + damping[:, None] * step
            f_trial = residual(trial)
            next_step = solve(matrices, -f_trial)
            next_size = np.max(np.abs(next_step) / (1.0 + np.abs(x)), axis=1)
            good = active & (next_size <= (1.0 - 0.25 * damping) * size + 1e-16) | (
                active & (size <= tolerance)
            )
            x = np.where(good[:, None], trial, x)
            f = np.where(good[:, None], f_trial, f)
            converged |= good & (size * damping <= tolerance)
            damping = np.where(good, np.minimum(1.0, 3.0 * damping), 0.5 * damping)
            lost |= active & ~good & (damping < MIN_DAMPING)
            if np.all(converged | lost):
                break
    return Roots(x, converged, steps)
