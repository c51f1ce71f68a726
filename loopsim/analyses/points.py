"""Every solution of a system's DC equations with proof, group by group of the block triangular form.

A group is searched once for each different choice of the earlier groups it needs, with the earlier unknowns as the intervals in which they
were certified; independent groups multiply only when the list is written out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.devices.phi import SLOPE, Kind
from loopsim.devices.phi_rows import rows_of
from loopsim.equations.between import Between, held_between
from loopsim.equations.ordering import Block, blocks
from loopsim.equations.system import System
from loopsim.errors import AnalysisError
from loopsim.numerics.enclosure import TINY, down, gamma, multiply, up
from loopsim.numerics.problem import Problem
from loopsim.numerics.prune import Found, search
from loopsim.numerics.relaxation import invert

Array: TypeAlias = NDArray[np.float64]

INNER_LIMIT = 1e15  # branch currents and inner quantities are searched within this [A or V], far above what any net within the box allows
MAX_POINTS = 100_000  # a longer list is of no use to anyone; its length is
PARITY_ROWS = 10  # 2^k corner determinants are compared for the parity check; beyond this it is left out
BOUNDED = frozenset({Kind.SATURATION, Kind.ARCTANGENT, Kind.RECIPROCAL})
GROWING = frozenset({Kind.EXPONENTIAL, Kind.SOFTPLUS, Kind.CHARGE_SHEET})


@dataclass(frozen=True, eq=False)
class Points:
    """x, spread: (k, n), one solution each within x +/- spread; undecided: boxes that could not be settled (clusters and unvisited);
    remainder: a line each on the first of them; groups: how many groups of unknowns were searched."""

    x: Array
    spread: Array
    undecided: int
    remainder: tuple[str, ...]
    boxes: int
    groups: int

    @property
    def complete(self) -> bool:
        """Every solution in the box is in the list."""
        return self.undecided == 0


def all_points(
    system: System,
    box: float,
    deadline: float = np.inf,
    source_radius: Array | None = None,
    max_boxes: int = 10_000_000,
) -> Points:
    """Every DC solution with all nets within +/- box [V]. deadline: time.monotonic() after which the rest is left undecided.

    Groups without a nonlinear row are solved directly, whatever the box. source_radius: (n,) half widths of intervals in which s may lie;
    then each x +/- spread holds exactly one solution for every s in them. max_boxes: boxes per group after which the rest is undecided.
    """
    order = blocks(system)
    n = system.n
    low = np.zeros((1, n))
    high = np.zeros((1, n))
    centre = np.zeros((1, n))
    choice = np.zeros((1, len(order)), dtype=np.int64)
    owner = np.empty(n, dtype=np.int64)
    for i, block in enumerate(order):
        owner[block.unknowns] = i
    between = [one for one in held_between(system) if source_radius is None or not np.any(source_radius[one.members])]
    seen: dict[bytes, Found] = {}
    undecided, boxes = 0, 0
    remainder: list[str] = []
    for i, block in enumerate(order):
        parents = np.unique(owner[block.needs])
        groups, member = np.unique(choice[:, parents], axis=0, return_inverse=True)
        member = member.reshape(-1)
        found: list[Found] = []
        for g in range(len(groups)):
            first = int(np.flatnonzero(member == g)[0])
            problem, rows = group_problem(system, block, low[first], high[first], source_radius)
            start = _start(system, block, box, between, owner < i, low[first], high[first])
            key = _key(problem, rows, start)
            if key not in seen:
                seen[key] = _solve(problem, rows, start, deadline, max_boxes)
                boxes += seen[key].boxes
            found.append(seen[key])
            if not seen[key].complete:
                undecided += len(seen[key].clusters) + len(seen[key].left)
                remainder += _describe(system, block, seen[key])
        counts = np.array([len(f.x) for f in found], dtype=np.int64)[member]
        if counts.sum() > MAX_POINTS:
            raise AnalysisError(
                "too-many-states",
                f"more than {MAX_POINTS} operating points",
                hint="split the circuit into its parts",
            )
        parent = np.repeat(np.arange(len(member)), counts)
        position = (
            np.concatenate([np.arange(c) for c in counts]) if len(counts) else np.zeros(0, dtype=np.int64)
        )
        low, high, centre, choice = low[parent], high[parent], centre[parent], choice[parent]
        group = member[parent]
        for g, f in enumerate(found):
            rows_of_group = np.flatnonzero(group == g)
            x, spread = f.x[position[rows_of_group]], f.spread[position[rows_of_group]]
            where = np.ix_(rows_of_group, block.unknowns)
            centre[where], low[where], high[where] = x, down(x - spread), up(x + spread)
        # choices of different groups must differ, so that later groups tell them apart
        offset = np.concatenate([[0], np.cumsum([len(f.x) for f in found])])
        choice[:, i] = position + offset[group]
    spread = np.maximum(high - centre, centre - low)
    return Points(centre, spread, undecided, tuple(dict.fromkeys(remainder)), boxes, len(order))


def _start(
    system: System, block: Block, box: float, between: list[Between], known: NDArray[np.bool_], low: Array, high: Array
) -> Array:
    """(2, k) start box of the unknowns of a group: the box for nets, INNER_LIMIT for what is not a net; less where other nets hold a net
    between them. known: (n,) which unknowns lie in [low, high] already."""
    reach = np.array([box if kind == "net" else INNER_LIMIT for kind, _ in system.unknowns])
    least, most = np.where(known, low, -reach), np.where(known, high, reach)
    start = np.stack([-reach, reach])
    for one in between:
        below, above = one.bounds(least, most)
        # a set that lies outside the box altogether is left to the search
        if below <= box and above >= -box:
            start[0, one.members], start[1, one.members] = max(below, -box), min(above, box)
    return start[:, block.unknowns]


def _key(problem: Problem, kinds: NDArray[np.int64], start: Array) -> bytes:
    """Groups with the same numbers have the same solutions: several equal cells are searched once."""
    arrays = (
        start,
        problem.G,
        problem.B,
        problem.W,
        problem.V,
        problem.c_low,
        problem.c_high,
        problem.d_low,
        problem.d_high,
        problem.s_low,
        problem.s_high,
    )
    parameters = getattr(problem.rows, "parameters", np.zeros(0))
    return b"|".join(
        [np.int64(problem.n).tobytes(), kinds.tobytes(), parameters.tobytes(), *(a.tobytes() for a in arrays)]
    )


def _solve(
    problem: Problem, kinds: NDArray[np.int64], start: Array, deadline: float, max_boxes: int
) -> Found:
    if problem.m == 0:
        return _solve_linear(problem)
    scale = np.where(start[1] < INNER_LIMIT, 1.0, 1e-3)
    found = search(problem, start[0], start[1], deadline=deadline, scale=scale, max_boxes=max_boxes)
    if found.complete and not parity_holds(problem, kinds, found):
        doubt = start[None]
        return Found(found.x, found.spread, found.clusters, doubt, found.boxes, found.seconds, ("parity",))
    return found


def _solve_linear(problem: Problem) -> Found:
    """One linear group: x = N s with the error of N bounded by the residual (Rump 2010, from memory)."""
    n = problem.n
    inverse = invert(problem.G[None])[0]
    s = 0.5 * problem.s_low + 0.5 * problem.s_high
    s_rad = np.maximum(problem.s_high - s, s - problem.s_low)
    x = inverse @ s
    magnitude = np.abs(problem.G)
    residual = s - problem.G @ x
    size = np.abs(s) + magnitude @ np.abs(x)
    bound = np.abs(inverse) @ (np.abs(residual) + size * gamma(n + 4) + s_rad)
    loose = np.abs(np.eye(n) - inverse @ problem.G) + np.abs(inverse) @ magnitude * gamma(2 * n + 8)
    contraction = float(np.max(np.sum(loose * (bound + TINY), axis=1) / (bound + TINY))) if n else 0.0
    none = np.zeros((0, 2, n))
    if not np.any(inverse) or not contraction < 0.5:
        wide = np.stack([np.full(n, -INNER_LIMIT), np.full(n, INNER_LIMIT)])[None]
        return Found(np.zeros((0, n)), np.zeros((0, n)), none, wide, 1, 0.0, ("singular",))
    # |x_true - x| <= bound + loose |x_true - x|, and `loose` shrinks the vector bound + TINY by `contraction`
    spread = up((bound + TINY) / (1.0 - contraction) * (1.0 + gamma(8)))
    return Found(x[None], spread[None], none, none, 1, 0.0)


def group_problem(
    system: System, block: Block, low: Array, high: Array, source_radius: Array | None = None
) -> tuple[Problem, NDArray[np.int64]]:
    """The equations of one group with the unknowns before it in [low, high]: (n,) each; and the kinds of its rows."""
    rows, unknowns, needs, inner, outer = block.rows, block.unknowns, block.needs, block.inner, block.outer
    inner = inner[np.argsort(system.kinds[inner], kind="stable")]  # those of a kind side by side: slices then, no copies
    x_low, x_high = low[needs], high[needs]
    s_low, s_high = _minus(system.s[rows], system.G[np.ix_(rows, needs)], x_low, x_high)
    if source_radius is not None and np.any(source_radius[rows] > 0.0):
        s_low, s_high = down(s_low - source_radius[rows]), up(s_high + source_radius[rows])
    if len(outer):
        functions = rows_of(system.kinds[outer], system.parameters[outer])
        w_low, w_high = _plus(system.c[outer], system.W[np.ix_(outer, needs)], x_low, x_high)
        f_low, f_high = functions.bounds(w_low, w_high)
        if system.has_products:
            u_low, u_high = _plus(system.d[outer], system.V[np.ix_(outer, needs)], x_low, x_high)
            p_low, p_high = multiply(f_low, f_high, u_low, u_high)
            plain = (system.d[outer] == 1.0) & ~np.any(system.V[outer] != 0.0, axis=1)
            f_low, f_high = np.where(plain, f_low, p_low), np.where(plain, f_high, p_high)
        taken_low, taken_high = _minus(np.zeros(len(rows)), system.B[np.ix_(rows, outer)], f_low, f_high)
        s_low, s_high = down(s_low + taken_low), up(s_high + taken_high)
    c_low, c_high = _plus(system.c[inner], system.W[np.ix_(inner, needs)], x_low, x_high)
    d_low, d_high = _plus(system.d[inner], system.V[np.ix_(inner, needs)], x_low, x_high)
    kinds = system.kinds[inner]
    problem = Problem(
        system.G[np.ix_(rows, unknowns)],
        system.B[np.ix_(rows, inner)],
        system.W[np.ix_(inner, unknowns)],
        system.V[np.ix_(inner, unknowns)],
        rows_of(kinds, system.parameters[inner]),
        c_low,
        c_high,
        d_low,
        d_high,
        s_low,
        s_high,
    )
    return problem, kinds


def _plus(c: Array, matrix: Array, low: Array, high: Array) -> tuple[Array, Array]:
    """c + matrix @ [low, high]; exactly c where the matrix row is empty."""
    plus, minus = np.maximum(matrix, 0.0), np.minimum(matrix, 0.0)
    size = np.abs(c) + np.abs(matrix) @ np.maximum(np.abs(low), np.abs(high))
    used = np.any(matrix != 0.0, axis=1)
    error = np.where(used, size * gamma(matrix.shape[1] + 2) + TINY, 0.0)
    return c + plus @ low + minus @ high - error, c + plus @ high + minus @ low + error


def _minus(c: Array, matrix: Array, low: Array, high: Array) -> tuple[Array, Array]:
    return _plus(c, -matrix, low, high)


def parity_holds(problem: Problem, kinds: NDArray[np.int64], found: Found) -> bool:
    """Whether the signs of the determinants at all solutions add up as degree theory demands; True where the theorem does not apply.

    With bounded rows (tanh and the like) and growing rows (exponential, softplus) whose slopes leave the determinant's sign alone, the map
    has the degree of its linear part, so the signs add to that (degree theory after Chua and Wang 1977; Sandberg and Willson 1969;
    from memory).
    """
    if (
        len(problem.product)
        or np.any([k not in BOUNDED and k not in GROWING for k in kinds])
        or len(found.x) == 0
    ):
        return True
    growing = np.flatnonzero([k in GROWING for k in kinds])
    if len(growing) > PARITY_ROWS:
        return True
    corners = ((np.arange(2 ** len(growing))[:, None] >> np.arange(len(growing))) & 1).astype(float)
    weight = 1.0 / np.maximum(
        np.max(np.abs(problem.B[:, growing]), axis=0) * np.max(np.abs(problem.W[growing]), axis=1), TINY
    )
    slopes = np.zeros((len(corners), problem.m))
    slopes[:, growing] = corners * weight
    signs, logs = np.linalg.slogdet(problem.G + problem.B @ (slopes[..., None] * problem.W))
    if np.any(signs != signs[0]) or signs[0] == 0 or not np.all(np.isfinite(logs)):
        return True
    w = found.x @ problem.W.T + 0.5 * (problem.c_low + problem.c_high)
    at = np.empty_like(w)
    for kind in np.unique(kinds):
        at[:, kinds == kind] = SLOPE[kind](w[:, kinds == kind], ())
    here, _ = np.linalg.slogdet(problem.G + problem.B @ (at[..., None] * problem.W))
    return bool(np.sum(here) == signs[0])


def _describe(system: System, block: Block, found: Found) -> list[str]:
    """Where the undecided boxes of a group are: the net that varies most, its range, how many."""
    if "parity" in found.notes:
        return ["the determinant signs of the points found do not add up: points may lie outside the box"]
    if "singular" in found.notes:
        names = ", ".join(system.unknowns[j][1] for j in block.unknowns[:4])
        return [f"singular equations for {names}: no point or infinitely many"]
    lines = []
    for word, kept in (("cluster", found.clusters), ("not searched", found.left)):
        if len(kept) == 0:
            continue
        low, high = kept[:, 0].min(axis=0), kept[:, 1].max(axis=0)
        nets = [p for p, j in enumerate(block.unknowns) if system.unknowns[j][0] == "net"] or list(
            range(len(block.unknowns))
        )
        widest = max(nets, key=lambda p: high[p] - low[p])
        name = system.unknowns[block.unknowns[widest]][1]
        if word == "cluster":
            lines.append(
                f"points too close to tell apart near {name} = {0.5 * (low[widest] + high[widest]):.9g}, width"
                f" {high[widest] - low[widest]:.2g}: a fold is near"
            )
        else:
            lines.append(
                f"{len(kept)} boxes not searched within the budget, {name} in {low[widest]:.6g} .. {high[widest]:.6g}"
            )
    return lines


__all__ = ["Points", "all_points", "group_problem", "parity_holds"]
