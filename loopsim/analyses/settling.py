"""Where a circuit comes to rest after a jump: its own dynamics in growing implicit steps, several starts at once."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.stability import STRAY
from loopsim.equations.system import System
from loopsim.numerics.newton import newton, solve

Array: TypeAlias = NDArray[np.float64]

STEPS = 400
FIRST_STEP = 1e-12  # [s] below the fastest time of any shipped circuit
LAST_STEP = 1e6  # [s] at rest even for the slowest
SHORTEST_STEP = 1e-20  # [s]
ROUNDS = 10  # of Newton a step; more means the step is too long
NEAR = 0.3  # relative movement up to which undamped Newton is believed
TIGHT = 1e-12  # last round: beside a fold the way out begins with movements of 1e-9, which must not be taken for rest
ARRIVED = 1e-4  # of a net's travel: so near to a stable state, and nearing it, the rest of the way is known


def settle_all(system: System, sources: Array, x: Array, rests: Sequence[Array], size: Array) -> list[Array | None]:
    """Where the circuit comes to rest from each x with its own dynamics (and a stray on each net that has none); None when it does not.

    sources: (b, n) s of each start; x: (b, n); rests: (k, n) known stable states for each start: one that is drawn in to ARRIVED of `size`
    (n,) ends its run. Implicit Euler damps what the circuit damps, and its last steps are Newton's on the equilibrium.
    """
    b = len(x)
    dynamics = _with_strays(system)
    y, h = x.copy(), np.full(b, FIRST_STEP)
    away = np.full(b, np.inf)
    found: list[Array | None] = [None] * b
    running = np.ones(b, dtype=bool)
    for _ in range(STEPS):
        at = np.flatnonzero(running)
        if len(at) == 0:
            break
        moved_to, good = _implicit(system, sources[at], y[at], dynamics / h[at][:, None, None])
        h[at[~good]] *= 0.25
        running[at[~good & (h[at] < SHORTEST_STEP)]] = False
        moved = np.max(np.abs(moved_to - y[at]) / (1.0 + np.abs(y[at])), axis=1)
        for i, k in enumerate(at):
            if not good[i]:
                continue
            y[k] = moved_to[i]
            near, distance = _nearest(y[k], rests[int(k)], size)
            if near is not None and distance < ARRIVED and distance < away[k]:
                found[k], running[k] = near, False
            away[k] = distance
            # growth near the fold is slow and must be let develop: the step grows only while the state moves little per step
            h[k] *= 8.0 if moved[i] < 1e-3 else 3.0 if moved[i] < 0.05 else 1.0 if moved[i] < 0.3 else 0.5
            if running[k] and h[k] > LAST_STEP and moved[i] < 1e-9:
                found[k], running[k] = _rest(system, sources[k], y[k]), False
    return found


def _with_strays(system: System) -> Array:
    """C with a stray capacitance on each net that has no dynamics of its own."""
    dynamics = system.C.copy()
    for j, (kind, _) in enumerate(system.unknowns):
        bare = kind != "current" and not np.any(system.C[:, j] != 0.0)
        if bare and (not system.row_units or system.row_units[j] == "A"):
            dynamics[j, j] += STRAY
    return dynamics


def _implicit(system: System, sources: Array, y: Array, mass: Array) -> tuple[Array, NDArray[np.bool_]]:
    """One implicit step from each y: (where to, whether Newton settled). mass: (b, n, n) C over the step."""
    z = y.copy()
    last = np.full(len(y), np.inf)
    with np.errstate(all="ignore"):
        for turn in range(ROUNDS):
            residual = system.residual(z, sources) + (mass @ (z - y)[..., None])[..., 0]
            step = solve(system.jacobian(z) + mass, -residual)
            z = z + step
            length = np.max(np.abs(step) / (1.0 + np.abs(z)), axis=1)
            done = (length <= TIGHT) | ((length < 1e-9) & (length >= 0.5 * last))
            if done.all() or (turn > 2 and not np.any(length < last)):
                break
            last = length
    # undamped Newton that goes far may end on another sheet of an exponential
    good = done & (np.max(np.abs(z - y) / (1.0 + np.abs(y)), axis=1) < NEAR)
    bad = np.flatnonzero(~good)
    if len(bad):
        # exponentials want damping; most steps do not, and cost half as much without it
        def residual_of(v: Array) -> Array:
            return system.residual(v, sources[bad]) + (mass[bad] @ (v - y[bad])[..., None])[..., 0]

        damped = newton(residual_of, lambda v: system.jacobian(v) + mass[bad], y[bad], max_steps=2 * ROUNDS)
        z[bad], good[bad] = damped.x, damped.converged
    return z, good


def _nearest(y: Array, rests: Array, size: Array) -> tuple[Array | None, float]:
    if len(rests) == 0:
        return None, np.inf
    distances = np.max(np.abs(rests - y) / size, axis=1)
    i = int(np.argmin(distances))
    return np.asarray(rests[i]), float(distances[i])


def _rest(system: System, sources: Array, y: Array) -> Array | None:
    final = newton(lambda z: system.residual(z, sources), system.jacobian, y[None], max_steps=20)
    return np.asarray(final.x[0]) if final.converged[0] else None


__all__ = ["settle_all"]
