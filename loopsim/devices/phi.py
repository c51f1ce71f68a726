"""The scalar nonlinearities phi(w) of the Lur'e form: value, slope and curvature, each written once.

Every function takes `w` and the parameter list `p` and uses only NumPy functions that accept scalars too, so that the same source
serves arrays (w of shape (..., rows), p[j] of shape (..., rows)) and a compiled scalar loop (w a float, p[j] a float).
Arguments are dimensionless unless the kind says otherwise; scale lives in W and B.
"""

from __future__ import annotations

from enum import IntEnum
from typing import Any

import numpy as np

choose = np.where  # a compiled scalar loop puts a scalar choice in its place

EXPONENT_LIMIT = 120.0  # exp(120) is 1e52: with 1e-30 A of saturation current still 1e22 A, where no circuit rests


class Kind(IntEnum):
    """Which scalar function a row is; its parameters p in order."""

    EXPONENTIAL = 0  # exp(w) - 1, continued linearly above EXPONENT_LIMIT; no parameters
    SATURATION = 1  # tanh(w); none
    SOFTPLUS = 2  # ln(1 + exp(w)); none
    CHARGE_SHEET = 3  # ln(1 + exp(w / 2))^2; none
    ARCTANGENT = 4  # atan(w); none
    POLYNOMIAL = 5  # p0 w + p1 w^2 + ... ; as many as the system's widest polynomial, zero-filled
    POINTS = 6  # piecewise linear: p0 = value at 0, p1 = slope far left, then pairs (corner, slope change), padded with (0, 0)
    RECIPROCAL = 7  # 1 / w beyond |w| = 1, 2 w - w^3 inside: a load of constant power; none


def exponential(w: Any, p: Any) -> Any:
    capped = np.minimum(w, EXPONENT_LIMIT)
    grown = np.expm1(capped)
    return grown + (grown + 1.0) * (w - capped)


def exponential_slope(w: Any, p: Any) -> Any:
    return np.exp(np.minimum(w, EXPONENT_LIMIT))


def exponential_curvature(w: Any, p: Any) -> Any:
    return choose(w < EXPONENT_LIMIT, np.exp(np.minimum(w, EXPONENT_LIMIT)), 0.0)


def saturation(w: Any, p: Any) -> Any:
    return np.tanh(w)


def saturation_slope(w: Any, p: Any) -> Any:
    # 1 - tanh^2 loses all digits beyond |w| = 19; this form keeps them
    e = np.exp(-2.0 * np.abs(w))
    return 4.0 * e / ((1.0 + e) * (1.0 + e))


def saturation_curvature(w: Any, p: Any) -> Any:
    return -2.0 * np.tanh(w) * saturation_slope(w, p)


def softplus(w: Any, p: Any) -> Any:
    return np.maximum(w, 0.0) + np.log1p(np.exp(-np.abs(w)))


def softplus_slope(w: Any, p: Any) -> Any:
    e = np.exp(-np.abs(w))
    return choose(w >= 0.0, 1.0, e) / (1.0 + e)


def softplus_curvature(w: Any, p: Any) -> Any:
    e = np.exp(-np.abs(w))
    return e / ((1.0 + e) * (1.0 + e))


def charge_sheet(w: Any, p: Any) -> Any:
    s = softplus(0.5 * w, p)
    return s * s


def charge_sheet_slope(w: Any, p: Any) -> Any:
    return softplus(0.5 * w, p) * softplus_slope(0.5 * w, p)


def charge_sheet_curvature(w: Any, p: Any) -> Any:
    slope = softplus_slope(0.5 * w, p)
    return 0.5 * (slope * slope + softplus(0.5 * w, p) * softplus_curvature(0.5 * w, p))


def arctangent(w: Any, p: Any) -> Any:
    return np.arctan(w)


def arctangent_slope(w: Any, p: Any) -> Any:
    return 1.0 / (1.0 + w * w)


def arctangent_curvature(w: Any, p: Any) -> Any:
    q = 1.0 / (1.0 + w * w)
    return -2.0 * w * q * q


def polynomial(w: Any, p: Any) -> Any:
    total = 0.0 * w
    for j in range(len(p) - 1, -1, -1):
        total = (total + p[j]) * w
    return total


def polynomial_slope(w: Any, p: Any) -> Any:
    total = 0.0 * w
    for j in range(len(p) - 1, -1, -1):
        total = total * w + (j + 1) * p[j]
    return total


def polynomial_curvature(w: Any, p: Any) -> Any:
    total = 0.0 * w
    for j in range(len(p) - 1, 0, -1):
        total = total * w + (j + 1) * j * p[j]
    return total


def points(w: Any, p: Any) -> Any:
    # ramps are measured from where they stand at w = 0, so that p0 is the value at 0 whatever the corners
    total = p[0] + p[1] * w
    for j in range(2, len(p) - 1, 2):
        total = total + p[j + 1] * (np.maximum(w - p[j], 0.0) - np.maximum(-p[j], 0.0))
    return total


def points_slope(w: Any, p: Any) -> Any:
    total = p[1] + 0.0 * w
    for j in range(2, len(p) - 1, 2):
        total = total + p[j + 1] * choose(w >= p[j], 1.0, 0.0)
    return total


def points_curvature(w: Any, p: Any) -> Any:
    return 0.0 * w


def reciprocal(w: Any, p: Any) -> Any:
    inside = np.maximum(np.minimum(w, 1.0), -1.0)
    outside = choose(np.abs(w) > 1.0, w, 1.0)
    return choose(np.abs(w) > 1.0, 1.0 / outside, 2.0 * inside - inside * inside * inside)


def reciprocal_slope(w: Any, p: Any) -> Any:
    inside = np.maximum(np.minimum(w, 1.0), -1.0)
    outside = choose(np.abs(w) > 1.0, w, 1.0)
    return choose(np.abs(w) > 1.0, -1.0 / (outside * outside), 2.0 - 3.0 * inside * inside)


def reciprocal_curvature(w: Any, p: Any) -> Any:
    inside = np.maximum(np.minimum(w, 1.0), -1.0)
    outside = choose(np.abs(w) > 1.0, w, 1.0)
    return choose(np.abs(w) > 1.0, 2.0 / (outside * outside * outside), -6.0 * inside)


VALUE = (exponential, saturation, softplus, charge_sheet, arctangent, polynomial, points, reciprocal)
SLOPE = (
    exponential_slope,
    saturation_slope,
    softplus_slope,
    charge_sheet_slope,
    arctangent_slope,
    polynomial_slope,
    points_slope,
    reciprocal_slope,
)
CURVATURE = (
    exponential_curvature,
    saturation_curvature,
    softplus_curvature,
    charge_sheet_curvature,
    arctangent_curvature,
    polynomial_curvature,
    points_curvature,
    reciprocal_curvature,
)
