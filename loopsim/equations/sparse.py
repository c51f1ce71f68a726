"""The same system with sparse arrays, for circuits too big for dense ones.

Residual and Jacobian are those of `System`; the Jacobian's pattern is found once, so that a new one is a weighted sum of
numbers in a fixed order, and SuperLU (scipy.sparse.linalg.splu) factorises it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
import scipy.sparse
from numpy.typing import NDArray
from scipy.sparse.linalg import SuperLU, splu

from loopsim.circuit import Circuit
from loopsim.devices.phi import SLOPE, VALUE
from loopsim.equations.plan import plan
from loopsim.equations.slots import Layout
from loopsim.equations.system import System
from loopsim.errors import CircuitError

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]

# unknowns from which a Newton step with these arrays is faster than with dense ones: about 85 on a ladder, 130 on a square
# grid (tests/benchmarks/sparse_or_dense.py)
SPARSE_FROM = 120


@dataclass(frozen=True, eq=False)
class SparseSystem:
    """C x' + G x + B psi(W x + c, V x + d) = s with C, G (n, n), B (n, m), W, V (m, n) in compressed rows; one member, no batch.

    unknowns, kinds, parameters, owners, row_units, c, d, s, supply as in System.
    """

    unknowns: tuple[tuple[str, str], ...]
    C: scipy.sparse.csr_array
    G: scipy.sparse.csr_array
    B: scipy.sparse.csr_array
    W: scipy.sparse.csr_array
    V: scipy.sparse.csr_array
    c: Array
    d: Array
    s: Array
    supply: Array
    kinds: Index
    parameters: Array
    owners: tuple[str, ...] = ()
    row_units: tuple[str, ...] = ()

    @property
    def n(self) -> int:
        """Number of unknowns."""
        return len(self.unknowns)

    @property
    def m(self) -> int:
        """Number of nonlinear rows."""
        return len(self.kinds)

    @cached_property
    def groups(self) -> tuple[tuple[int, Index, Array], ...]:
        """Per kind present: (kind, its rows, its parameters with the parameter axis first: (p, rows))."""
        found = []
        for kind in np.unique(self.kinds):
            rows = np.flatnonzero(self.kinds == kind)
            found.append((int(kind), rows, np.moveaxis(self.parameters[rows, :], -1, 0)))
        return tuple(found)

    @cached_property
    def has_products(self) -> bool:
        """Whether any row is a product."""
        return self.V.nnz > 0 or bool(np.any(self.d != 1.0))

    def apply(self, table: Sequence[Any], w: Array) -> Array:
        """One of the tables VALUE, SLOPE applied to w: (m,)."""
        out = np.empty(w.shape)
        for kind, rows, p in self.groups:
            out[rows] = table[kind](w[rows], p)
        return out

    def residual(self, x: Array, s: Array | None = None) -> Array:
        """G x + B psi(x) - s: (n,); s: other sources than the DC ones."""
        psi = self.apply(VALUE, self.W @ x + self.c)
        if self.has_products:
            psi = psi * (self.V @ x + self.d)
        return np.asarray(self.G @ x + self.B @ psi - (self.s if s is None else s))

    @cached_property
    def pattern(self) -> Pattern:
        """Where the numbers of the Jacobian go."""
        return _pattern(self)

    def jacobian(self, x: Array) -> scipy.sparse.csc_array:
        """d residual / dx: (n, n), compressed columns."""
        w = self.W @ x + self.c
        slope = self.apply(SLOPE, w)
        if self.has_products:
            weights = np.concatenate([slope * (self.V @ x + self.d), self.apply(VALUE, w)])
        else:
            weights = slope
        p = self.pattern
        terms = np.concatenate([self.G.data, p.products * weights[p.rows]])
        data = np.bincount(p.places, weights=terms, minlength=len(p.indices))
        return scipy.sparse.csc_array((data, p.indices, p.indptr), shape=(self.n, self.n))

    def factor(self, x: Array) -> SuperLU:
        """Factors of the Jacobian at x, whose `solve` takes right-hand sides; RuntimeError from SuperLU where it is singular."""
        return splu(self.jacobian(x))


@dataclass(frozen=True, eq=False)
class Pattern:
    """indices, indptr: of the Jacobian in compressed columns; places: where each entry of G, then each product, is added;
    products: b * w for every pair of entries of B and W (then of B and V) that share a row k of psi; rows: that k (m + k for
    V)."""

    indices: Index
    indptr: Index
    places: Index
    products: Array
    rows: Index


def _pattern(system: SparseSystem) -> Pattern:
    G = system.G.tocoo()
    rows, columns = [G.row.astype(np.int64)], [G.col.astype(np.int64)]
    products, which = [], []
    B = system.B.tocsc()
    for shift, right in ((0, system.W), (system.m, system.V)):
        i, j, b, v, k = _pairs(B, right)
        rows.append(i)
        columns.append(j)
        products.append(b * v)
        which.append(k + shift)
    flat = np.concatenate(columns) * system.n + np.concatenate(rows)
    cells, places = np.unique(flat, return_inverse=True)
    counts = np.bincount(cells // max(system.n, 1), minlength=system.n)
    indptr = np.concatenate([[0], np.cumsum(counts)])
    return Pattern(
        cells % max(system.n, 1), indptr, places.ravel(), np.concatenate(products), np.concatenate(which)
    )


def _pairs(
    B: scipy.sparse.csc_array, right: scipy.sparse.csr_array
) -> tuple[Index, Index, Array, Array, Index]:
    """Every (i, j) with B[i, k] and right[k, j] present: i, j, the two numbers, and k."""
    left, other = np.diff(B.indptr).astype(np.int64), np.diff(right.indptr).astype(np.int64)
    count = left * other
    k = np.repeat(np.arange(len(count)), count)
    within = np.arange(int(count.sum())) - np.repeat(np.cumsum(count) - count, count)
    a = B.indptr[:-1][k] + within // np.maximum(other[k], 1)
    b = right.indptr[:-1][k] + within % np.maximum(other[k], 1)
    return B.indices[a].astype(np.int64), right.indices[b].astype(np.int64), B.data[a], right.data[b], k


def assemble_by_size(circuit: Circuit, settings: Mapping[str, Any] | None = None) -> System | SparseSystem:
    """One member of the system in the form that is faster for its size: sparse from SPARSE_FROM unknowns on."""
    if len(plan(circuit).unknowns) < SPARSE_FROM:
        return plan(circuit).assemble(settings or {})
    return assemble_sparse(circuit, settings)


def assemble_sparse(circuit: Circuit, settings: Mapping[str, Any] | None = None) -> SparseSystem:
    """As `assemble`, with sparse arrays and without a batch: CircuitError `setting-shape` for settings that are arrays."""
    laid_out = plan(circuit)
    vectors = {**laid_out.vectors, **laid_out.changed(settings or {})[0]}
    if any(vector.ndim > 1 for vector in vectors.values()):
        text = "sparse arrays hold one member, the settings give a batch"
        raise CircuitError("setting-shape", text, hint="set them one by one")

    def matrix(name: str) -> scipy.sparse.csr_array:
        layout: Layout = laid_out.layouts[name]
        kept = layout.positions >= 0
        height, width = layout.shape
        rows, columns = np.divmod(layout.positions[kept], max(width, 1))
        numbers: Array = vectors[name][kept]
        found = scipy.sparse.csr_array((numbers, (rows, columns)), shape=(height, width))
        found.sum_duplicates()
        return found

    return SparseSystem(
        unknowns=laid_out.unknowns,
        C=matrix("C"),
        G=matrix("G"),
        B=matrix("B"),
        W=matrix("W"),
        V=matrix("V"),
        c=laid_out.layouts["c"].gather(vectors["c"]),
        d=laid_out.layouts["d"].gather(vectors["d"]),
        s=laid_out.layouts["s"].gather(vectors["s"]),
        supply=laid_out.layouts["supply"].gather(vectors["supply"]),
        kinds=laid_out.kinds,
        parameters=laid_out.layouts["parameters"].gather(vectors["parameters"]),
        owners=laid_out.owners,
        row_units=laid_out.row_units,
    )
