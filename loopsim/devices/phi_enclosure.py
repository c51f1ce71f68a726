"""What a proof needs of each scalar nonlinearity over an interval: range, slope range, chord error, inverse.

All functions take intervals as arrays (low, high) of shape (..., rows) and the parameters with the parameter axis first (p, ..., rows),
as `System.groups` gives them. Every answer holds the truth: values are widened by FUNCTION_ERROR times what was computed.
The chord of phi over [low, high] is a real slope a with phi(w) - a w in [e_low, e_high] for every w there; any a is allowed, the error is
what is enclosed (L. Kolev's linear enclosure, from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from math import comb
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.devices.phi import EXPONENT_LIMIT, SLOPE, VALUE, Kind
from loopsim.numerics.enclosure import FUNCTION_ERROR, HUGE, TINY, UNIT, down, up

Array: TypeAlias = NDArray[np.float64]
Pair: TypeAlias = tuple[Array, Array]

MONOTONE = frozenset({Kind.EXPONENTIAL, Kind.SATURATION, Kind.SOFTPLUS, Kind.CHARGE_SHEET, Kind.ARCTANGENT})
CONVEX = frozenset({Kind.EXPONENTIAL, Kind.SOFTPLUS, Kind.CHARGE_SHEET})
RECIPROCAL_PEAK = float(np.sqrt(2.0 / 3.0))
SHAVE_PIECES = 16  # pieces an interval is cut into when the inverse of a kind has no closed form
FLAT = (
    1e-4  # below this width the chord slope is taken from the tangent: a difference quotient would be noise
)


def value_error(kind: int, w: Array, p: Any, value: Array) -> Array:
    """Bound of |computed - true| of VALUE[kind] at w, whose computed value is `value`."""
    if kind == Kind.POLYNOMIAL:
        total = np.zeros_like(w)
        size = np.abs(w)
        for j in range(len(p) - 1, -1, -1):
            total = (total + np.abs(p[j])) * size
        return total * ((2 * len(p) + 4) * UNIT) + TINY
    if kind == Kind.POINTS:
        total = np.abs(p[0]) + np.abs(p[1] * w)
        for j in range(2, len(p) - 1, 2):
            total = total + np.abs(p[j + 1]) * (np.abs(w) + 2.0 * np.abs(p[j]))
        return total * ((len(p) + 6) * UNIT) + TINY  # type: ignore[no-any-return]
    if kind == Kind.RECIPROCAL:
        return (3.0 * np.minimum(np.abs(w), 1.0) + np.abs(value)) * FUNCTION_ERROR + TINY
    # the continued exponential adds terms of one sign; the others are single functions of the library: relative bounds hold
    return np.abs(value) * FUNCTION_ERROR + TINY


def value_at(kind: int, w: Array, p: Any) -> Pair:
    """Enclosure of phi at the points w."""
    value = VALUE[kind](w, p)
    error = value_error(kind, w, p, value)
    return down(value - error), up(value + error)


def bounds(kind: int, low: Array, high: Array, p: Any) -> Pair:
    """Range of phi over [low, high]."""
    if kind in MONOTONE:
        bottom, top = VALUE[kind](low, p), VALUE[kind](high, p)
        return bottom - (np.abs(bottom) * FUNCTION_ERROR + TINY), top + (np.abs(top) * FUNCTION_ERROR + TINY)
    return deviation(kind, np.zeros_like(low), low, high, p)


def slope_bounds(kind: int, low: Array, high: Array, p: Any) -> Pair:
    """Range of the derivative of phi over [low, high] (for POINTS: of all its one-sided slopes)."""
    if kind in CONVEX:
        bottom, top = SLOPE[kind](low, p), SLOPE[kind](high, p)
        return bottom * (1.0 - FUNCTION_ERROR) - TINY, top * (1.0 + FUNCTION_ERROR) + TINY
    if kind in (Kind.SATURATION, Kind.ARCTANGENT):
        far = np.maximum(np.abs(low), np.abs(high))
        near = np.maximum(np.maximum(low, -high), 0.0)
        bottom, top = SLOPE[kind](far, p), SLOPE[kind](near, p)
        return np.maximum(bottom * (1.0 - FUNCTION_ERROR) - TINY, 0.0), top * (1.0 + FUNCTION_ERROR) + TINY
    if kind == Kind.RECIPROCAL:
        far = np.maximum(np.abs(low), np.abs(high))
        near = np.maximum(np.maximum(low, -high), 0.0)
        at_far, at_near = SLOPE[kind](far, p), SLOPE[kind](near, p)
        holds_corner = (near <= 1.0) & (far >= 1.0)
        bottom = np.where(holds_corner, -1.0, np.minimum(at_far, at_near))
        return bottom - 8.0 * FUNCTION_ERROR, np.maximum(at_far, at_near) + 8.0 * FUNCTION_ERROR
    if kind == Kind.POINTS:
        return _points_slope_bounds(low, high, p)
    degree = len(p)
    while degree > 1 and not np.any(p[degree - 1]):
        degree -= 1
    if degree <= 3:
        return _quadratic(
            p[0],
            2.0 * p[1] if degree > 1 else 0.0 * p[0],
            3.0 * p[2] if degree > 2 else 0.0 * p[0],
            low,
            high,
        )
    return _bernstein([(j + 1) * p[j] for j in range(degree)], low, high)


def _points_slope_bounds(low: Array, high: Array, p: Any) -> Pair:
    """Exact up to the sums: the slope is constant between corners, so every corner inside shows both of its sides."""
    slope = SLOPE[Kind.POINTS]
    # just left of `low` counts too when low stands on a corner; slopes_left treats corners as not yet passed
    corners = [p[j] for j in range(2, len(p) - 1, 2)]
    changes = [p[j + 1] for j in range(2, len(p) - 1, 2)]
    left = p[1] + 0.0 * low
    for corner, change in zip(corners, changes, strict=True):
        left = left + change * np.where(low > corner, 1.0, 0.0)
    bottom = np.minimum(left, slope(high, p))
    top = np.maximum(left, slope(high, p))
    for corner in corners:
        inside = (corner >= low) & (corner <= high)
        here = slope(corner + 0.0 * low, p)
        bottom = np.where(inside, np.minimum(bottom, here), bottom)
        top = np.where(inside, np.maximum(top, here), top)
    size = np.abs(p[1]) + 0.0 * low
    for change in changes:
        size = size + np.abs(change)
    error = size * ((len(p) + 2) * UNIT) + TINY
    return bottom - error, top + error


def _quadratic(c0: Array, c1: Array, c2: Array, low: Array, high: Array) -> Pair:
    """Range of c0 + c1 w + c2 w^2: at the ends and at the vertex, whose own rounding enters squared."""
    vertex = np.where(c2 != 0.0, -0.5 * c1 / np.where(c2 != 0.0, c2, 1.0), low)
    vertex = np.fmin(np.fmax(vertex, low), high)
    ends = [low, vertex, high]
    values = [c0 + (c1 + c2 * t) * t for t in ends]
    size = np.maximum(np.abs(low), np.abs(high))
    error = (np.abs(c0) + (np.abs(c1) + np.abs(c2) * size) * size) * (10.0 * UNIT) + TINY
    return np.minimum(np.minimum(values[0], values[1]), values[2]) - error, np.maximum(
        np.maximum(values[0], values[1]), values[2]
    ) + error


def _bernstein(a: list[Array], low: Array, high: Array) -> Pair:
    """Range of the polynomial a0 + a1 w + ... over [low, high], from its Bernstein coefficients there.

    The range lies between the least and the greatest coefficient (G. T. Cargo, O. Shisha 1966, from memory).
    """
    degree = len(a) - 1
    width = high - low
    anchor = np.abs(low)
    taylor, size = [], []
    for j in range(degree + 1):
        value = np.zeros_like(low)
        bound = np.zeros_like(low)
        for k in range(degree, j - 1, -1):
            value = value * low + comb(k, j) * a[k]
            bound = bound * anchor + comb(k, j) * np.abs(a[k])
        power = width**j
        taylor.append(value * power)
        size.append(bound * np.abs(power))
    least = most = taylor[0]
    for i in range(1, degree + 1):
        coefficient = taylor[0]
        for j in range(1, i + 1):
            coefficient = coefficient + (comb(i, j) / comb(degree, j)) * taylor[j]
        least = np.minimum(least, coefficient)
        most = np.maximum(most, coefficient)
    total = size[0]
    for j in range(1, degree + 1):
        total = total + size[j]
    # width itself carries one rounding, so width**j carries j of them; 6 (degree + 2) covers Horner, powers and the sums
    error = total * (6 * (degree + 2) * UNIT) + TINY
    return least - error, most + error


def stationary(kind: int, a: Array, low: Array, high: Array, p: Any) -> list[Array]:
    """Points, to about working precision, where the slope of phi equals a; clipped to [low, high]. Only tightness rests on them."""
    with np.errstate(all="ignore"):
        if kind == Kind.EXPONENTIAL:
            found = [np.log(np.maximum(a, 1e-300))]
        elif kind == Kind.SOFTPLUS:
            inside = np.clip(a, 1e-300, 1.0 - 1e-16)
            found = [np.log(inside) - np.log1p(-inside)]
        elif kind == Kind.CHARGE_SHEET:
            found = [_charge_sheet_stationary(a)]
        elif kind == Kind.SATURATION:
            t = np.arccosh(1.0 / np.sqrt(np.clip(a, 1e-300, 1.0)))
            found = [-t, t]
        elif kind == Kind.ARCTANGENT:
            t = np.sqrt(np.maximum(1.0 / np.clip(a, 1e-300, 1.0) - 1.0, 0.0))
            found = [-t, t]
        elif kind == Kind.RECIPROCAL:
            inner = np.sqrt(np.clip((2.0 - a) / 3.0, 0.0, 1.0))
            outer = np.where(a < 0.0, 1.0 / np.sqrt(np.clip(-a, 1e-300, 1.0)), 1.0)
            found = [-outer, -inner, inner, outer]
        elif kind == Kind.POINTS:
            found = [p[j] + 0.0 * low for j in range(2, len(p) - 1, 2)]
        else:
            found = _polynomial_stationary(a, low, high, p)
    # fmax and fmin put an end in the place of what is no number
    return [np.fmin(np.fmax(t, low), high) for t in found]


def _charge_sheet_stationary(a: Array) -> Array:
    """Where ln(1 + e^(w/2)) e^(w/2) / (1 + e^(w/2)) = a: four Newton steps on the logarithm of the slope from its two asymptotes."""
    a = np.clip(a, 1e-300, 1e300)
    w = np.where(a > 1.0, 2.0 * (a + np.log1p(-np.exp(-a))), np.log(a) + 0.75 * np.minimum(a, 1.0))
    for _ in range(4):
        slope = SLOPE[Kind.CHARGE_SHEET](w, ())
        bend = np.maximum(_charge_sheet_bend(w), 1e-300)
        w = w - np.log(np.maximum(slope, 1e-300) / a) * slope / bend
    return w


def _charge_sheet_bend(w: Array) -> Array:
    half = np.exp(-np.abs(0.5 * w))
    slope = np.where(w >= 0.0, 1.0, half) / (1.0 + half)
    plus = np.maximum(0.5 * w, 0.0) + np.log1p(half)
    return 0.5 * (slope * slope + plus * half / ((1.0 + half) * (1.0 + half)))


def _polynomial_stationary(a: Array, low: Array, high: Array, p: Any) -> list[Array]:
    """Roots of phi' = a in closed form up to a cubic; evenly spaced cuts above."""
    degree = len(p)
    while degree > 1 and not np.any(p[degree - 1]):
        degree -= 1
    if degree <= 1:
        return []
    if degree > 3:
        return [low + (high - low) * (j / 8.0) for j in range(1, 8)]
    c0, c1 = p[0] - a, 2.0 * p[1]
    c2 = 3.0 * p[2] if degree > 2 else 0.0 * c1
    root = np.sqrt(np.maximum(c1 * c1 - 4.0 * c2 * c0, 0.0))
    q = -0.5 * (c1 + np.where(c1 >= 0.0, root, -root))
    first = np.where(
        c2 != 0.0,
        q / np.where(c2 != 0.0, c2, 1.0),
        np.where(c1 != 0.0, -c0 / np.where(c1 != 0.0, c1, 1.0), 0.0),
    )
    second = np.where(q != 0.0, c0 / np.where(q != 0.0, q, 1.0), first)
    return [np.minimum(first, second), np.maximum(first, second)]


def deviation(kind: int, a: Array, low: Array, high: Array, p: Any) -> Pair:
    """Range of phi(w) - a w over [low, high].

    [low, high] is cut near the stationary points; on each piece the function is held between the two lines that its slope range allows
    from both ends, which is exact where it is monotone and second order small where a cut missed the stationary point.
    """
    inner = stationary(kind, a, low, high, p)
    cuts = np.array([low, *inner, high])
    if len(cuts) > 4:
        cuts = np.sort(cuts, axis=0)
    q = [np.asarray(parameter)[None] for parameter in p]  # the piece axis stands in front of the box axis
    value = VALUE[kind](cuts, q)
    product = a * cuts
    error = value_error(kind, cuts, q, value) + np.abs(product) * (2.0 * UNIT)
    value = value - product
    at_low, at_high = down(value - error), up(value + error)
    start, stop = cuts[:-1], cuts[1:]
    s_low, s_high = slope_bounds(kind, start, stop, q)
    slack = np.abs(a) * (2.0 * UNIT)
    s_low, s_high = down(s_low - a) - slack, up(s_high - a) + slack
    lower, upper = _between_lines(
        (at_low[:-1], at_high[:-1]), (at_low[1:], at_high[1:]), s_low, s_high, stop - start
    )
    return lower.min(axis=0), upper.max(axis=0)


def _between_lines(at_start: Pair, at_stop: Pair, s_low: Array, s_high: Array, width: Array) -> Pair:
    """Bounds of q on a piece from its end values and slope range: going down from the start it loses s_low times the width at most, and
    coming up to the stop it has risen by s_high times the width at most; likewise from above. Exact where q is monotone.

    The width carries one rounding, each product one: both lie within the 8 roundings that the width is enlarged by.
    """
    reach = width * (1.0 + 8.0 * UNIT) + TINY
    falls, rises = np.minimum(s_low, 0.0) * reach, np.maximum(s_high, 0.0) * reach
    low = np.maximum(at_start[0] + falls, at_stop[0] - rises)
    high = np.minimum(at_start[1] + rises, at_stop[1] - falls)
    return down(low), up(high)


def chord(kind: int, low: Array, high: Array, p: Any) -> tuple[Array, Array, Array]:
    """(slope a, e_low, e_high): phi(w) - a w lies in [e_low, e_high] over [low, high]. low, high finite."""
    width = high - low
    middle = 0.5 * low + 0.5 * high
    flat = width <= FLAT * np.maximum(1.0, np.abs(middle) * 1e-6)
    ends = np.array([low, high])
    values = VALUE[kind](ends, [np.asarray(parameter)[None] for parameter in p])
    a = (values[1] - values[0]) / np.where(width > 0.0, width, 1.0)
    if flat.any():
        a = np.where(flat, SLOPE[kind](middle, p), a)
    if kind in CONVEX:
        return a, *_convex_deviation(kind, a, ends, values)
    return a, *deviation(kind, a, low, high, p)


def _convex_deviation(kind: int, a: Array, ends: Array, values: Array) -> Pair:
    """`deviation` of a convex kind without parameters; ends: (2, ...) low and high; values: (2, ...) computed there.

    Highest at an end. From below it is held by the tangent at any point t, phi(w) >= phi(t) + phi'(t) (w - t); t is near where the slope is
    a, and what is left of phi'(t) - a, with its rounding, is charged over the whole way to the end where it lowers the tangent.
    """
    product = a * ends
    error = np.abs(values) * FUNCTION_ERROR + (np.abs(product) * (2.0 * UNIT) + TINY)
    top = up(values - product + error)
    t = stationary(kind, a, ends[0], ends[1], ())[0]
    value, slope = VALUE[kind](t, ()), SLOPE[kind](t, ())
    product = a * t
    base = down(value - product - (np.abs(value) * FUNCTION_ERROR + (np.abs(product) * (2.0 * UNIT) + TINY)))
    excess, unsure = slope - a, slope * FUNCTION_ERROR + (np.abs(a) * (2.0 * UNIT) + TINY)
    after = np.minimum(down(excess - unsure), 0.0) * up(ends[1] - t)
    before = np.maximum(up(excess + unsure), 0.0) * up(t - ends[0])
    return down(base + down(np.minimum(after, -before))), np.maximum(top[0], top[1])


def _inverse_exponential(y: Array) -> Array:
    top = np.expm1(EXPONENT_LIMIT)
    with np.errstate(divide="ignore", invalid="ignore"):
        inner = np.log1p(np.clip(y, -1.0, top))
        outer = EXPONENT_LIMIT + (y - top) / np.exp(EXPONENT_LIMIT)
    return np.where(y > top, outer, np.where(y <= -1.0, -HUGE, inner))


def _inverse_saturation(y: Array) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        inner = np.arctanh(np.clip(y, -1.0, 1.0))
    return np.where(y >= 1.0, HUGE, np.where(y <= -1.0, -HUGE, inner))


def _inverse_softplus(y: Array) -> Array:
    with np.errstate(divide="ignore", invalid="ignore"):
        inner = y + np.log(-np.expm1(-np.maximum(y, 0.0)))
    return np.where(y <= 0.0, -HUGE, inner)


def _inverse_charge_sheet(y: Array) -> Array:
    return np.where(y <= 0.0, -HUGE, 2.0 * _inverse_softplus(np.sqrt(np.maximum(y, 0.0))))


def _inverse_arctangent(y: Array) -> Array:
    quarter = 0.5 * np.pi
    inner = np.tan(np.clip(y, -quarter, quarter))
    return np.where(y >= quarter * (1 - 1e-15), HUGE, np.where(y <= -quarter * (1 - 1e-15), -HUGE, inner))


_INVERSE: dict[int, Callable[[Array], Array]] = {
    Kind.EXPONENTIAL: _inverse_exponential,
    Kind.SATURATION: _inverse_saturation,
    Kind.SOFTPLUS: _inverse_softplus,
    Kind.CHARGE_SHEET: _inverse_charge_sheet,
    Kind.ARCTANGENT: _inverse_arctangent,
}


# values that each kind certainly stays between
REACH: dict[int, tuple[float, float]] = {
    Kind.EXPONENTIAL: (-1.0 - 1e-12, np.inf),
    Kind.SATURATION: (-1.0 - 1e-12, 1.0 + 1e-12),
    Kind.SOFTPLUS: (0.0, np.inf),
    Kind.CHARGE_SHEET: (0.0, np.inf),
    Kind.ARCTANGENT: (-1.5708, 1.5708),
}


def inverse(kind: int, low: Array, high: Array, y_low: Array, y_high: Array, p: Any) -> Pair:
    """Part of [low, high] where phi can lie in [y_low, y_high]: a hull, empty where the new low exceeds the new high.

    A computed inverse is never trusted: it is moved out by a relative step and kept only where phi there is proved beyond the bound.
    """
    if kind in _INVERSE:
        new_low, new_high = _proved_inverse(kind, y_low, y_high, p)
        return np.maximum(low, new_low), np.minimum(high, new_high)
    return _shave(kind, low, high, y_low, y_high, p)


def _proved_inverse(kind: int, y_low: Array, y_high: Array, p: Any) -> Pair:
    y = np.array([y_low, y_high])
    w = _INVERSE[kind](y)
    step = np.abs(w) * 1e-13 + 1e-13
    w[0] -= step[0]
    w[1] += step[1]
    value = VALUE[kind](w, p)
    error = value_error(kind, w, p, value)
    # phi is increasing: if phi(least) < y_low for certain, then phi(w) < y_low for all w <= least
    least = np.where(up(value[0] + error[0]) <= y_low, w[0], -HUGE)
    most = np.where(down(value[1] - error[1]) >= y_high, w[1], HUGE)
    # values that phi never reaches empty the row
    lowest, highest = REACH[kind]
    if (none := (y_high < lowest) | (y_low > highest)).any():
        return np.where(none, HUGE, least), np.where(none, -HUGE, most)
    return least, most


def _cuts(low: Array, high: Array, pieces: int) -> Array:
    """Cut points (pieces + 1, ...): even over short intervals, even in the inverse hyperbolic sine over wide ones."""
    share = (np.arange(pieces + 1) / pieces).reshape((-1,) + (1,) * low.ndim)
    wide = (high - low) > 100.0
    even = low + (high - low) * share
    if np.any(wide):
        spread = np.sinh(np.arcsinh(low) + (np.arcsinh(high) - np.arcsinh(low)) * share)
        even = np.where(wide, spread, even)
    even = np.clip(even, low, high)
    even[0], even[-1] = low, high
    return np.asarray(even)


def _shave(kind: int, low: Array, high: Array, y_low: Array, y_high: Array, p: Any) -> Pair:
    """Cut [low, high] into pieces and drop those from both ends whose range misses [y_low, y_high]."""
    # the piece axis stands in front of the box axis, behind that of the parameters
    q = [np.asarray(parameter)[None] for parameter in p]
    for _ in range(2):
        cuts = _cuts(low, high, SHAVE_PIECES)
        starts, stops = cuts[:-1], cuts[1:]
        value = VALUE[kind](cuts, q)
        error = value_error(kind, cuts, q, value)
        at_low, at_high = down(value - error), up(value + error)
        slopes = slope_bounds(kind, starts, stops, q)
        bottom, top = _between_lines((at_low[:-1], at_high[:-1]), (at_low[1:], at_high[1:]), *slopes, stops - starts)
        hit = (top >= y_low) & (bottom <= y_high)
        some = np.any(hit, axis=0)
        first = np.argmax(hit, axis=0)
        last = SHAVE_PIECES - 1 - np.argmax(hit[::-1], axis=0)
        new_low = np.take_along_axis(starts, first[None], axis=0)[0]
        new_high = np.take_along_axis(stops, last[None], axis=0)[0]
        gained = (new_high - new_low) < 0.5 * (high - low)
        low = np.where(some, new_low, HUGE)
        high = np.where(some, new_high, -HUGE)
        if not np.any(gained & some):
            break
        # rows that came out empty are carried as a harmless point until the caller sees them
        if not np.all(some):
            break
    return low, high
