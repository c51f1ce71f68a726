"""Thresholds: where a net jumps when the let moves slowly from one end of its range to the other."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.trace_results import Branch, Fold, Thresholds

Array: TypeAlias = NDArray[np.float64]

MOVES = 0.01  # of a net's travel over all branches: a jump that moves it by less is no jump of that net


def travel_of(branches: Sequence[Branch], net: str) -> float:
    if not branches:
        return 0.0
    return max(float(b.nets[net].max()) for b in branches) - min(float(b.nets[net].min()) for b in branches)


def thresholds(
    family: Family,
    branches: Sequence[Branch],
    folds: Sequence[Fold],
    travel: Mapping[str, float],
    scale: Array,
) -> dict[str, Thresholds]:
    up = _slow_ride(family, branches, folds, scale, 1.0)
    down = _slow_ride(family, branches, folds, scale, -1.0)
    found = {}
    for net in travel:
        rising = tuple(f.at for f in up if _jumps(f, net, travel[net]))
        falling = tuple(f.at for f in down if _jumps(f, net, travel[net]))
        found[net] = Thresholds(
            rising[0] if rising else None, falling[0] if falling else None, rising, falling
        )
    return found


def _jumps(found: Fold, net: str, travel: float) -> bool:
    return found.lands is not None and abs(found.lands[net] - found.nets[net]) > MOVES * travel


def _slow_ride(
    family: Family, branches: Sequence[Branch], folds: Sequence[Fold], scale: Array, way: float
) -> list[Fold]:
    """The jumps met when the let moves slowly from one end to the other, from every stable state at the first end."""
    begin = family.low if way > 0 else family.high
    met: list[Fold] = []
    starts = [
        (number, k)
        for number, branch in enumerate(branches)
        for k in (0, len(branch.values) - 1)
        if not branch.closed and branch.values[k] == begin and branch.stable[k]
    ]
    for number, k in starts:
        place: tuple[int, int] | None = (number, k)
        for _ in range(len(folds) + 1):
            if place is None:
                break
            jump = _next_fold(branches, folds, place, way)
            if jump is None:
                break
            if all(jump is not f for f in met):
                met.append(jump)
            place = _nearest(branches, jump.landing, jump.at, scale) if jump.landing is not None else None
    return sorted(met, key=lambda f: way * f.at)


def _next_fold(
    branches: Sequence[Branch], folds: Sequence[Fold], place: tuple[int, int], way: float
) -> Fold | None:
    """The fold that ends a ride from a point of a branch; None where the ride leaves the range or loses stability first."""
    number, k = place
    branch = branches[number]
    count = len(branch.values)
    ahead = k + 1 if k + 1 < count else (1 if branch.closed else k)
    behind = k - 1 if k > 0 else (count - 2 if branch.closed else k)
    step = 1 if ahead != k and (branch.values[ahead] - branch.values[k]) * way > 0.0 else -1
    if step == -1 and (behind == k or (branch.values[behind] - branch.values[k]) * way <= 0.0):
        # the point itself is a turn
        here = [
            f for f in folds if f.branch == number and abs(f.at - branch.values[k]) < 1e-6 * (abs(f.at) + 1.0)
        ]
        return here[0] if here else None
    wanted = "rising" if way > 0 else "falling"
    for _ in range(count):
        following = k + step
        if following < 0 or following >= count:
            if not branch.closed:
                return None
            following = 1 if step > 0 else count - 2
        if (branch.values[following] - branch.values[k]) * way < 0.0:
            near = [f for f in folds if f.branch == number and f.direction == wanted]
            return min(near, key=lambda f: float(np.max(np.abs(f.x - branch.x[k]))), default=None)
        k = following
        if branch.stable[k] is False:
            near = [f for f in folds if f.branch == number and f.direction == wanted and f.from_stable]
            close = [
                f
                for f in near
                if way * (f.at - branch.values[k]) >= -1e-9 * (1.0 + abs(f.at))
                and abs(f.at - branch.values[k]) < 1e-3 * (abs(f.at) + 1.0)
            ]
            return min(close, key=lambda f: float(np.max(np.abs(f.x - branch.x[k]))), default=None)
    return None


def _nearest(branches: Sequence[Branch], x: Array, value: float, scale: Array) -> tuple[int, int] | None:
    best, place = np.inf, None
    for number, branch in enumerate(branches):
        away = np.max(np.abs(branch.x - x) / scale[:-1], axis=1) + np.abs(branch.values - value) / scale[-1]
        stable = np.array([s is not False for s in branch.stable])
        away = np.where(stable, away, np.inf)
        k = int(np.argmin(away))
        if away[k] < best:
            best, place = float(away[k]), (number, k)
    return place
