"""The one form that every analysis reads: C x' + G x + B psi(x) = s(t), psi_k = phi_k(w_k) u_k, w = W x + c, u = V x + d.

u is 1 where a row is no product (V row 0, d = 1). A leading batch axis on any array costs nothing: all methods broadcast.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopsim.devices.phi import CURVATURE, SLOPE, VALUE

Array: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class TimedSource:
    """One waveform and where it enters: s(t) = s + column * (waveform(t) - waveform(0)). column: (n,).

    waveform: an object with `value(t) -> float` and `corners(start, end) -> list of times` (loopsim.devices.sources).
    """

    column: Array
    waveform: Any


@dataclass(frozen=True, eq=False)
class System:
    """Arrays of one circuit (or of a batch of it: a leading axis on any of them).

    unknowns: what each x is: ("net", name) [V], ("current", part) [A, through the part along its chain], or
    ("internal", "part.what"). C, G: (..., n, n); B: (..., n, m); W: (..., m, n); c: (..., m); V: (..., m, n); d: (..., m).
    s: (..., n), everything at DC; supply: (..., n), the share of s that independent sources put in (what a ramp scales).
    kinds: (m,) of loopsim.devices.phi.Kind; parameters: (..., m, p). owners: (m,) part name of each row.
    timed: sources in time. row_units: (n,) "A" for current balances, "V" for branch laws, "1" otherwise.
    """

    unknowns: tuple[tuple[str, str], ...]
    C: Array
    G: Array
    B: Array
    W: Array
    c: Array
    V: Array
    d: Array
    s: Array
    supply: Array
    kinds: NDArray[np.int64]
    parameters: Array
    owners: tuple[str, ...] = ()
    timed: tuple[TimedSource, ...] = ()
    row_units: tuple[str, ...] = field(default=())

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return len(self.unknowns)

    @property
    def m(self) -> int:
        """Number of nonlinear rows."""
        return len(self.kinds)

    @cached_property
    def groups(self) -> tuple[tuple[int, NDArray[np.int64], Array], ...]:
        """Per kind present: (kind, its rows, its parameters with the parameter axis first: (p, ..., rows))."""
        found = []
        for kind in np.unique(self.kinds):
            rows = np.flatnonzero(self.kinds == kind)
            found.append((int(kind), rows, np.moveaxis(self.parameters[..., rows, :], -1, 0)))
        return tuple(found)

    @cached_property
    def has_products(self) -> bool:
        """Whether any row is a product."""
        return bool(np.any(self.V != 0.0) or np.any(self.d != 1.0))

    @cached_property
    def index(self) -> dict[tuple[str, str], int]:
        """Position of each unknown in x."""
        return {unknown: i for i, unknown in enumerate(self.unknowns)}

    def apply(self, table: tuple[Any, ...], w: Array) -> Array:
        """One of the tables VALUE, SLOPE, CURVATURE applied to w: (..., m)."""
        if len(self.groups) == 1:
            kind, _, p = self.groups[0]
            return np.asarray(table[kind](w, p))
        out = np.empty(w.shape)
        for kind, rows, p in self.groups:
            out[..., rows] = table[kind](w[..., rows], p)
        return out

    def control(self, x: Array) -> Array:
        """w = W x + c: (..., m)."""
        return (self.W @ x[..., None])[..., 0] + self.c

    def factor(self, x: Array) -> Array:
        """u = V x + d: (..., m)."""
        return (self.V @ x[..., None])[..., 0] + self.d

    def residual(self, x: Array, s: Array | None = None) -> Array:
        """G x + B psi(x) - s: (..., n); s: other sources than the DC ones."""
        psi = self.apply(VALUE, self.control(x))
        if self.has_products:
            psi = psi * self.factor(x)
        return (self.G @ x[..., None] + self.B @ psi[..., None])[..., 0] - (self.s if s is None else s)

    def jacobian(self, x: Array) -> Array:
        """d residual / dx: (..., n, n)."""
        w = self.control(x)
        slope = self.apply(SLOPE, w)
        if self.has_products:
            value = self.apply(VALUE, w)
            return self.G + self.B @ (
                (slope * self.factor(x))[..., None] * self.W + value[..., None] * self.V
            )
        return self.G + self.B @ (slope[..., None] * self.W)

    def second_directional(self, x: Array, v: Array) -> Array:
        """(d J / dx . v) v: (..., n), the second derivative of the residual along v, for fold tests."""
        w = self.control(x)
        dw = (self.W @ v[..., None])[..., 0]
        bend = self.apply(CURVATURE, w) * dw * dw
        if self.has_products:
            bend = bend * self.factor(x) + 2.0 * self.apply(SLOPE, w) * dw * (self.V @ v[..., None])[..., 0]
        return (self.B @ bend[..., None])[..., 0]

    def bend(self, x: Array, v: Array) -> Array:
        """d (J v) / dx: (..., n, n), for Newton on fold equations."""
        w = self.control(x)
        dw = (self.W @ v[..., None])[..., 0]
        curvature = self.apply(CURVATURE, w) * dw
        if not self.has_products:
            return self.B @ (curvature[..., None] * self.W)
        du = (self.V @ v[..., None])[..., 0]
        slope = self.apply(SLOPE, w)
        first = (curvature * self.factor(x) + slope * du)[..., None] * self.W
        return self.B @ (first + (slope * dw)[..., None] * self.V)

    def source(self, t: float) -> Array:
        """s(t): (..., n)."""
        s = self.s
        for timed in self.timed:
            s = s + timed.column * (timed.waveform.value(t) - timed.waveform.value(0.0))
        return s


def lurie(
    *,
    G: ArrayLike,
    s: ArrayLike | None = None,
    C: ArrayLike | None = None,
    B: ArrayLike | None = None,
    W: ArrayLike | None = None,
    c: ArrayLike | None = None,
    V: ArrayLike | None = None,
    d: ArrayLike | None = None,
    kinds: ArrayLike = (),
    parameters: ArrayLike | None = None,
    names: Sequence[str] = (),
    supply: ArrayLike | None = None,
) -> System:
    """A System from bare arrays, for problems that are published as equations: C x' + G x + B (phi(W x + c) (V x + d)) = s.

    G: (..., n, n); kinds: (m,), one of `loopsim.devices.phi.Kind` each. What is left out is zero, d is one, W and B are the
    identity where m = n, supply is s. names: of the unknowns, as nets; x1, x2, ... without. ValueError where shapes do not meet.
    """
    conductances = np.asarray(G, dtype=float)
    n = conductances.shape[-1]
    rows = np.atleast_1d(np.asarray(kinds, dtype=np.int64))
    m = len(rows)

    def filled(given: ArrayLike | None, shape: tuple[int, ...], otherwise: Array) -> Array:
        found = otherwise if given is None else np.asarray(given, dtype=float)
        if found.shape[-len(shape) :] != shape:
            raise ValueError(f"an array of shape {found.shape} stands where {shape} is wanted")
        return found

    square = np.eye(n) if m == n else np.zeros((n, m))
    numbers = np.zeros((m, 0)) if parameters is None else np.asarray(parameters, dtype=float)
    put_in = filled(s, (n,), np.zeros(n))
    return System(
        unknowns=tuple(("net", name) for name in (names or [f"x{i + 1}" for i in range(n)])),
        C=filled(C, (n, n), np.zeros((n, n))),
        G=filled(conductances, (n, n), conductances),
        B=filled(B, (n, m), square),
        W=filled(W, (m, n), square.T),
        c=filled(c, (m,), np.zeros(m)),
        V=filled(V, (m, n), np.zeros((m, n))),
        d=filled(d, (m,), np.ones(m)),
        s=put_in,
        supply=filled(supply, (n,), put_in),
        kinds=rows,
        parameters=filled(numbers, (m, numbers.shape[-1]), numbers),
        owners=tuple(f"row{k + 1}" for k in range(m)),
        row_units=("1",) * n,
    )
