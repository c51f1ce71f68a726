"""Systems given as arrays, and every solution of one: for problems whose published form is a set of equations, not a circuit.

A row of the nonlinear part is (kind, parameters, {unknown: coefficient} or a W row, offset c, B column)."""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from loopsim.analyses.points import all_points
from loopsim.devices.phi import Kind
from loopsim.equations.system import System


@dataclass(frozen=True, eq=False)
class Row:
    """One scalar nonlinearity: adds column * phi(line . x + offset) to the equations. line, column: (n,)."""

    kind: Kind
    line: Any
    column: Any
    parameters: tuple[float, ...] = ()
    offset: float = 0.0


def unit(n: int, j: int, value: float = 1.0) -> np.ndarray:
    """value at position j of n zeros."""
    found = np.zeros(n)
    found[j] = value
    return found


def system_of(G: Any, s: Any, rows: Sequence[Row], C: Any = None) -> System:
    """The System G x + sum of rows = s, C x' on the left; C zero unless given. Unknowns are called x1, x2, ..."""
    G, s = np.asarray(G, dtype=float), np.asarray(s, dtype=float)
    n, m = len(s), len(rows)
    widest = max((len(row.parameters) for row in rows), default=0)
    parameters = np.zeros((m, max(1, widest)))
    for k, row in enumerate(rows):
        parameters[k, : len(row.parameters)] = row.parameters
    return System(
        unknowns=tuple(("net", f"x{j + 1}") for j in range(n)),
        C=np.zeros((n, n)) if C is None else np.asarray(C, dtype=float),
        G=G,
        B=np.array([row.column for row in rows], dtype=float).reshape(m, n).T,
        W=np.array([row.line for row in rows], dtype=float).reshape(m, n),
        c=np.array([row.offset for row in rows], dtype=float),
        V=np.zeros((m, n)),
        d=np.ones(m),
        s=s,
        supply=s.copy(),
        kinds=np.array([int(row.kind) for row in rows], dtype=np.int64),
        parameters=parameters,
        owners=tuple(f"row{k + 1}" for k in range(m)),
        row_units=("A",) * n,
    )


@dataclass(frozen=True, eq=False)
class Solutions:
    """x: (k, n) in ascending order of the first unknown; spread: half widths; complete; boxes; seconds."""

    x: np.ndarray
    spread: np.ndarray
    complete: bool
    boxes: int
    seconds: float


def solve(system: System, box: float = 1e3, budget: float = 60.0) -> Solutions:
    """Every solution with each unknown within +/- box, by the proof alone."""
    began = time.monotonic()
    found = all_points(system, box, began + budget)
    order = np.lexsort(found.x.T[::-1]) if len(found.x) else np.zeros(0, dtype=int)
    return Solutions(found.x[order], found.spread[order], found.complete, found.boxes, time.monotonic() - began)


def determinant_sign(system: System, x: np.ndarray) -> np.ndarray:
    """Sign of det J at each row of x: (k,)."""
    return np.array([np.linalg.slogdet(system.jacobian(point))[0] for point in x])


def assert_points(found: np.ndarray, expected: np.ndarray, tolerance: float) -> None:
    """Each expected point is found and nothing else: (k, n) both, in any order; tolerance relative to 1 + |x|."""
    assert found.shape == expected.shape, f"{len(found)} points, {len(expected)} expected"
    if not len(expected):
        return
    distance = np.max(np.abs(found[:, None] - expected[None]) / (1.0 + np.abs(expected[None])), axis=-1)
    assert np.all(distance.min(axis=0) < tolerance), "a point is missing"
    assert np.all(distance.min(axis=1) < tolerance), "a point is wrong"
