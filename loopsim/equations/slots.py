"""Slots: each array of a system is a sum of slots, slot j holding one value of one part that belongs to one position.

`places_of` and `slots_of` go through a contribution in the same order.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.devices.contribution import Contribution, Symbol
from loopsim.devices.fields import Scalar

Array: TypeAlias = NDArray[np.float64]
Values: TypeAlias = dict[str, list[Scalar]]

ARRAYS = ("C", "G", "B", "W", "c", "V", "d", "s", "supply", "parameters")


@dataclass(frozen=True, eq=False)
class Layout:
    """Where the slots of one array stand. positions: (slots,) flat, -1 for gnd; order, starts, targets: how they are summed;
    spans: per part plan, its first and last slot."""

    shape: tuple[int, ...]
    positions: NDArray[np.int64]
    order: NDArray[np.int64]
    starts: NDArray[np.int64]
    targets: NDArray[np.int64]
    spans: tuple[tuple[int, int], ...]

    def gather(self, values: Array) -> Array:
        """(..., slots) to the array (..., *shape). One rule of summation whatever the batch, so that a batch equals its
        members."""
        out = np.zeros((*values.shape[:-1], int(np.prod(self.shape, dtype=np.int64))))
        if len(self.starts):
            out[..., self.targets] = np.add.reduceat(values[..., self.order], self.starts, axis=-1)
        return out.reshape(*values.shape[:-1], *self.shape)


def layout_of(shape: tuple[int, ...], blocks: Sequence[Sequence[int]]) -> Layout:
    positions = np.array([p for block in blocks for p in block], dtype=np.int64)
    ends = np.cumsum([0, *(len(block) for block in blocks)])
    order = np.argsort(positions, kind="stable")
    order = order[np.count_nonzero(positions < 0) :]
    targets, starts = np.unique(positions[order], return_index=True)
    spans = tuple((int(a), int(b)) for a, b in pairwise(ends))
    return Layout(shape, positions, order, starts, targets, spans)


def places_of(
    given: Contribution, at: Callable[[Symbol], int], rows: Sequence[int], size: tuple[int, int, int]
) -> dict[str, list[int]]:
    """The flat position of every slot of a part, -1 for gnd.

    at: position of a symbol's unknown, -1 for gnd; rows: the part's rows of the nonlinear vector; size: n, m and the widest
    parameters.
    """
    n, m, width = size

    def cell(row: int, column: int, columns: int) -> int:
        return -1 if row < 0 or column < 0 else row * columns + column

    found: dict[str, list[int]] = {name: [] for name in ARRAYS}
    found["G"] = [cell(at(row), at(column), n) for row, column, _ in given.conductance]
    found["C"] = [cell(at(row), at(column), n) for row, column, _ in given.capacitance]
    found["supply"] = [at(row) for row, _ in given.supply]
    found["s"] = [at(row) for row, _ in given.source] + found["supply"]
    for k, term in zip(rows, given.terms, strict=True):
        found["W"] += [cell(k, at(symbol), n) for symbol, _ in term.control]
        found["V"] += [cell(k, at(symbol), n) for symbol, _ in term.factor]
        found["B"] += [cell(at(symbol), k, m) for symbol, _ in term.outputs]
        found["c"].append(k)
        found["d"].append(k)
        found["parameters"] += [k * width + j for j in range(len(term.parameters))]
    return found


def slots_of(given: Contribution) -> Values:
    """The value of every slot of a part."""
    supply = [value for _, value in given.supply]
    terms = given.terms
    return {
        "G": [value for _, _, value in given.conductance],
        "C": [value for _, _, value in given.capacitance],
        "supply": supply,
        "s": [value for _, value in given.source] + supply,
        "W": [value for term in terms for _, value in term.control],
        "V": [value for term in terms for _, value in term.factor],
        "B": [value for term in terms for _, value in term.outputs],
        "c": [term.offset for term in terms],
        "d": [term.factor_offset for term in terms],
        "parameters": [value for term in terms for value in term.parameters],
    }


def same(new: list[Scalar], old: list[Scalar]) -> bool:
    return not any(isinstance(value, np.ndarray) for value in new) and new == old


def filled(nominal: Array, entries: Sequence[tuple[int, int, list[Scalar]]]) -> Array:
    """The nominal slots with some stretches replaced; (batch, slots) where any new value is an array."""
    length = next(
        (len(v) for _, _, block in entries for v in block if isinstance(v, np.ndarray) and v.ndim), None
    )
    if length is None:
        vector = nominal.copy()
        for start, stop, block in entries:
            vector[start:stop] = block
        return vector
    vector = np.tile(nominal, (length, 1))
    for start, _, block in entries:
        for j, value in enumerate(block):
            vector[:, start + j] = value
    return vector


def read_only(array: Array) -> Array:
    array.flags.writeable = False  # systems share it
    return array
