"""Batches of boxes: intervals for x, w, psi, u and phi at once, so that what is known of a difference is kept."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.enclosure import TINY, down, gamma, multiply, up

if TYPE_CHECKING:
    from loopsim.numerics.problem import Problem

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]


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


def stack(parts: list[Boxes]) -> Boxes:
    """One batch from several."""
    if len(parts) == 1:
        return parts[0]
    return Boxes(np.concatenate([part.low for part in parts]), np.concatenate([part.high for part in parts]))


def join(a: Boxes, b: Boxes) -> Boxes:
    """Hull of two batches, box by box."""
    return Boxes(np.minimum(a.low, b.low), np.maximum(a.high, b.high))


def ends(problem: Problem, boxes: Boxes) -> Array:
    """(b, 2, n) the x part of boxes."""
    return np.stack([boxes.low[:, problem.layout.x], boxes.high[:, problem.layout.x]], axis=1)


def affine(matrix: Array, x_low: Array, x_high: Array, c_low: Array, c_high: Array) -> tuple[Array, Array]:
    """matrix @ [x] + [c]: (b, r)."""
    plus, minus = np.maximum(matrix, 0.0), np.minimum(matrix, 0.0)
    low = x_low @ plus.T + x_high @ minus.T + c_low
    high = x_high @ plus.T + x_low @ minus.T + c_high
    size = np.maximum(np.abs(x_low), np.abs(x_high)) @ np.abs(matrix).T + np.maximum(
        np.abs(c_low), np.abs(c_high)
    )
    error = size * gamma(matrix.shape[1] + 2) + TINY
    return low - error, high + error


def boxes_over(problem: Problem, x_low: Array, x_high: Array) -> Boxes:
    """The boxes of x with everything that follows from x alone; x_low, x_high: (b, n)."""
    q = problem.product
    w_low, w_high = affine(problem.W, x_low, x_high, problem.c_low, problem.c_high)
    if problem.m == 0:
        return Boxes(x_low, x_high)
    f_low, f_high = problem.rows.bounds(w_low, w_high)
    if len(q) == 0:
        return Boxes(
            np.concatenate([x_low, w_low, f_low], axis=1), np.concatenate([x_high, w_high, f_high], axis=1)
        )
    u_low, u_high = affine(problem.V[q], x_low, x_high, problem.d_low[q], problem.d_high[q])
    p_low, p_high = f_low.copy(), f_high.copy()
    p_low[:, q], p_high[:, q] = multiply(f_low[:, q], f_high[:, q], u_low, u_high)
    return Boxes(
        np.concatenate([x_low, w_low, p_low, u_low, f_low[:, q]], axis=1),
        np.concatenate([x_high, w_high, p_high, u_high, f_high[:, q]], axis=1),
    )


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
    low, high = affine(matrix, x, x, c_low, c_high)
    return down(low - spread), up(high + spread)


def start_points(problem: Problem, x: Array, spread: Array) -> Boxes:
    """The boxes x +/- spread with everything that follows from x; no contraction."""
    zero = spread == 0.0
    return boxes_over(problem, np.where(zero, x, down(x - spread)), np.where(zero, x, up(x + spread)))
