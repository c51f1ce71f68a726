"""A system written in the arguments of its nonlinear rows alone: as many unknowns as rows, however many nets.

With psi_k = phi_k(w_k) u_k - a_k w_k for a fixed a, the linear rest is solved once: x = Z (s - B (a c)) - Z B psi,
Z = (G + B diag(a) W)^-1, and y = (w, u of the product rows) obeys y = p + l q - K psi(y).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.devices.phi import CURVATURE, SLOPE, VALUE
from loopsim.equations.system import System

Array: TypeAlias = NDArray[np.float64]

TRIED = 40  # choices of a; near a fold the slopes themselves leave nearly singular equations, so each row's is chosen apart
CHOICES = (0.0, 0.0, 1.0, 3.0)  # times a row's own slope, or a share of the largest where it has hardly any


@dataclass(frozen=True, eq=False)
class Condensed:
    """F(y, l) = y - p - l q + K psi(y) for a batch (numerics.fold_batch.FoldEquations). K: (b, k, m); p, q: (b, k), k = m + products;
    x = x0 + l x1 - X psi: (b, n), (b, n), (b, n, m). products: (r,) rows with a factor; shift: (m,)."""

    system: System
    shift: Array
    products: NDArray[np.int64]
    K: Array
    p: Array
    q: Array
    x0: Array
    x1: Array
    X: Array

    def _parts(self, y: Array) -> tuple[Array, Array]:
        """w and u of every row: (b, m)."""
        m = self.system.m
        u = np.ones((len(y), m))
        u[:, self.products] = y[:, m:]
        return y[:, :m], u

    def _psi(self, y: Array) -> Array:
        w, u = self._parts(y)
        return self.system.apply(VALUE, w) * u - self.shift * w

    def residual(self, y: Array, level: Array) -> Array:
        return y - self.p - level[:, None] * self.q + (self.K @ self._psi(y)[..., None])[..., 0]

    def jacobian(self, y: Array, level: Array) -> Array:
        w, u = self._parts(y)
        m, r = self.system.m, self.products
        by_w = self.system.apply(SLOPE, w) * u - self.shift
        found = np.empty((len(y), y.shape[1], y.shape[1]))
        found[:, :, :m] = self.K * by_w[:, None, :]
        if len(r):
            found[:, :, m:] = self.K[:, :, r] * self.system.apply(VALUE, w)[:, None, r]
        return found + np.eye(y.shape[1])

    def slope(self, y: Array, level: Array) -> Array:
        return -self.q

    def bend(self, y: Array, level: Array, u: Array, v: Array) -> Array:
        """u^T d(J v)/dy."""
        w, factor = self._parts(y)
        m, r = self.system.m, self.products
        weight = (u[:, None, :] @ self.K)[:, 0]
        found = np.zeros_like(y)
        found[:, :m] = weight * self.system.apply(CURVATURE, w) * factor * v[:, :m]
        if len(r):
            slope = self.system.apply(SLOPE, w)[:, r]
            found[:, r] += weight[:, r] * slope * v[:, m:]
            found[:, m:] = weight[:, r] * slope * v[:, r]
        return found

    def level_bend(self, y: Array, level: Array, u: Array, v: Array) -> Array:
        return np.zeros(len(y))

    def states(self, y: Array, level: Array) -> Array:
        """x: (b, n)."""
        return self.x0 + level[:, None] * self.x1 - (self.X @ self._psi(y)[..., None])[..., 0]


def arguments(system: System, x: Array) -> Array:
    """y at x: (m + products,), or (b, ...) for a batch."""
    return np.concatenate([system.control(x), system.factor(x)[..., _products(system)]], axis=-1)


def _products(system: System) -> NDArray[np.int64]:
    plain = np.all(system.V == 0.0, axis=-1) & (system.d == 1.0)
    return np.flatnonzero(~(plain if plain.ndim == 1 else plain.all(axis=0)))


def good_shift(system: System, x: Array) -> Array:
    """(m,) a for which the linear rest is solved well. x: (n,) where slopes are taken; of a batch the first row is looked at."""
    slopes = system.apply(SLOPE, np.atleast_2d(system.control(x)))[0] * np.atleast_2d(system.factor(x))[0]
    return min(_shifts(slopes), key=lambda a: _condition(system, a))


def condense(system: System, rise: Array, shift: Array, batch: int) -> Condensed:
    """system: s as of level 0, any of its arrays with a batch axis; rise: (n,) or (b, n) ds/dlevel; shift: (m,), of `good_shift`."""
    matrix = system.G + system.B @ (shift[:, None] * system.W)
    products = _products(system)
    n = system.n
    sources = system.s - (system.B @ (shift * system.c)[..., None])[..., 0]
    right = np.concatenate(
        [np.broadcast_to(system.B, (batch, n, system.m)), *(np.broadcast_to(a, (batch, n))[..., None] for a in (sources, rise))], axis=2
    )
    solved = np.linalg.solve(np.broadcast_to(matrix, (batch, n, n)), right)
    rows = np.concatenate([system.W, system.V[..., products, :]], axis=-2)
    constant = np.concatenate([system.c, system.d[..., products]], axis=-1)
    y = np.broadcast_to(rows, (batch, *rows.shape[-2:])) @ solved
    m = system.m
    return Condensed(
        system, shift, products, y[..., :m], y[..., m] + constant, y[..., m + 1], solved[..., m], solved[..., m + 1], solved[..., :m]
    )


def _shifts(slopes: Array) -> list[Array]:
    """Values of a to choose from: none at all, then seeded mixtures."""
    random = np.random.default_rng(0)
    size = np.maximum(np.abs(slopes), 1e-3 * np.max(np.abs(slopes), initial=0.0))
    return [np.zeros_like(slopes), *(size * random.choice(CHOICES, len(slopes)) for _ in range(TRIED))]


def _condition(system: System, shift: Array) -> float:
    """Condition of the linear rest for one of the batch, rows brought to one size first."""
    matrix = system.G + system.B @ (shift[:, None] * system.W)
    one = matrix if matrix.ndim == 2 else matrix[0]
    size = np.max(np.abs(one), axis=1, keepdims=True)
    return float(np.linalg.cond(one / np.where(size > 0.0, size, 1.0)))


__all__ = ["Condensed", "arguments", "condense", "good_shift"]
