"""Which unknowns can be found before which: the block triangular form of the equations.

Rows are matched to unknowns, an unknown then needs every unknown of its row; strongly connected groups are solved together, in topological
order (Dulmage, Mendelsohn 1958; Duff, Reid 1978, both from memory). Nothing numeric is decided here: an entry counts
as soon as it is not exactly zero.
"""

from __future__ import annotations

from dataclasses import dataclass
from heapq import heapify, heappop, heappush

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components, maximum_bipartite_matching

from loopsim.equations.system import System
from loopsim.errors import AnalysisError


@dataclass(frozen=True, eq=False)
class Block:
    """One group of unknowns solved together. unknowns, rows: matched positions; needs: earlier unknowns its rows hold;
    inner: nonlinear rows that move with its unknowns; outer: nonlinear rows in its equations that only earlier unknowns move."""

    unknowns: NDArray[np.int64]
    rows: NDArray[np.int64]
    needs: NDArray[np.int64]
    inner: NDArray[np.int64]
    outer: NDArray[np.int64]


def pattern(system: System) -> NDArray[np.bool_]:
    """(n, n) which unknown stands in which row, directly or through a nonlinear row."""
    through = (system.B != 0.0).astype(float) @ ((system.W != 0.0) | (system.V != 0.0)).astype(float)
    return np.asarray((system.G != 0.0) | (through > 0.0))


def groups(system: System, entries: NDArray[np.bool_]) -> list[tuple[NDArray[np.int64], NDArray[np.int64]]]:
    """(unknowns, rows that answer for them) in an order in which each needs only earlier ones, by `entries`: (n, n), which must hold the
    pattern of the DC equations. AnalysisError `singular` where no row answers for some unknown."""
    n = system.n
    always = pattern(system)
    match = (
        maximum_bipartite_matching(csr_array(always), perm_type="row")
        if n
        else np.zeros(0, dtype=np.int64)
    )
    if np.any(match < 0):
        lost = [f"{kind} {name}" for (kind, name), row in zip(system.unknowns, match, strict=True) if row < 0]
        raise AnalysisError(
            "singular",
            f"no equation determines {', '.join(lost)}",
            hint="look for a loop of sources or a floating net",
        )
    own = np.diag(always)
    # match[j]: the row that answers for unknown j; unknown j needs every unknown of that row
    count, labels = connected_components(csr_array(entries[match]), directed=True, connection="strong")  # type: ignore[arg-type]
    members: list[list[int]] = [[] for _ in range(count)]
    for j, label in enumerate(labels.tolist()):
        members[label].append(j)
    heads, tails = np.nonzero(entries[match])
    needs: list[set[int]] = [set() for _ in range(count)]
    serves: list[set[int]] = [set() for _ in range(count)]
    for head, tail in zip(labels[heads].tolist(), labels[tails].tolist(), strict=True):
        if head != tail:
            needs[head].add(tail)
            serves[tail].add(head)
    # smallest unknown first among the groups that are ready, so that the order follows the circuit's own
    ready = [(members[k][0], k) for k in range(count) if not needs[k]]
    heapify(ready)
    found = []
    while ready:
        _, k = heappop(ready)
        unknowns = np.array(members[k], dtype=np.int64)
        rows = match[unknowns].astype(np.int64)
        if np.array_equal(np.sort(rows), unknowns) and np.all(own[unknowns]):
            # the balances of the very nets: each answers for its own
            rows = unknowns
        found.append((unknowns, rows))
        for other in serves[k]:
            needs[other].discard(k)
            if not needs[other]:
                heappush(ready, (members[other][0], other))
    return found


def blocks(system: System) -> tuple[Block, ...]:
    """The groups in the order in which they can be solved at DC. AnalysisError `singular` where no row answers for some unknown."""
    entries = pattern(system)
    moves = (system.W != 0.0) | (system.V != 0.0)
    found = []
    for unknowns, rows in groups(system, entries):
        used = np.flatnonzero(np.any(system.B[rows] != 0.0, axis=0))
        moved = np.any(moves[np.ix_(used, unknowns)], axis=1)
        everything = np.flatnonzero(np.any(entries[rows], axis=0))
        found.append(Block(unknowns, rows, np.setdiff1d(everything, unknowns), used[moved], used[~moved]))
    return tuple(found)
