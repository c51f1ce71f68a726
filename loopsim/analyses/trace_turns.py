"""Folds with where they land, and points where the stability changes otherwise."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.stability import STRAY, judge
from loopsim.analyses.trace_curves import at, stable_crossings
from loopsim.analyses.trace_results import Branch, Crossing, Fold
from loopsim.equations.system import System
from loopsim.numerics.curve import fold
from loopsim.numerics.newton import newton
from loopsim.numerics.spectrum import determinant_signs

Array: TypeAlias = NDArray[np.float64]

PAST = 1e-7  # of the range: how far past a fold the landing is looked for
MEETING = 0.02  # of the picture: half a step of the curve, within which a turn and a branch point are one
SAME_PLACE = 1e-5  # of the range: a fold this near to a branch point is that point
SETTLE_STEPS = 400
FIRST_STEP = 1e-12  # [s] below the fastest time of any shipped circuit
ARRIVED = 1e-4  # of a net's travel: so near to a stable state, and nearing it, the rest of the way is known


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
            if point is None or abs(point.level - level) > 0.1 * scale[-1]:
                if meeting:
                    continue
                lost.append(f"the turn of branch {number + 1} near {level:.6g} could not be located")
                continue
            rising = bool(branch.values[before] < level) or bool(level > branch.values[after])
            stable_side = True in (branch.stable[before], branch.stable[after])
            landing = _landing(family, branches, point.x, point.level, rising, scale) if stable_side else None
            found.append(
                Fold(
                    point.level, _volts(index, point.x), "rising" if rising else "falling", point.precision, stable_side,
                    None if landing is None else _volts(index, landing), point.x, landing, number, point.v,
                )
            )  # fmt: skip
    return tuple(sorted(found, key=lambda f: (f.at, f.branch))), tuple(lost)


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


def _landing(family: Family, branches: Sequence[Branch], x: Array, level: float, rising: bool, scale: Array) -> Array | None:
    """Where the circuit comes to rest just past a fold; None beyond the range, or where it does not come to rest."""
    past = level + (1.0 if rising else -1.0) * PAST * (family.high - family.low)
    if not family.low <= past <= family.high:
        return None
    rests = [y for branch in branches for y, stable in stable_crossings(family, branch, past) if stable]
    return settle(family.system(past), x, np.array(rests).reshape(-1, len(x)), scale[:-1])


def settle(system: System, x: Array, rests: Array | None = None, size: Array | None = None) -> Array | None:
    """Where the circuit comes to rest from x with its own dynamics (and a stray on each net that has none); None when it does not.

    Implicit Euler with growing steps: it damps what the circuit damps, and the steps end as Newton's on the equilibrium. rests: (k, n)
    known stable states: one that is drawn in to ARRIVED of `size` (n,) ends the run.
    """
    dynamics = system.C.copy()
    for j, (kind, _) in enumerate(system.unknowns):
        bare = kind != "current" and not np.any(system.C[:, j] != 0.0)
        if bare and (not system.row_units or system.row_units[j] == "A"):
            dynamics[j, j] += STRAY
    h, y = FIRST_STEP, x
    away = np.inf
    for _ in range(SETTLE_STEPS):
        root = newton(*_implicit(system, dynamics / h, y), y[None], max_steps=12)
        if not root.converged[0]:
            h *= 0.25
            if h < 1e-20:
                return None
            continue
        moved = float(np.max(np.abs(root.x[0] - y) / (1.0 + np.abs(y))))
        y = root.x[0]
        if rests is not None and size is not None and len(rests):
            distances = np.max(np.abs(rests - y) / size, axis=1)
            nearest = int(np.argmin(distances))
            if distances[nearest] < ARRIVED and distances[nearest] < away:
                return np.asarray(rests[nearest])
            away = distances[nearest]
        # growth near the fold is slow and must be let develop: the step grows only while the state moves little per step
        h *= 8.0 if moved < 1e-3 else 3.0 if moved < 0.05 else 1.0 if moved < 0.3 else 0.5
        if h > 1e6 and moved < 1e-9:
            final = newton(system.residual, system.jacobian, y[None], max_steps=20)
            return final.x[0] if final.converged[0] else None
    return None


def _implicit(system: System, mass: Array, y: Array) -> tuple[Callable[[Array], Array], Callable[[Array], Array]]:
    """Residual and Jacobian of one step of implicit Euler from y."""
    return lambda z: system.residual(z) + (z - y) @ mass.T, lambda z: system.jacobian(z) + mass


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
