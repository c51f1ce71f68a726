"""Interval arithmetic on arrays, rounded outward without touching the processor's rounding mode.

A quantity is a pair of arrays (low, high), low <= true <= high. Every operation first computes in double precision and then widens by a
bound on what rounding can have done, scaled to the magnitudes that were added, never by a fixed amount (S. M. Rump, Verification
methods, Acta Numerica 19 (2010), from memory: a sum of k products in any order errs by at most gamma_k times the sum of magnitudes).
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]

UNIT = 2.0**-53  # unit roundoff of IEEE double
TINY = 1e-290  # covers what underflow loses in sums of products whose factors exceed 1e-10
FUNCTION_ERROR = (
    16.0 * UNIT
)  # library functions were measured below 4 units in the last place; formulas here chain up to three
HUGE = 1e150  # a bound that stands for "not known"; squares of it are still finite


def gamma(k: int) -> float:
    """Error factor of a sum of k products, in any order, with room for the widening operations themselves."""
    return (k + 6) * UNIT * 1.01


def down(x: Array) -> Array:
    """A number below x by two roundings of it."""
    room = np.abs(x)
    room *= 2.0 * UNIT
    room += TINY
    return np.subtract(x, room)


def up(x: Array) -> Array:
    """A number above x by two roundings of it."""
    room = np.abs(x)
    room *= 2.0 * UNIT
    room += TINY
    return np.add(x, room)


def middle(low: Array, high: Array) -> Array:
    """A number between the ends."""
    return 0.5 * low + 0.5 * high


def radius(low: Array, high: Array, centre: Array) -> Array:
    """Upper bound of the distance from `centre` to either end."""
    return up(np.maximum(high - centre, centre - low))


def multiply(a_low: Array, a_high: Array, b_low: Array, b_high: Array) -> tuple[Array, Array]:
    """Product of two intervals, elementwise."""
    p, q, r, t = a_low * b_low, a_low * b_high, a_high * b_low, a_high * b_high
    return down(np.minimum(np.minimum(p, q), np.minimum(r, t))), up(
        np.maximum(np.maximum(p, q), np.maximum(r, t))
    )


def scale(factor: Array, low: Array, high: Array) -> tuple[Array, Array]:
    """An exact factor times an interval, elementwise."""
    p, q = factor * low, factor * high
    return down(np.minimum(p, q)), up(np.maximum(p, q))


def divide_clear(a_low: Array, a_high: Array, b_low: Array, b_high: Array) -> tuple[Array, Array]:
    """Quotient of two intervals; where the divisor holds zero the answer is the whole line (+/- HUGE)."""
    holds_zero = (b_low <= 0.0) & (b_high >= 0.0)
    safe_low = np.where(holds_zero, 1.0, b_low)
    safe_high = np.where(holds_zero, 1.0, b_high)
    p, q, r, t = a_low / safe_low, a_low / safe_high, a_high / safe_low, a_high / safe_high
    low = down(np.minimum(np.minimum(p, q), np.minimum(r, t)))
    high = up(np.maximum(np.maximum(p, q), np.maximum(r, t)))
    return np.where(holds_zero, -HUGE, low), np.where(holds_zero, HUGE, high)


def linear_image(matrix: Array, centre: Array, spread: Array) -> tuple[Array, Array]:
    """matrix @ (centre +/- spread): (centre of the image, its radius with all rounding in it).

    matrix: (..., r, n), exact; centre, spread: (..., n), spread >= 0.
    """
    magnitude = np.abs(matrix)
    value = (matrix @ centre[..., None])[..., 0]
    bound = (magnitude @ (spread + gamma(matrix.shape[-1]) * (np.abs(centre) + spread))[..., None])[..., 0]
    return value, up(bound) + TINY
