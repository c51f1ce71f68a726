"""Real roots of polynomials in extended precision: the independent count behind many tests."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import mpmath
import numpy as np


def value(coefficients: Sequence[Any], x: Any) -> Any:
    """a0 + a1 x + a2 x^2 + ... at x."""
    total = mpmath.mpf(0)
    for a in reversed(coefficients):
        total = total * x + a
    return total


def product(first: Sequence[Any], second: Sequence[Any]) -> list[Any]:
    """Coefficients, ascending, of the product of two polynomials."""
    found = [mpmath.mpf(0)] * (len(first) + len(second) - 1)
    for i, a in enumerate(first):
        for j, b in enumerate(second):
            found[i + j] += a * b
    return found


def real_roots(coefficients: Sequence[Any], digits: int = 60) -> list[Any]:
    """Real roots in ascending order; coefficients a0, a1, ...; simple roots only (a pair closer than 1e-20 raises)."""
    with mpmath.workdps(digits):
        given = [mpmath.mpf(a) for a in coefficients]
        while given and given[-1] == 0:
            given.pop()
        options: dict[str, Any] = {"maxsteps": 1000, "extraprec": 10 * digits}
        try:
            roots = mpmath.polyroots(given, asc=True, **options)
        except TypeError:  # an mpmath that knows one order only, the descending one
            roots = mpmath.polyroots(given[::-1], **options)
        real = sorted(mpmath.re(r) for r in roots if abs(mpmath.im(r)) < mpmath.mpf("1e-25") * (1 + abs(r)))
    if any(b - a < mpmath.mpf("1e-20") for a, b in pairwise(real)):
        raise AssertionError("roots that touch have no count")
    return real


def as_floats(values: Sequence[Any]) -> np.ndarray:
    """(k,) doubles."""
    return np.array([float(v) for v in values])
