"""A stand-in for a number that remembers which named quantities moved it, and whether in a straight line."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.lib.mixins import NDArrayOperatorsMixin

AFFINE, OTHER = 1, 2


class Traced(NDArrayOperatorsMixin):
    """degrees: name to AFFINE or OTHER. Arithmetic and NumPy's element-wise functions of it give another one."""

    def __init__(self, degrees: Mapping[str, int]) -> None:
        self.degrees = dict(degrees)

    def __array_ufunc__(self, ufunc: Any, method: str, *inputs: Any, **options: Any) -> Traced:
        given = [entry.degrees if isinstance(entry, Traced) else {} for entry in inputs]
        if ufunc in (np.add, np.subtract, np.negative, np.positive):
            return Traced(_merged(given))
        if ufunc is np.multiply:
            both = given[0].keys() & given[1].keys()
            return Traced({**_merged(given), **dict.fromkeys(both, OTHER)})
        if ufunc is np.true_divide:
            return Traced({**given[0], **dict.fromkeys(given[1], OTHER)})
        return Traced(dict.fromkeys(_merged(given), OTHER))


def _merged(given: list[dict[str, int]]) -> dict[str, int]:
    merged: dict[str, int] = {}
    for degrees in given:
        for name, degree in degrees.items():
            merged[name] = max(degree, merged.get(name, 0))
    return merged


def degrees_of(value: Any) -> dict[str, int]:
    """What moves a value: nothing, unless it is a Traced."""
    return value.degrees if isinstance(value, Traced) else {}
