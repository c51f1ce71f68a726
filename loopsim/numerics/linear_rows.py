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
    """Sparse rows sum_j c_j z_j in [low, high], padded to k terms, over upper bounds alone: Z = (-z_low, z_high, 0) of a box.

    gather: (2, r, k) where in Z the upper bound of -c z, then of c z, is found; weight: (r, k) |c|; ends: (2, r, 1) upper bounds of c.z and
    of -c.z; places: (l, 2 z) positions in the flattened (2, r, k) answers that bound each entry of Z, padded with one past the end, which
    binds nothing; exclude: (k, k) ones beside the diagonal; size: (r, 1) of the ends; count: how many variables.
    """

    gather: Index
    weight: Array
    ends: Array
    places: Index
    exclude: Array
    size: Array
    count: int


def linear_table(matrix: Array, low: Array, high: Array) -> LinearTable:
    """Padded form of dense rows; all-zero rows are dropped (they bind nothing here; the caller checks them)."""
    keep = np.any(matrix != 0.0, axis=1)
    matrix, low, high = matrix[keep], low[keep], high[keep]
    r, n = matrix.shape
    width = max(1, int(np.count_nonzero(matrix, axis=1).max(initial=1)))
    gather = np.full((2, r, width), 2 * n, dtype=np.int64)  # a constant zero
    weight = np.ones((r, width))
    where: list[list[int]] = [[] for _ in range(2 * n)]
    for i, row in enumerate(matrix):
        for k, j in enumerate(np.flatnonzero(row).tolist()):
            weight[i, k] = abs(row[j])
            # the upper bound of c z is at z_high where c > 0, at z_low else
            above, below = (n + j, j) if row[j] > 0.0 else (j, n + j)
            gather[1, i, k], gather[0, i, k] = above, below
            # answer 0 bounds c z from above, answer 1 bounds -c z
            where[above].append(i * width + k)
            where[below].append((r + i) * width + k)
    length = max(1, max((len(w) for w in where), default=1))
    places = np.full((length, 2 * n), 2 * r * width, dtype=np.int64)
    for entry, spots in enumerate(where):
        places[: len(spots), entry] = spots
    size = np.maximum(np.abs(low), np.abs(high))[:, None]
    ends = np.stack([high, -low])[:, :, None]
    return LinearTable(gather, weight, ends, places, np.ones((width, width)) - np.eye(width), size, n)


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
