"""The curves of a characteristic, each once, through the states that were proved."""

from __future__ import annotations

import time
from collections.abc import Mapping, Sequence
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
from loopsim.numerics.curve import Curve, follow
from loopsim.numerics.newton import newton

Array: TypeAlias = NDArray[np.float64]

SAME = 1e-6  # scaled distance at which a proved state and a point of a curve are one; both are known to 1e-9


def curves(
    family: Family, values: Array, proved: Sequence[Points], scale: Array, deadline: float
) -> list[Curve]:
    """Every curve through a proved state, each once, ends joined: from low or from an inner start to both of its ends."""
    found: list[Curve] = []
    order = [0, len(values) - 1, *range(1, len(values) - 1)]
    for station in order:
        value = float(values[station])
        for x in proved[station].x:
            if any(_passes(family, curve, x, value, scale) for curve in found):
                continue
            if time.monotonic() > deadline:
                return found
            # from an end of the range only the way inward is wanted
            outward = 1.0 if station == len(values) - 1 else -1.0
            inward = follow(family, x, value, -outward, family.low, family.high, scale, deadline)
            if inward.end == "closed" or station in (0, len(values) - 1):
                found.append(inward)
                continue
            found.append(
                _joined(follow(family, x, value, outward, family.low, family.high, scale, deadline), inward)
            )
    return [_cut(family, curve, scale) for curve in found]


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
    return any(float(np.max(np.abs(y - x) / scale[:-1])) < SAME for y in crossings_of(family, curve, value))


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


def matching(
    family: Family, branches: Sequence[Branch], values: Array, proved: Sequence[Points], scale: Array
) -> tuple[list[float], list[str]]:
    """Values at which the proof was complete and every proved state lies on a branch, and the other way round."""
    good: list[float] = []
    notes: list[str] = []
    for value, points in zip(values, proved, strict=True):
        crossings = [x for branch in branches for x in crossings_of(family, branch, float(value))]
        missing = sum(all(np.max(np.abs(y - x) / scale[:-1]) >= SAME for y in crossings) for x in points.x)
        extra = [y for y in crossings if all(np.max(np.abs(y - x) / scale[:-1]) >= SAME for x in points.x)]
        if extra and points.complete and _really_there(family, extra[0], float(value)):
            raise InternalError(
                f"the curve passes a state at {value:g} that the proof of completeness excluded; please report this"
            )
        if missing:
            notes.append(f"{missing} proved states at {value:.6g} lie on no branch that could be followed")
        elif points.complete:
            good.append(float(value))
        else:
            notes.append(f"not complete at {value:.6g}: {'; '.join(points.remainder) or 'undecided'}")
    return good, notes


def _really_there(family: Family, x: Array, value: float) -> bool:
    return bool(certify(whole_problem(family.system(value)), x[None]).good[0])
