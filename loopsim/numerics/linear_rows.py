"""Linear equations as padded sparse rows, for hull consistency: each row to each variable in it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.numerics.enclosure import down, up

Array: TypeAlias = NDArray[np.float64]
Index: TypeAlias = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class LinearTable:
    """Sparse rows sum_k coefficient_k z[index_k] in [low, high], padded: index, coefficient: (r, k). places: (z, l) positions of each
    variable in the flattened (r * k) terms, padded with a position that never binds."""

    index: Index
    coefficient: Array
    low: Array
    high: Array
    places: Index
    exclude: Array
    right_size: Array


def linear_table(matrix: Array, low: Array, high: Array) -> LinearTable:
    """Padded form of dense rows; all-zero rows are dropped (they bind nothing here; the caller checks them)."""
    keep = np.any(matrix != 0.0, axis=1)
    matrix, low, high = matrix[keep], low[keep], high[keep]
    counts = np.count_nonzero(matrix, axis=1)
    width = max(1, int(counts.max(initial=1)))
    index = np.full(
        (len(matrix), width), matrix.shape[1], dtype=np.int64
    )  # one past the end: a constant zero
    coefficient = np.ones((len(matrix), width))
    where: list[list[int]] = [[] for _ in range(matrix.shape[1])]
    for r, row in enumerate(matrix):
        columns = np.flatnonzero(row)
        index[r, : len(columns)] = columns
        coefficient[r, : len(columns)] = row[columns]
        for k, column in enumerate(columns):
            where[column].append(r * width + k)
    length = max(1, max((len(w) for w in where), default=1))
    places = np.full((matrix.shape[1], length), len(matrix) * width, dtype=np.int64)
    for column, spots in enumerate(where):  # type: ignore[assignment]
        places[column, : len(spots)] = spots
    size = np.maximum(np.abs(low), np.abs(high))[:, None]
    return LinearTable(
        index, coefficient, low[:, None], high[:, None], places, np.ones((width, width)) - np.eye(width), size
    )


def differences(matrix: Array, low: Array, high: Array, n: int) -> tuple[Array, Array, Array]:
    """Redundant rows: where rows share a long part exactly (all of G, or all of B), their difference with the first of them is short and
    binds two unknowns directly. Only differences that are exact in floating point are taken. n: where B begins is matrix[:, n:]."""
    found, lows, highs = [], [], []
    for part in (slice(0, n), slice(n, matrix.shape[1])):
        groups: dict[bytes, int] = {}
        for i, row in enumerate(matrix):
            if np.count_nonzero(row[part]) < 3:
                continue
            first = groups.setdefault(row[part].tobytes(), i)
            if first == i:
                continue
            difference = row - matrix[first]
            exact = np.all((difference + matrix[first] == row) & (row - difference == matrix[first]))
            if exact and np.count_nonzero(difference) < np.count_nonzero(row):
                found.append(difference)
                lows.append(float(down(np.array(low[i] - high[first]))))
                highs.append(float(up(np.array(high[i] - low[first]))))
    if not found:
        return np.zeros((0, matrix.shape[1])), np.zeros(0), np.zeros(0)
    return np.stack(found), np.array(lows), np.array(highs)
