"""The step loop of `kernel.advance` for large systems where there is no compiler: whole-array operations and SuperLU.

Step control, Newton's verdict and the waveforms are the kernel's own functions; only what loops over unknowns is written again.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
import scipy.sparse
import scipy.sparse.linalg
from numpy.typing import NDArray

from loopsim.devices import phi
from loopsim.numerics import kernel

if TYPE_CHECKING:
    from loopsim.numerics.radau import Equations, Tableau, Waves

Array: TypeAlias = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Plain:
    """One system as sparse matrices. C, A = [G B], W, V; kinds: (kind, its rows, its parameters (p, rows)) of each kind."""

    C: Any
    A: Any
    W: Any
    V: Any
    c: Array
    d: Array
    groups: tuple[tuple[int, NDArray[np.int64], Array], ...]

    def right_side(self, x: Array, source: Array) -> Array:
        """source - G x - B psi; x: (..., n) one row a state."""
        w, u = (self.W @ x.T).T + self.c, (self.V @ x.T).T + self.d
        values = np.empty(w.shape)
        for kind, rows, p in self.groups:
            values[..., rows] = phi.VALUE[kind](w[..., rows], p)
        return np.asarray(source - (self.A @ np.concatenate([x, values * u], axis=-1).T).T)


def plain(eq: Equations) -> Plain:
    """The matrices of `eq`."""

    def matrix(rows: Any, width: int) -> Any:
        starts, columns, values = rows
        return scipy.sparse.csr_array((values, columns, starts), shape=(len(starts) - 1, width))

    groups = []
    for kind in np.unique(eq.kinds):
        rows = np.flatnonzero(eq.kinds == kind)
        groups.append((int(kind), rows, eq.parameters[rows].T))
    n = eq.n
    return Plain(
        matrix(eq.storage, n), matrix(eq.rows, n + eq.m), matrix(eq.control, n), matrix(eq.product, n), eq.c, eq.d, tuple(groups)
    )  # fmt: skip


def advance(
    eq: Equations, waves: Waves, method: Tableau, jacobian_values: Callable[[Equations, Array], Array], x: Array, peak: Array,
    control: Array, state: Array, counts: Any, corners: Array, kept: Any, base: Array, relative: Array, absolute: Array, index_two: Any,
    error_weight: Array, polynomial: Array, out_time: Array, out_step: Array, out_x: Array, out_p: Array,
) -> tuple[int, int]:  # fmt: skip
    """As `kernel.advance`: step on until the last corner or until the record is full; (what stopped it, steps recorded)."""
    arrays = plain(eq)
    stages, n = len(method.nodes), eq.n
    limit = 7 + (5 * (stages - 3)) // 2
    columns, starts, data = waves.laid_out
    pieces = np.zeros((len(waves.forms), 3))
    time, step = float(state[kernel.TIME]), float(state[kernel.STEP])
    recorded, rejected_last, chosen, stuck = 0, False, False, 0
    slope, values, scale = np.zeros(n), eq.base_jac, np.ones(n)

    def source(at: float) -> Array:
        total = base.copy()
        for k in range(len(waves.forms)):
            share = kernel.wave_at(waves.forms[k], data, starts[k], pieces[k], at)
            ramp = 1.0 if k == 0 else kernel.wave_at(waves.forms[0], data, starts[0], pieces[0], at)
            part = slice(columns[0][k], columns[0][k + 1])
            total[columns[1][part]] += columns[2][part] * share * ramp
        return total

    def factors(shift: complex) -> Any:
        return scipy.sparse.linalg.splu(scipy.sparse.csc_array((shift * eq.mass + values, eq.pattern), shape=(n, n)))

    def stop(reason: int) -> tuple[int, int]:
        state[kernel.TIME], state[kernel.STEP] = time, step
        return reason, recorded

    while counts[kernel.CORNER] < len(corners):
        if recorded == len(out_time):
            return stop(kernel.FULL)
        corner = float(corners[counts[kernel.CORNER]])
        step = kernel.clip_to_corner(time, step, corner, control[kernel.MAX_STEP])
        if not step > control[kernel.MIN_STEP] * max(abs(time), abs(corner - time) * 1e-6):
            if corner - time <= 4e-16 * abs(corner):
                time = corner
                counts[kernel.CORNER] += 1
                continue
            return stop(kernel.TOO_SMALL)
        if counts[kernel.FRESH] or not chosen:
            kernel.choose_pieces(waves.forms, starts, data, time + 0.5 * step, pieces)
            chosen = True
        if counts[kernel.FRESH]:
            counts[kernel.FRESH] = 0
            state[kernel.POLYNOMIAL_STEP] = 0.0
        if not rejected_last:
            scale = absolute + relative * np.maximum(np.abs(x), control[kernel.PEAK_SHARE] * peak)
            values = jacobian_values(eq, x)
            slope = arrays.right_side(x, source(time))
        weight = error_weight * np.where(index_two != 0, min(1.0, step / control[kernel.INDEX_TWO_SPAN]), 1.0)
        counts[kernel.FACTORS] += 1
        try:
            real = factors(method.order_real / step)
            pairs = [factors(complex(a, b) / step) for a, b in zip(method.pairs_real, method.pairs_imaginary, strict=True)]
        except RuntimeError:  # exactly singular: at another length it is not
            step *= 0.5
            rejected_last = True
            counts[kernel.REJECTED] += 1
            continue
        before = state[kernel.POLYNOMIAL_STEP]
        Z = _carried_on(polynomial, step / before, method.nodes) if before > 0.0 else np.zeros((stages, n))
        P = method.inverse @ Z
        sources = np.array([source(time + c * step) for c in method.nodes])
        state[kernel.RATE] = max(max(state[kernel.RATE], 1e-16) ** 0.8, kernel.UNSEEN)
        verdict, iterations = -1.0, 0
        while verdict < 0.0 and iterations < limit:
            R = _residual(method, step, P, arrays.right_side(x + Z, sources), arrays.C)
            R[0] = real.solve(R[0])
            for p, pair in enumerate(pairs):
                found = pair.solve(R[1 + 2 * p] + 1j * R[2 + 2 * p])
                R[1 + 2 * p], R[2 + 2 * p] = found.real, found.imag
            P += R
            Z = method.transform @ P
            size = float(np.sqrt(np.mean((weight * R / scale) ** 2)))
            rounding = min(1.0, kernel.ROUNDING * 2.0**stuck)
            verdict = kernel.newton_verdict(iterations, limit, False, True, rounding, size, state, control)
            iterations += 1
        counts[kernel.EVALUATIONS] += iterations * stages
        if verdict != 0.0:
            counts[kernel.WORST] = int(np.nanargmax(np.abs(weight * R[0] / scale))) if np.any(np.isfinite(R[0])) else 0
            counts[kernel.NEWTON_FAILED] += 1
            counts[kernel.REJECTED] += 1
            stuck += 1
            step *= verdict if verdict > 0.0 else 0.5
            state[kernel.RATE] = 1.0
            rejected_last = True
            continue
        pull = method.order_real / step * (arrays.C @ (method.error_weights @ Z))
        error = real.solve(slope + pull)
        size = float(np.sqrt(np.mean((weight * error / scale) ** 2)))
        if size >= 1.0 and (rejected_last or counts[kernel.FIRST]):
            error = real.solve(arrays.right_side(x + error, source(time)) + pull)
            size = float(np.sqrt(np.mean((weight * error / scale) ** 2)))
        size = max(size, 1e-10)
        if not size < 1.0:
            counts[kernel.WORST] = int(np.argmax(np.abs(weight * error / scale)))
            counts[kernel.REJECTED] += 1
            harsh = counts[kernel.FIRST] or not size < 1e300
            step *= 0.1 if harsh else 1.0 / kernel.error_factor(size, stages, iterations, limit)
            rejected_last = True
            continue
        polynomial[:] = method.monomials @ Z
        out_time[recorded], out_step[recorded] = time, step
        out_x[recorded], out_p[recorded] = x[kept], polynomial[:, kept]
        recorded += 1
        stuck = 0
        counts[kernel.STEPS] += 1
        state[kernel.POLYNOMIAL_STEP] = step
        x += Z[-1]
        np.maximum(peak, np.abs(x), out=peak)
        proposed = kernel.next_step(size, step, stages, iterations, limit, state, counts)
        if state[kernel.THETA] > 0.0:
            proposed = min(proposed, step * max(0.2, kernel.BEND / state[kernel.THETA]))
        counts[kernel.FIRST] = 0
        proposed = min(proposed, step) if rejected_last else proposed
        rejected_last = False
        if step >= corner - time:
            time = corner
            counts[kernel.CORNER] += 1
            counts[kernel.FRESH] = counts[kernel.FIRST] = 1
        else:
            time += step
        step = proposed
    return stop(kernel.DONE)


def _carried_on(polynomial: Array, ratio: float, nodes: Array) -> Array:
    """Stages of the next step from the last step's polynomial."""
    powers = (1.0 + nodes * ratio)[:, None] ** np.arange(1, len(nodes) + 1)
    return np.asarray(powers @ polynomial - polynomial.sum(axis=0))


def _residual(method: Tableau, step: float, P: Array, F: Array, C: Any) -> Array:
    """T^-1 F - (Lambda / step) C P, by blocks."""
    mass_times = (C @ P.T).T
    R = method.inverse @ F
    R[0] -= method.order_real / step * mass_times[0]
    for p, (re, im) in enumerate(zip(method.pairs_real / step, method.pairs_imaginary / step, strict=True)):
        u, v = mass_times[1 + 2 * p], mass_times[2 + 2 * p]
        R[1 + 2 * p] -= re * u - im * v
        R[2 + 2 * p] -= im * u + re * v
    return np.asarray(R)
