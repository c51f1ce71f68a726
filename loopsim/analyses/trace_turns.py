"""Folds with where they land, and points where the stability changes otherwise."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.settling import settle_all
from loopsim.analyses.stability import judge
from loopsim.analyses.trace_curves import at, stable_crossings
from loopsim.analyses.trace_results import Branch, Crossing, Fold
from loopsim.numerics.curve import FoldPoint, fold
from loopsim.numerics.spectrum import determinant_signs

Array: TypeAlias = NDArray[np.float64]

PAST = 1e-7  # of the range: how far past a fold the landing is looked for
MEETING = 0.02  # of the picture: half a step of the curve, within which a turn and a branch point are one
ASTRAY = 1.5  # of the longer step beside a turn: a fold further from it is not its own
SAME_FOLD = 1e-7  # scaled: two turns located as near to each other are one fold, and one of them was not found
SAME_PLACE = 1e-5  # of the range: a fold this near to a branch point is that point


def folds(
    family: Family, branches: Sequence[Branch], branch_points: Sequence[Crossing], index: Mapping[str, int], scale: Array
) -> tuple[tuple[Fold, ...], tuple[str, ...]]:
    """Every turn of every branch, located, in the order of the let; and a line for each that could not be located.

    A branch may also turn where it meets another (in a symmetric circuit): such a turn is a branch point and no fold.
    """
    found: list[Fold] = []
    lost: list[str] = []
    for number, branch in enumerate(branches):
        for i in _turns(branch):
            before, after = (i - 1, i + 1) if i else (len(branch.values) - 2, 1)
            here, level = branch.x[i], float(branch.values[i])
            point = fold(family, family.bend, family.slope_along, here, level, branch.x[after] - branch.x[before], scale)
            meeting = [other for other in branch_points if _meets(branch, i, other, index, scale)]
            if point is not None and any(abs(point.level - other.at) < SAME_PLACE * scale[-1] for other in meeting):
                continue
            if point is None or not _beside(point, branch, (before, i, after), scale) or _known(point, number, found, scale):
                # which of the two turns the fold belongs to is not known: neither keeps it
                found = [f for f in found if point is None or not _known(point, number, [f], scale)]
                if meeting:
                    continue
                lost.append(f"the turn of branch {number + 1} near {level:.6g} could not be located")
                continue
            rising = bool(branch.values[before] < level) or bool(level > branch.values[after])
            # a verdict that rests on strays, or on rounding beside the fold, is not one of instability
            stable_side = branch.stable[before] is not False or branch.stable[after] is not False
            found.append(
                Fold(
                    point.level, _volts(index, point.x), "rising" if rising else "falling", point.precision, stable_side, None, point.x,
                    None, number, point.v,
                )
            )  # fmt: skip
    landings = _landings(family, branches, found, scale)
    landed = [
        replace(f, landing=x, lands=None if x is None else _volts(index, x)) for f, x in zip(found, landings, strict=True)
    ]
    return tuple(sorted(landed, key=lambda f: (f.at, f.branch))), tuple(lost)


def _beside(point: FoldPoint, branch: Branch, around: tuple[int, int, int], scale: Array) -> bool:
    """Whether a located fold belongs to a turn and is not another one near by. around: points before, at and after the turn."""
    near = np.column_stack([branch.x[list(around)], branch.values[list(around)]]) / scale
    length = max(float(np.linalg.norm(near[1] - near[0])), float(np.linalg.norm(near[2] - near[1])))
    return float(np.linalg.norm(np.append(point.x, point.level) / scale - near[1])) <= ASTRAY * length + 1e-9


def _known(point: FoldPoint, number: int, found: Sequence[Fold], scale: Array) -> bool:
    """Whether another turn of the same branch was located at this fold: each turn has a fold of its own."""
    here = np.append(point.x, point.level) / scale
    return any(f.branch == number and float(np.linalg.norm(np.append(f.x, f.at) / scale - here)) < SAME_FOLD for f in found)


def _meets(branch: Branch, i: int, other: Crossing, index: Mapping[str, int], scale: Array) -> bool:
    """Whether point i of a branch, a turn, is where another branch was found to cross."""
    apart = [abs(float(branch.nets[net][i]) - volts) / scale[j] for net, j in index.items() for volts in (other.nets[net],)]
    return abs(float(branch.values[i]) - other.at) < MEETING * scale[-1] and max(apart, default=0.0) < MEETING


def _turns(branch: Branch) -> list[int]:
    """Points of a branch at which the let turns back."""
    steps = np.diff(branch.values)
    turns = (np.flatnonzero(np.diff(np.sign(steps)) != 0) + 1).tolist()
    if branch.closed and len(branch.values) > 3 and steps[0] * steps[-1] < 0:
        turns.append(0)
    return turns


def _volts(index: Mapping[str, int], x: Array) -> dict[str, float]:
    return {net: float(x[j]) for net, j in index.items()}


def _landings(family: Family, branches: Sequence[Branch], found: Sequence[Fold], scale: Array) -> list[Array | None]:
    """Where the circuit comes to rest just past each fold; None beyond the range, or where it does not come to rest."""
    way = (1.0 if f.direction == "rising" else -1.0 for f in found)
    past = [f.at + sign * PAST * (family.high - family.low) for f, sign in zip(found, way, strict=True)]
    jumps = [i for i, f in enumerate(found) if f.from_stable and family.low <= past[i] <= family.high]
    if not jumps:
        return [None] * len(found)
    rests = [_stable_at(family, branches, past[i]) for i in jumps]
    starts = np.stack([found[i].x for i in jumps])
    landed: list[Array | None]
    if family.affine:
        sources = np.stack([family.system(past[i]).s for i in jumps])
        landed = settle_all(family.system(family.low), sources, starts, rests, scale[:-1])
    else:
        landed = []
        for i, known, start in zip(jumps, rests, starts, strict=True):
            system = family.system(past[i])
            landed += settle_all(system, system.s[None], start[None], [known], scale[:-1])
    places = dict(zip(jumps, landed, strict=True))
    return [places.get(i) for i in range(len(found))]


def _stable_at(family: Family, branches: Sequence[Branch], level: float) -> Array:
    """(k, n) the stable states that the branches pass at a value of the let."""
    found = [x for branch in branches for x, stable in stable_crossings(family, branch, level) if stable]
    return np.array(found)


def crossings(
    family: Family, branches: Sequence[Branch], index: Mapping[str, int], scale: Array
) -> tuple[Crossing, ...]:
    """Stability changes between neighbouring points of a branch where the let does not turn."""
    found: list[Crossing] = []
    for branch in branches:
        for i in range(len(branch.values) - 1):
            a, b = branch.stable[i], branch.stable[i + 1]
            if a is None or b is None or a == b:
                continue
            turning = any(
                0 < k < len(branch.values) - 1
                and (branch.values[k] - branch.values[k - 1]) * (branch.values[k + 1] - branch.values[k]) <= 0
                for k in (i, i + 1)
            )
            if turning:
                continue
            located = _locate(family, branch, i, index, scale)
            if located is not None:
                found.append(located)
    return tuple(found)


def _locate(
    family: Family, branch: Branch, i: int, index: Mapping[str, int], scale: Array
) -> Crossing | None:
    """The change between points i and i + 1, by bisection on the largest real part along the let."""
    lo, hi = float(branch.values[i]), float(branch.values[i + 1])
    x_lo, x_hi = branch.x[i], branch.x[i + 1]
    if lo == hi:
        return None
    growth_lo = judge(family.system(lo), x_lo[None])[0].growth_rate
    growth_hi = judge(family.system(hi), x_hi[None])[0].growth_rate
    if growth_lo is None or growth_hi is None or growth_lo * growth_hi > 0.0:
        return None
    frequency = None
    for _ in range(80):
        # false position, kept inside by bisection (Illinois rule)
        middle = 0.5 * (lo + hi) if _ % 3 == 2 else lo + (hi - lo) * growth_lo / (growth_lo - growth_hi)
        between = x_lo + (x_hi - x_lo) * (middle - lo) / (hi - lo)
        x = at(family, between, middle)
        if x is None:
            # where branches cross Newton has nothing to hold on to: the straight line between the neighbours is taken, and its growth
            # says how near that is
            growth = judge(family.system(middle), between[None])[0].growth_rate or 0.0
            doubt = abs(growth) / (abs(growth_lo) + abs(growth_hi)) * abs(hi - lo)
            lo, hi, x_lo = middle - 0.5 * doubt, middle + 0.5 * doubt, between
            break
        verdict = judge(family.system(middle), x[None])[0]
        growth = verdict.growth_rate or 0.0
        values = verdict.eigenvalues
        frequency = abs(float(values[0].imag)) / (2.0 * np.pi) if len(values) else None
        if growth * growth_lo > 0.0:
            lo, x_lo, growth_lo = middle, x, growth
        else:
            hi, x_hi, growth_hi = middle, x, growth
        if abs(hi - lo) < 1e-11 * scale[-1] or growth == 0.0:
            break
    signs = determinant_signs(
        np.stack(
            [
                family.jacobian(branch.x[i], float(branch.values[i])),
                family.jacobian(branch.x[i + 1], float(branch.values[i + 1])),
            ]
        )
    )
    kind = "branch point" if signs[0] * signs[1] < 0 else "hopf"
    nets = {net: float(x_lo[j]) for net, j in index.items()}
    return Crossing(
        kind, 0.5 * (lo + hi), nets, frequency if kind == "hopf" else None, abs(hi - lo) / scale[-1]
    )
