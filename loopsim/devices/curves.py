"""Static characteristics with their numbers put in, ready to be rows of the nonlinear vector."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from loopsim.devices.fields import Scalar
from loopsim.devices.phi import Kind
from loopsim.errors import CircuitError


@dataclass(frozen=True, eq=False)
class CurveValues:
    """kind: POLYNOMIAL or POINTS; parameters: as `loopsim.devices.phi` reads them [SI]."""

    kind: Kind
    parameters: tuple[Scalar, ...]


def everywhere(condition: Any) -> bool:
    """Whether a comparison holds for every member of a batch. What is neither a truth value nor an array of them is not
    judged."""
    if isinstance(condition, bool):
        return condition
    return bool(np.all(condition)) if isinstance(condition, np.bool_ | np.ndarray) else True


def polynomial_curve(coefficients: Sequence[Scalar]) -> CurveValues:
    """y = a1 x + a2 x^2 + ..."""
    return CurveValues(Kind.POLYNOMIAL, tuple(coefficients))


def points_curve(pairs: Sequence[Scalar]) -> CurveValues:
    """Piecewise linear through (x0, y0), (x1, y1), ..., given in one row x0, y0, x1, y1, ...; extended by its end slopes.

    CircuitError `curve-points` unless there are two points or more with ascending x.
    """
    x, y = pairs[0::2], pairs[1::2]
    if len(x) < 2 or len(x) != len(y):
        raise CircuitError(
            "curve-points", f"a curve of points needs at least two points, this one has {len(y)}"
        )
    if not all(everywhere(a < b) for a, b in pairwise(x)):
        raise CircuitError(
            "curve-points", "the points of a curve must ascend in x", hint="sort them, drop doubles"
        )
    slopes = [(y[j + 1] - y[j]) / (x[j + 1] - x[j]) for j in range(len(x) - 1)]
    at_zero = y[0] - slopes[0] * x[0]
    bends: list[Scalar] = []
    for corner, before, after in zip(x[1:-1], slopes[:-1], slopes[1:], strict=True):
        # the ramp of this corner is nil at x0, so the value at 0 is what the ramp has gained there
        bends += [corner, after - before]
        at_zero = at_zero + (after - before) * np.maximum(-corner, 0.0)
    return CurveValues(Kind.POINTS, (at_zero, slopes[0], *bends))
