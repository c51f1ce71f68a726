"""The curves of a characteristic, each once, through the states that were proved."""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.points import Points
from loopsim.analyses.stability import judge
from loopsim.analyses.states import whole_problem
from loopsim.analyses.trace_results import Branch
from loopsim.errors import InternalError
from loopsim.numerics.certificate import certify
from loopsim.numerics.curve import Curve, correct, follow
from loopsim.numerics.newton import newton

Array: TypeAlias = NDArray[np.float64]

SAME = 1e-6  # scaled distance at which a proved state and a point of a curve are one; both are known to 1e-9
NEAREST = 4  # stretches of a curve that are tried for a state
REACH = 0.1  # scaled distance beyond which a stretch is none of a state's
EDGE = 1e-6  # of the box: states this near to its edge may have been counted on either side
CLEARLY_ON = 1e-4  # scaled distance from the straight line between two traced points at which no finer test is needed


@dataclass(frozen=True, eq=False)
class Start:
    """A proved state that some curve has to pass. x: (n,); value: of the let; at_end: +1, -1 at the high, low end of the range, else 0."""

    x: Array
    value: float
    at_end: int = 0


def starts_of(values: Array, proved: Sequence[Points]) -> list[Start]:
    """The proved states, those at the ends of the range first: a curve from there is followed once."""
    last = len(values) - 1
    ends = {0: -1, last: 1}
    order = [0, last, *range(1, last)]
    return [Start(x, float(values[k]), ends.get(k, 0)) for k in order for x in proved[k].x]


def curves(family: Family, starts: Sequence[Start], known: Sequence[Curve], scale: Array, deadline: float) -> list[Curve]:
    """The known curves and every other one through a start, each once, from one of its ends to the other."""
    found = list(known)
    for start in starts:
        if any(_passes(family, curve, start.x, start.value, scale) for curve in found):
            continue
        if time.monotonic() > deadline:
            break
        # from an end of the range only the way inward is wanted
        outward = 1.0 if start.at_end > 0 else -1.0
        curve = follow(family, start.x, start.value, -outward, family.low, family.high, scale, deadline)
        if curve.end != "closed" and not start.at_end:
            curve = _joined(follow(family, start.x, start.value, outward, family.low, family.high, scale, deadline), curve)
        found.append(_cut(family, curve, scale))
    return found


def more_curves(family: Family, starts: Sequence[Start], known: Sequence[Curve], scale: Array, deadline: float) -> list[Curve]:
    """The known curves and every other one through a start: closed ones between stations, and those that come from beyond the box."""
    found = list(known)
    for curve in curves(family, starts, known, scale, deadline)[len(known) :]:
        # a start beside a fold may have been followed although its curve is known: where the let moves most that is plain
        steepest = int(np.argmax(np.abs(curve.tangent[:, -1])))
        if not any(_passes(family, other, curve.x[steepest], float(curve.level[steepest]), scale) for other in found):
            found.append(curve)
    return found


def strangers(branches: Sequence[Branch], x: Array, values: Array, plain: NDArray[np.bool_], scale: Array) -> list[Start]:
    """Those of the proved states x (k, n) at values (k,) of the let that lie on no branch as far as straight lines between its points
    tell, which is asked of the `plain` ones (k,) alone; which of them really lie on none, `curves` decides."""
    found = []
    for state, value, simple in zip(x, values.tolist(), plain.tolist(), strict=True):
        if not (simple and any(_near(branch, state, value, scale) for branch in branches)):
            found.append(Start(state, value))
    return found


def _near(branch: Branch, state: Array, value: float, scale: Array) -> bool:
    """Whether a state lies on a straight line between two points of a branch."""
    d = branch.values - value
    for i in np.flatnonzero(d[:-1] * d[1:] <= 0.0):
        share = 0.0 if d[i] == d[i + 1] else d[i] / (d[i] - d[i + 1])
        between = branch.x[i] + share * (branch.x[i + 1] - branch.x[i])
        if float(np.max(np.abs(between - state) / scale[:-1])) < CLEARLY_ON:
            return True
    return False


def _joined(back: Curve, ahead: Curve) -> Curve:
    """One curve from the end of `back` through its start to the end of `ahead`."""
    lengths = np.concatenate([-back.length[::-1], ahead.length[1:]])
    return Curve(
        np.concatenate([back.x[::-1], ahead.x[1:]]),
        np.concatenate([back.level[::-1], ahead.level[1:]]),
        np.concatenate([-back.tangent[::-1], ahead.tangent[1:]]),
        lengths - lengths[0],
        ahead.end
        if ahead.end in ("stuck", "time")
        else back.end
        if back.end in ("stuck", "time")
        else "range",
    )


def _cut(family: Family, curve: Curve, scale: Array) -> Curve:
    """End points that lie beyond the range moved onto its ends."""
    x, level = curve.x.copy(), curve.level.copy()
    for end, inner in ((0, 1), (len(level) - 1, len(level) - 2)):
        if len(level) > 1 and not family.low <= level[end] <= family.high:
            limit = family.low if level[end] < family.low else family.high
            share = (limit - level[inner]) / (level[end] - level[inner])
            moved = at(family, x[inner] + share * (x[end] - x[inner]), limit)
            if moved is not None:
                x[end], level[end] = moved, limit
    return Curve(x, level, curve.tangent, curve.length, curve.end)


def at(family: Family, x: Array, level: float) -> Array | None:
    """The state at a value of the let near x."""
    system = family.system(level)
    root = newton(system.residual, system.jacobian, x[None], max_steps=30)
    return root.x[0] if root.converged[0] else None


def crossings_of(family: Family, curve: Curve | Branch, value: float) -> list[Array]:
    """States of a curve at a value of the let, refined."""
    return [x for _, x in _crossings(family, curve.level if isinstance(curve, Curve) else curve.values, curve.x, value)]


def stable_crossings(family: Family, curve: Branch, value: float) -> list[tuple[Array, bool | None]]:
    """States of a branch at a value of the let with the stability of the nearer traced point."""
    d = np.abs(curve.values - value)
    last = len(d) - 1
    return [(x, curve.stable[i if i == last or d[i] <= d[i + 1] else i + 1]) for i, x in _crossings(family, curve.values, curve.x, value)]


def _crossings(family: Family, level: Array, points: Array, value: float) -> list[tuple[int, Array]]:
    """(position before it, state) of each crossing of a value."""
    d = level - value
    found = []
    for i in np.flatnonzero((d[:-1] * d[1:] < 0.0) | (d[:-1] == 0.0)).tolist():
        share = 0.0 if d[i] == d[i + 1] else d[i] / (d[i] - d[i + 1])
        x = at(family, points[i] + share * (points[i + 1] - points[i]), value)
        if x is not None:
            found.append((i, x))
    if len(d) and d[-1] == 0.0:
        found.append((len(d) - 1, points[-1]))
    return found


def _passes(family: Family, curve: Curve, x: Array, value: float, scale: Array) -> bool:
    """Whether a curve goes through a state: the curve is brought into the plane across it that holds the state, which works at a fold too,
    and compared there."""
    n = len(x)
    points = np.column_stack([curve.x, curve.level]) / scale
    state = np.append(x, value) / scale
    if len(points) < 2:
        return bool(np.max(np.abs(points[0] - state)) < SAME)
    step = np.diff(points, axis=0)
    length = np.linalg.norm(step, axis=1)
    along = step / np.where(length > 0.0, length, 1.0)[:, None]
    shares = np.clip(np.sum((state - points[:-1]) * along, axis=1), 0.0, length)
    feet = points[:-1] + shares[:, None] * along
    distance = np.linalg.norm(feet - state, axis=1)
    for i in np.argsort(distance)[:NEAREST]:
        if distance[i] > REACH:
            break
        # the plane through the state itself, also beyond the ends of a stretch
        foot = points[i] + float((state - points[i]) @ along[i]) * along[i]
        found = correct(family, foot[:n] * scale[:n], float(foot[n] * scale[n]), scale, along[i], 1.0)
        if found is not None and float(np.max(np.abs(np.append(found[0], found[1]) / scale - state))) < SAME:
            return True
    return False


def branch(family: Family, curve: Curve, index: Mapping[str, int]) -> Branch:
    nets = {net: curve.x[:, j] for net, j in index.items()}
    return Branch(
        curve.level,
        curve.x,
        nets,
        _stabilities(family, curve.level, curve.x),
        curve.length,
        curve.end == "closed",
    )


def _stabilities(family: Family, levels: Array, x: Array) -> tuple[bool | None, ...]:
    if family.affine:
        return tuple(v.stable for v in judge(family.system(float(levels[0])), x))
    return tuple(
        judge(family.system(float(level)), here[None])[0].stable
        for level, here in zip(levels, x, strict=True)
    )


def within(x: Array, nets: NDArray[np.bool_], box: float) -> NDArray[np.bool_]:
    """(k,) which states x (k, n) a proof with all nets within +/- box [V] speaks of, those on its very edge left out. nets: (n,)."""
    return np.asarray(np.all(np.abs(x[:, nets]) < box * (1.0 - EDGE), axis=1))


def matching(
    family: Family, branches: Sequence[Branch], values: Array, proved: Sequence[Points], scale: Array, box: float
) -> tuple[list[float], list[str]]:
    """Values at which the proof was complete and every proved state lies on a branch, and the other way round. box [V] of the proof:
    a branch may well leave it."""
    nets = np.array([kind == "net" for kind, _ in family.system(family.low).unknowns])
    good: list[float] = []
    doubts: dict[str, list[float]] = {}
    for value, points in zip(values, proved, strict=True):
        crossings = [x for branch in branches for x in crossings_of(family, branch, float(value))]
        missing = sum(all(np.max(np.abs(y - x) / scale[:-1]) >= SAME for y in crossings) for x in points.x)
        inside = [y for y in crossings if within(y[None], nets, box)[0]]
        extra = [y for y in inside if all(np.max(np.abs(y - x) / scale[:-1]) >= SAME for x in points.x)]
        if extra and points.complete and _really_there(family, extra[0], float(value)):
            raise InternalError(
                f"the curve passes a state at {value:g} that the proof of completeness excluded; please report this"
            )
        if missing:
            doubts.setdefault("proved states lie on no branch that could be followed", []).append(float(value))
        elif points.complete:
            good.append(float(value))
        else:
            doubts.setdefault(f"not complete: {'; '.join(points.remainder) or 'undecided'}", []).append(float(value))
    return good, [f"at {_several(places)}: {doubt}" for doubt, places in doubts.items()]


def _several(places: Sequence[float]) -> str:
    """Values of the let as a few words: at most three one by one."""
    if len(places) <= 3:
        return ", ".join(f"{value:.6g}" for value in places)
    return f"{len(places)} stations, {places[0]:.6g} .. {places[-1]:.6g}"


def _really_there(family: Family, x: Array, value: float) -> bool:
    return bool(certify(whole_problem(family.system(value)), x[None]).good[0])
