"""Following the solution curve of F(x, l) = 0 through its folds, and locating the folds themselves.

Arclength predictor-corrector: tangent from the bordered Jacobian, Newton in the plane across the step (H. B. Keller 1977; E. L. Allgower,
K. Georg, Numerical Continuation Methods, 1990, both from memory). Unknowns and parameter are scaled to order one by the caller's scales.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

Array: TypeAlias = NDArray[np.float64]

FIRST_STEP = 1e-3  # scaled arclength, of a range that is 1 long
LARGEST_STEP = 0.04  # at least 25 points over the range, for a picture
SMALLEST_STEP = 1e-13
TURN = 0.35  # [rad] largest turn of the tangent in one accepted step: more means a corner was cut or a branch jumped
CROSSING_STEP = 1e-5  # a curve that turns over within a step as short as this has crossed another branch, not been left for it
SHORT_ENOUGH = 1e-4  # scaled step below which no pair of turns is looked for inside it
LEVEL_NOISE = 1e-12  # scaled: a reversal of the level by less is rounding
CORRECTIONS = 7
CORRECTOR_SHARE = 0.3  # of the step: a corrector that moves further has probably left the branch
MAX_POINTS = 20_000
TIGHT = 1e-11  # scaled size of the last correction


class CurveEquations(Protocol):
    """F(x, l) = 0. x: (n,); residual: (n,); jacobian: (n, n) in x; slope: (n,), dF/dl."""

    def residual(self, x: Array, level: float) -> Array: ...
    def jacobian(self, x: Array, level: float) -> Array: ...
    def slope(self, x: Array, level: float) -> Array: ...


@dataclass(frozen=True, eq=False)
class Curve:
    """x: (k, n); level: (k,); tangent: (k, n + 1), unit and scaled, last entry that of the level; length: (k,) scaled arclength.

    end: "low" or "high" where the curve left the range, "closed" where it came back, "stuck" where no step succeeded, "time".
    """

    x: Array
    level: Array
    tangent: Array
    length: Array
    end: str


def tangent(equations: CurveEquations, x: Array, level: float, scale: Array, last: Array) -> tuple[Array, float] | None:
    """(unit tangent in scaled variables, on the side of `last`; orientation: sign of the bordered determinant). scale: (n + 1,).

    Along a curve the orientation keeps its sign, through folds too; it turns where another branch crosses, and on a neighbour that the
    curve was left for (E. L. Allgower, K. Georg, Numerical Continuation Methods, 1990, ch. 8, from memory).
    """
    n = len(x)
    bordered = np.empty((n + 1, n + 1))
    bordered[:n, :n] = equations.jacobian(x, level) * scale[:n]
    bordered[:n, n] = equations.slope(x, level) * scale[n]
    size = np.max(np.abs(bordered[:n]), axis=1)
    bordered[:n] /= np.where(size > 0.0, size, 1.0)[:, None]
    bordered[n] = last
    right = np.zeros(n + 1)
    right[n] = 1.0
    try:
        found = np.linalg.solve(bordered, right)
    except np.linalg.LinAlgError:
        return None
    length = float(np.linalg.norm(found))
    if not (np.isfinite(length) and length > 0.0):
        return None
    return np.asarray(found / length), float(np.linalg.slogdet(bordered)[0])


def correct(
    equations: CurveEquations, x: Array, level: float, scale: Array, across: Array, step: float
) -> tuple[Array, float, int, float] | None:
    """Newton back to the curve in the plane across `across`: (x, level, corrections, distance moved); None where it fails."""
    n = len(x)
    bordered = np.empty((n + 1, n + 1))
    moved = 0.0
    for count in range(1, CORRECTIONS + 1):
        bordered[:n, :n] = equations.jacobian(x, level) * scale[:n]
        bordered[:n, n] = equations.slope(x, level) * scale[n]
        right = np.append(-equations.residual(x, level), 0.0)
        size = np.max(np.abs(bordered[:n]), axis=1)
        size = np.where(size > 0.0, size, 1.0)
        bordered[:n] /= size[:, None]
        right[:n] /= size
        bordered[n] = across
        try:
            change = np.linalg.solve(bordered, right)
        except np.linalg.LinAlgError:
            return None
        distance = float(np.linalg.norm(change))
        if not np.isfinite(distance):
            return None
        moved += distance
        if moved > CORRECTOR_SHARE * step + 1e-9:
            return None
        x = x + change[:n] * scale[:n]
        level = float(level + change[n] * scale[n])
        if distance < TIGHT:
            return x, level, count, moved
    return None


def _turns_inside(rise: float, step: float, begin: Array, end: Array, turned: bool) -> bool:
    """Whether a step hides turns of the level from its end points. rise: scaled, of the level; turned: the step before held a turn.

    A steep stretch with a narrow pair of folds hides them from the tangent's turn too. Two turns inside show in the cubic with the rise
    and the tangents of both ends, which is not monotone then; one turn right after another leaves no falling step between the two.
    """
    first, last = step * float(begin[-1]), step * float(end[-1])
    if step < SHORT_ENOUGH:
        return False
    if first * last <= 0.0:
        return turned
    b, c = 2.0 * (3.0 * rise - 2.0 * first - last), 3.0 * (first + last - 2.0 * rise)
    where = -0.5 * b / c if c != 0.0 else -1.0
    return 0.0 < where < 1.0 and float(np.sign(first)) * (first + 0.5 * b * where) < -LEVEL_NOISE


def follow(
    equations: CurveEquations,
    x: Array,
    level: float,
    toward: float,
    low: float,
    high: float,
    scale: Array,
    deadline: float,
) -> Curve:
    """The curve from (x, level) in the direction in which the level first moves `toward` (+1 or -1), until it leaves [low, high], closes,
    sticks, or time is up. scale: (n + 1,) size of each unknown and of the level. The last point lies outside the range where it left it."""
    n = len(x)
    last = np.zeros(n + 1)
    last[n] = toward
    begun = tangent(equations, x, level, scale, last)
    xs, levels, tangents, lengths = [x], [level], [], [0.0]
    if begun is None:
        return Curve(np.array(xs), np.array(levels), np.zeros((1, n + 1)), np.zeros(1), "stuck")
    here, orientation = begun
    tangents.append(here)
    start, start_tangent = np.append(x / scale[:n], level / scale[n]), here
    step, end = FIRST_STEP, "stuck"
    left_start = turned = False
    while len(xs) < MAX_POINTS:
        if time.monotonic() > deadline:
            end = "time"
            break
        corrected = correct(
            equations, x + step * here[:n] * scale[:n], level + step * here[n] * scale[n], scale, here, step
        )
        new = tangent(equations, corrected[0], corrected[1], scale, here) if corrected is not None else None
        turn = float(np.arccos(np.clip(new[0] @ here, -1.0, 1.0))) if new is not None else np.pi
        # turned over: another branch was hit, unless one crosses right here
        hit = new is not None and new[1] != orientation and step > CROSSING_STEP
        cut = corrected is None or new is None or _turns_inside((corrected[1] - level) / scale[n], step, here, new[0], turned)
        if corrected is None or new is None or turn > TURN or hit or cut:
            step *= 0.4
            if step < SMALLEST_STEP:
                break
            continue
        point = np.append(corrected[0] / scale[:n], corrected[1] / scale[n])
        away = float(np.linalg.norm(point - start))
        if (
            left_start
            and away < 1.5 * step
            and float(new[0] @ start_tangent) > 0.5
            and float((start - point) @ new[0]) < step
        ):
            xs.append(xs[0])
            levels.append(levels[0])
            tangents.append(start_tangent)
            lengths.append(lengths[-1] + away)
            end = "closed"
            break
        left_start = left_start or away > 3.0 * LARGEST_STEP
        turned = bool(here[n] * new[0][n] < 0.0)
        x, level, (here, orientation) = corrected[0], corrected[1], new
        xs.append(x)
        levels.append(level)
        tangents.append(here)
        lengths.append(lengths[-1] + step)
        if level < low or level > high:
            end = "low" if level < low else "high"
            break
        grow = min(2.0, 0.5 * TURN / max(turn, 1e-3))
        step = min(LARGEST_STEP, step * max(0.3, grow) * (1.0 if corrected[2] <= 4 else 0.5))
    return Curve(np.array(xs), np.array(levels), np.array(tangents), np.array(lengths), end)


@dataclass(frozen=True, eq=False)
class FoldPoint:
    """A quadratic turning point: F = 0, J v = 0, l.v = 1. precision: last Newton step of the level, relative to its scale."""

    x: Array
    level: float
    v: Array
    precision: float


def fold(
    equations: CurveEquations, bend: Callable[[Array, float, Array], Array], slope_along: Callable[[Array, float, Array], Array],
    x: Array, level: float, v: Array, scale: Array,
) -> FoldPoint | None:  # fmt: skip
    """Newton on the fold equations from a point near one. bend(x, l, v): d(J v)/dx (n, n); slope_along(x, l, v): d(J v)/dl; v: (n,) near
    the null direction; scale: (n + 1,). None where it does not converge."""
    n = len(x)
    sx, sl = scale[:n], scale[n]
    v = v / sx
    v = v / np.linalg.norm(v)
    fixed = v.copy()
    matrix = np.zeros((2 * n + 1, 2 * n + 1))
    step = np.inf
    for _ in range(25):
        jacobian = equations.jacobian(x, level) * sx
        rows = np.max(np.abs(jacobian), axis=1)
        rows = 1.0 / np.where(rows > 0.0, rows, 1.0)
        real = v * sx
        matrix[:n, :n] = rows[:, None] * jacobian
        matrix[:n, 2 * n] = rows * equations.slope(x, level) * sl
        matrix[n : 2 * n, :n] = rows[:, None] * (bend(x, level, real) * sx)
        matrix[n : 2 * n, n : 2 * n] = matrix[:n, :n]
        matrix[n : 2 * n, 2 * n] = rows * slope_along(x, level, real) * sl
        matrix[2 * n, n : 2 * n] = fixed
        right = np.concatenate(
            [-rows * equations.residual(x, level), -rows * (jacobian @ v), [1.0 - fixed @ v]]
        )
        # the second block can be larger than the first by the curvature of the devices: one more scaling of its rows
        tops = np.max(np.abs(matrix), axis=1)
        tops = np.where(tops > 0.0, tops, 1.0)
        try:
            change = np.linalg.solve(matrix / tops[:, None], right / tops)
        except np.linalg.LinAlgError:
            return None
        if not np.all(np.isfinite(change)):
            return None
        size = float(np.max(np.abs(change)))
        damping = min(1.0, 0.5 / size) if size > 0.5 else 1.0
        x = x + damping * change[:n] * sx
        v = v + damping * change[n : 2 * n]
        level = float(level + damping * change[2 * n] * sl)
        previous, step = step, abs(float(change[2 * n]))
        if (size < 1e-9 and step < 1e-13) or (size < 1e-7 and step >= previous and step < 1e-11):
            return FoldPoint(x, level, v * sx / np.linalg.norm(v * sx), step)
    return None
