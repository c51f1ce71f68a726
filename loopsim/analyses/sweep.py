"""Operating points by following curves and by trying starts: quick, and no proof of anything.

The sources are raised from nothing by arclength continuation, which passes folds; every crossing of their full value is a point
(homotopy by source stepping; H. B. Keller 1977 for the arclength, from memory). A few damped Newton starts are added.
"""

from __future__ import annotations

import time
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.equations.system import System
from loopsim.numerics.newton import newton, solve

Array: TypeAlias = NDArray[np.float64]

STARTS = 6  # Newton starts beside the curve
START_SPREAD = 10.0  # [V] of the random starts
SEED = 7
FIRST_STEP, LARGEST_STEP, SMALLEST_STEP = 0.05, 0.5, 1e-8
BEYOND = 1.6  # the curve is left when the sources are raised this far above their value
CORRECTIONS = 6
SAME = 1e-7  # relative distance of two points that are one


def sweep(system: System, *, budget: float = 1.0) -> Array:
    """Points found within `budget` seconds: (k, n), different ones, each with a Newton step at rounding level."""
    deadline = time.monotonic() + budget
    found = list(_along_sources(system, deadline))
    if time.monotonic() < deadline:
        rng = np.random.default_rng(SEED)
        starts = rng.uniform(-START_SPREAD, START_SPREAD, (STARTS, system.n))
        roots = newton(system.residual, system.jacobian, starts, max_steps=40)
        found += list(roots.x[roots.converged])
    return distinct(np.array(found).reshape(-1, system.n))


def distinct(points: Array) -> Array:
    """Without those that repeat an earlier one to SAME."""
    kept: list[Array] = []
    for x in points:
        if not any(np.all(np.abs(x - y) <= SAME * (1.0 + np.abs(x))) for y in kept):
            kept.append(x)
    return np.array(kept).reshape(-1, points.shape[1])


def _along_sources(system: System, deadline: float) -> list[Array]:
    """Points where the curve from the circuit without supplies crosses the full supplies."""
    base = system.s - system.supply

    def residual(x: Array, level: float) -> Array:
        return system.residual(x, base + level * system.supply)

    start = newton(lambda x: system.residual(x, base), system.jacobian, np.zeros((1, system.n)))
    if not start.converged[0]:
        return []
    x, level = start.x[0], 0.0
    tangent = np.zeros(system.n + 1)
    tangent[-1] = 1.0
    step = FIRST_STEP
    found: list[Array] = []
    with np.errstate(all="ignore"):
        while time.monotonic() < deadline and -0.5 < level < BEYOND:
            direction = _direction(system, x, tangent)
            if direction is None:
                break
            corrected = _correct(
                system, residual, x + step * direction[:-1], level + step * direction[-1], direction
            )
            far = (
                corrected is None or np.max(np.abs(corrected[0] - x) / (1.0 + np.abs(x))) > 4.0 * step + 1e-9
            )
            if corrected is None or far:
                step *= 0.4
                if step < SMALLEST_STEP:
                    break
                continue
            y, new_level, count = corrected
            if (level - 1.0) * (new_level - 1.0) <= 0.0 and new_level != level:
                share = (1.0 - level) / (new_level - level)
                root = newton(system.residual, system.jacobian, (x + share * (y - x))[None], max_steps=30)
                if root.converged[0]:
                    found.append(root.x[0])
            x, level, tangent = y, new_level, direction
            step = min(LARGEST_STEP, step * (2.0 if count <= 2 else 1.0 if count <= 4 else 0.6))
    return found


def _direction(system: System, x: Array, last: Array) -> Array | None:
    """Unit tangent of the curve at x, oriented with the last one. Voltages and amperes are weighed alike: both are of order one here."""
    n = system.n
    bordered = np.zeros((n + 1, n + 1))
    bordered[:n, :n] = system.jacobian(x)
    bordered[:n, n] = -system.supply
    bordered[n] = last
    right = np.zeros(n + 1)
    right[n] = 1.0
    tangent = solve(bordered[None], right[None])[0]
    size = float(np.linalg.norm(tangent))
    return tangent / size if np.isfinite(size) and size > 0.0 else None


def _correct(
    system: System, residual: object, x: Array, level: float, direction: Array
) -> tuple[Array, float, int] | None:
    """Newton back to the curve in the plane across the step; None where it does not come back quickly."""
    assert callable(residual)
    n = system.n
    bordered = np.zeros((n + 1, n + 1))
    bordered[:n, n] = -system.supply
    bordered[n] = direction
    for count in range(1, CORRECTIONS + 1):
        bordered[:n, :n] = system.jacobian(x)
        change = solve(bordered[None], -np.append(residual(x, level), 0.0)[None])[0]
        if not np.all(np.isfinite(change)):
            return None
        x, level = x + change[:n], level + float(change[n])
        if np.max(np.abs(change[:n]) / (1.0 + np.abs(x))) < 1e-9:
            return x, level, count
    return None
