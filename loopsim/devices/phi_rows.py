"""All nonlinear rows of a system at once: the per-kind enclosures applied to arrays of shape (..., m)."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.devices import phi_enclosure
from loopsim.devices.phi import SLOPE, VALUE, Kind

Array: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class PhiRows:
    """kinds: (m,); parameters: (m, p). Rows may be picked with repetition by `take`."""

    kinds: NDArray[np.int64]
    parameters: Array

    @cached_property
    def groups(self) -> tuple[tuple[int, Any, Array], ...]:
        """(kind, rows, parameters with their axis first); rows is a slice where those of a kind stand side by side."""
        present = np.unique(self.kinds)
        found = []
        for kind in present:
            rows = np.flatnonzero(self.kinds == kind)
            parameters = np.moveaxis(self.parameters[rows], -1, 0)
            together = rows[-1] - rows[0] == len(rows) - 1
            found.append((int(kind), slice(int(rows[0]), int(rows[-1]) + 1) if together else rows, parameters))
        return tuple(found)

    @cached_property
    def steep(self) -> NDArray[np.bool_]:
        """(m,) rows that grow exponentially with their argument."""
        return np.asarray(self.kinds == Kind.EXPONENTIAL)

    def take(self, rows: NDArray[np.int64]) -> PhiRows:
        """The same functions at other positions; rows: (k,) indices."""
        return PhiRows(self.kinds[rows], self.parameters[rows])

    def _apply(self, function: Callable[..., Any], parts: int, *arguments: Array) -> tuple[Array, ...]:
        if len(self.groups) == 1:
            kind, _, p = self.groups[0]
            answer = function(kind, *arguments, p)
            return answer if parts > 1 else (answer,)
        out = tuple(np.empty(arguments[0].shape) for _ in range(parts))
        for kind, rows, p in self.groups:
            answer = function(kind, *(a[..., rows] for a in arguments), p)
            for target, part in zip(out, answer if parts > 1 else (answer,), strict=True):
                target[..., rows] = part
        return out

    def value(self, w: Array) -> Array:
        """phi(w)."""
        return self._apply(lambda kind, w, p: VALUE[kind](w, p), 1, w)[0]

    def slope(self, w: Array) -> Array:
        """phi'(w)."""
        return self._apply(lambda kind, w, p: SLOPE[kind](w, p), 1, w)[0]

    def bounds(self, low: Array, high: Array) -> tuple[Array, Array]:
        """Range over [low, high]."""
        lower, upper = self._apply(phi_enclosure.bounds, 2, low, high)
        return lower, upper

    def slope_bounds(self, low: Array, high: Array) -> tuple[Array, Array]:
        """Range of the slope over [low, high]."""
        lower, upper = self._apply(phi_enclosure.slope_bounds, 2, low, high)
        return lower, upper

    def chord(self, low: Array, high: Array) -> tuple[Array, Array, Array]:
        """(a, e_low, e_high) with phi(w) - a w in [e_low, e_high] over [low, high]."""
        a, lower, upper = self._apply(phi_enclosure.chord, 3, low, high)
        return a, lower, upper

    def inverse(self, low: Array, high: Array, y_low: Array, y_high: Array) -> tuple[Array, Array]:
        """Part of [low, high] where phi can lie in [y_low, y_high]."""
        lower, upper = self._apply(phi_enclosure.inverse, 2, low, high, y_low, y_high)
        return lower, upper

    def split_points(self, low: Array, high: Array) -> Array:
        """Where the chord error is largest: the point whose tangent runs parallel to the chord, nearest the middle; else the middle."""

        def points(kind: int, low: Array, high: Array, p: Any) -> Array:
            middle = 0.5 * low + 0.5 * high
            width = high - low
            rise = VALUE[kind](high, p) - VALUE[kind](low, p)
            a = rise / np.where(width > 0.0, width, 1.0)
            best = middle
            gap = np.full(low.shape, np.inf)
            for t in phi_enclosure.stationary(kind, a, low, high, p):
                here = np.abs(t - middle)
                inside = (
                    (t > low) & (t < high) & (np.minimum(t - low, high - t) > 1e-3 * np.minimum(width, 1.0))
                )
                take = inside & (here < gap)
                best, gap = np.where(take, t, best), np.where(take, here, gap)
            return np.asarray(best)

        return self._apply(points, 1, low, high)[0]


def rows_of(kinds: NDArray[np.int64], parameters: Array) -> PhiRows:
    """PhiRows with the parameters widened to at least one column, so that kinds without any index cleanly."""
    if parameters.shape[-1] == 0:
        parameters = np.zeros((*parameters.shape[:-1], 1))
    return PhiRows(np.asarray(kinds, dtype=np.int64), np.asarray(parameters, dtype=float))


__all__ = ["Kind", "PhiRows", "rows_of"]
