"""The equations of one search, G x + B psi(x) = s with psi_k = phi_k(w_k) u_k, w = W x + c, u = V x + d, and
what is worked out from them once."""

from __future__ import annotations

from copy import copy
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.balances import NodalTable, nodal_table
from loopsim.numerics.enclosure import UNIT, middle, radius
from loopsim.numerics.linear_rows import LinearTable, differences, linear_table

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]


class Rows(Protocol):
    """The scalar functions of all rows (loopsim.devices.phi_rows.PhiRows)."""

    @property
    def steep(self) -> NDArray[np.bool_]: ...
    def take(self, rows: Index) -> Rows: ...
    def value(self, w: Array) -> Array: ...
    def slope(self, w: Array) -> Array: ...
    def bounds(self, low: Array, high: Array) -> tuple[Array, Array]: ...
    def slope_bounds(self, low: Array, high: Array) -> tuple[Array, Array]: ...
    def chord(self, low: Array, high: Array) -> tuple[Array, Array, Array]: ...
    def inverse(self, low: Array, high: Array, y_low: Array, y_high: Array) -> tuple[Array, Array]: ...
    def split_points(self, low: Array, high: Array) -> Array: ...


@dataclass(frozen=True, slots=True)
class Layout:
    """Column ranges of a box."""

    x: slice
    w: slice
    p: slice
    u: slice
    f: slice


@dataclass(frozen=True, eq=False)
class Problem:
    """The equations of one search. Row i should be the one that unknown i answers for (a matching), which the nodal contraction uses.

    G: (n, n); B: (n, m); W, V: (m, n); c_low .. d_high: (m,); s_low, s_high: (n,). Coefficients are exact as given.
    """

    G: Array
    B: Array
    W: Array
    V: Array
    rows: Rows
    c_low: Array
    c_high: Array
    d_low: Array
    d_high: Array
    s_low: Array
    s_high: Array

    @property
    def n(self) -> int:
        return int(self.G.shape[0])

    @property
    def m(self) -> int:
        return int(self.B.shape[1])

    @cached_property
    def product(self) -> Index:
        """Rows whose factor u is not simply 1."""
        if self.m == 0:
            return np.zeros(0, dtype=np.int64)
        plain = ~np.any(self.V != 0.0, axis=1) & (self.d_low == 1.0) & (self.d_high == 1.0)
        return np.flatnonzero(~plain)

    @cached_property
    def passive(self) -> tuple[float, Array] | None:
        """(least, losses (m,)): the symmetric part of every J = G + B diag(a) W with slopes a >= 0 is at least `least` - sum a losses; None
        where that is of no use.

        True of rising two-terminal elements in a linear network that only takes power (R. J. Duffin 1947; I. W. Sandberg, A. N. Willson
        1969, from memory): B_k is then d_k W_k, and what rounding left of the difference is the loss.
        """
        if self.m == 0 or len(self.product):
            return None
        symmetric = 0.5 * (self.G + self.G.T)
        least = float(np.linalg.eigvalsh(symmetric)[0]) - 16.0 * self.n * UNIT * float(np.linalg.norm(self.G))
        size = np.sum(self.W * self.W, axis=1)
        d = np.sum(self.B.T * self.W, axis=1) / np.where(size > 0.0, size, 1.0)
        if least <= 0.0 or np.any(d < 0.0) or np.any((size == 0.0) & np.any(self.B != 0.0, axis=0)):
            return None
        line = d[:, None] * self.W
        rest = np.linalg.norm(self.B.T - line, axis=1) + 4.0 * UNIT * (
            np.linalg.norm(self.B, axis=0) + np.linalg.norm(line, axis=1)
        )
        return least * (1.0 - 1e-9), rest * np.sqrt(size) * (1.0 + 1e-9)

    @cached_property
    def layout(self) -> Layout:
        """Where each quantity stands in a box."""
        n, m, q = self.n, self.m, len(self.product)
        ends = np.cumsum([0, n, m, m, q, q]).tolist()
        return Layout(*(slice(a, b) for a, b in pairwise(ends)))

    @cached_property
    def centres(self) -> tuple[Array, Array, Array, Array, Array, Array]:
        """c, d, s as centre and radius."""
        found = []
        for low, high in ((self.c_low, self.c_high), (self.d_low, self.d_high), (self.s_low, self.s_high)):
            centre = middle(low, high)
            found += [centre, np.where(low == high, 0.0, radius(low, high, centre))]
        return tuple(found)  # type: ignore[return-value]

    def with_sources(self, s: Array, s_rad: Array) -> Problem:
        """The same equations with centre and radius of s given box by box, (b, n) each, for `relax`, `newton_points` and `certify`; what
        was worked out for the equations is shared. `hull` and `nodal` go on using s_low and s_high, which have to hold every box's s."""
        other = copy(self)
        other.__dict__["centres"] = (*self.centres[:4], s, s_rad)
        return other

    @cached_property
    def magnitudes(self) -> tuple[Array, Array, Array, Array]:
        """|G|, |B|, |W|, |V|."""
        return np.abs(self.G), np.abs(self.B), np.abs(self.W), np.abs(self.V)

    @cached_property
    def table(self) -> LinearTable:
        """The linear rows G x + B psi = s, W x - w = -c, V x - u = -d over the variables (x, w, psi, u)."""
        n, m, q = self.n, self.m, len(self.product)
        total = n + 2 * m + q
        top = np.zeros((n, total))
        top[:, :n], top[:, n + m : n + 2 * m] = self.G, self.B
        mid = np.zeros((m, total))
        mid[:, :n], mid[:, n : n + m] = self.W, -np.eye(m)
        end = np.zeros((q, total))
        end[:, :n], end[:, n + 2 * m :] = self.V[self.product], -np.eye(q)
        extra, extra_low, extra_high = differences(top, self.s_low, self.s_high, n)
        low = np.concatenate([self.s_low, -self.c_high, -self.d_high[self.product], extra_low])
        high = np.concatenate([self.s_high, -self.c_low, -self.d_low[self.product], extra_high])
        return linear_table(np.concatenate([top, mid, end, extra]), low, high)

    @cached_property
    def nodal(self) -> NodalTable | None:
        """What the nodal contraction needs, None where no unknown enters its own row both ways."""
        return nodal_table(self)
