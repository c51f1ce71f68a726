"""A circuit with one of its lets left free: the equations F(x, let) = 0 and their derivatives.

A let that only moves sources in a straight line costs nothing per point: s follows from two assemblies. Any other is assembled where it is
asked for, and its derivative is a difference of residuals. It is assembled inside its range alone, because a duration or a resistance may
have no meaning beyond; a curve that is followed a step past an end meets the equations continued there in a straight line.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble, is_affine
from loopsim.equations.system import System

Array: TypeAlias = NDArray[np.float64]

DIFFERENCE = 6e-6  # of the range: cube root of the unit roundoff, where a central difference is most accurate


@dataclass(eq=False)
class Family:
    """circuit and settings with `let` free in [low, high] [its SI unit]. Serves as the `CurveEquations` of numerics.curve.

    affine: the let moves sources alone, s = base_sources + (level - low) rise, (n,) each; rise is 0 for any other let.
    """

    circuit: Circuit
    settings: Mapping[str, Any]
    let: str
    low: float
    high: float
    affine: bool = field(init=False)
    base_sources: Array = field(init=False)
    rise: Array = field(init=False)

    def __post_init__(self) -> None:
        self.affine = is_affine(self.circuit, self.let)
        self._kept: dict[float, System] = {}
        first = self._assembled(self.low)
        self._base = first
        self.base_sources = first.s
        self.rise = np.zeros_like(first.s)
        if self.affine:
            second = self._assembled(self.high)
            self.rise = (second.s - first.s) / (self.high - self.low)
            self._supply_rise = (second.supply - first.supply) / (self.high - self.low)

    def _assembled(self, level: float) -> System:
        return assemble(self.circuit, {**self.settings, self.let: float(level)})

    def _inside(self, level: float) -> float:
        return min(max(level, self.low), self.high)

    def _beside(self, level: float) -> tuple[float, float]:
        """Two values around one, both inside the range."""
        inside, h = self._inside(level), DIFFERENCE * (self.high - self.low)
        return max(inside - h, self.low), min(inside + h, self.high)

    def system(self, level: float) -> System:
        """The system at one value of the let."""
        kept = self._kept.get(level)
        if kept is None:
            if self.affine:
                shift = level - self.low
                kept = replace(
                    self._base,
                    s=self._base.s + shift * self.rise,
                    supply=self._base.supply + shift * self._supply_rise,
                )
            else:
                kept = self._assembled(self._inside(level))
            if len(self._kept) > 8:
                self._kept.clear()
            self._kept[level] = kept
        return kept

    def residual(self, x: Array, level: float) -> Array:
        """F: (n,)."""
        if self.affine:
            return self._base.residual(x, self._base.s + (level - self.low) * self.rise)
        inside = self._inside(level)
        found = self.system(inside).residual(x)
        return found if inside == level else found + (level - inside) * self.slope(x, inside)

    def jacobian(self, x: Array, level: float) -> Array:
        """dF/dx: (n, n)."""
        if self.affine:
            return self._base.jacobian(x)
        inside = self._inside(level)
        found = self.system(inside).jacobian(x)
        if inside == level:
            return found
        below, above = self._beside(inside)
        rise = (self._assembled(above).jacobian(x) - self._assembled(below).jacobian(x)) / (above - below)
        return found + (level - inside) * rise

    def slope(self, x: Array, level: float) -> Array:
        """dF/dlet: (n,)."""
        if self.affine:
            return -self.rise
        below, above = self._beside(level)
        return (self._assembled(above).residual(x) - self._assembled(below).residual(x)) / (above - below)

    def bend(self, x: Array, level: float, v: Array) -> Array:
        """d(J v)/dx: (n, n)."""
        return (self._base if self.affine else self.system(level)).bend(x, v)

    def slope_along(self, x: Array, level: float, v: Array) -> Array:
        """d(J v)/dlet: (n,)."""
        if self.affine:
            return np.zeros(len(x))
        below, above = self._beside(level)
        return (self._assembled(above).jacobian(x) @ v - self._assembled(below).jacobian(x) @ v) / (above - below)
