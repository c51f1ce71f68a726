"""A system in time, laid out for the integrator: sources by their waveforms, scales of the unknowns, consistent starts.

Shared by `transient` and `cycle`. What an error means is set here: relative to the largest size that each unknown has had so far, so
that `tolerance` is an error over an amplitude; branch currents without an inductor follow from the rest and are not tested.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
import scipy.linalg
import scipy.sparse
import scipy.sparse.linalg
from numpy.typing import NDArray
from scipy.linalg.lapack import dgetrf, dgetrs

from loopsim.devices.waveforms import Points, Ramp, Sine, Square
from loopsim.equations.system import System
from loopsim.errors import AnalysisError
from loopsim.numerics.radau import Equations, Path, Waves, equations, integrate

Array: TypeAlias = NDArray[np.float64]

VOLT_FLOOR = 1e-3  # of the largest supply: below this size an error no longer counts relative to the net's own voltage
AMPERE_FLOOR = 1e-6  # A per volt of supply, the same for inductor currents
PATIENCE = 60  # Newton steps of a start; twenty are many
INSTANT = 1e-12  # of the duration: how long the first moment lasts in which only algebraic unknowns move


@dataclass(frozen=True, eq=False)
class Motion:
    """One system ready to be integrated. base (n,), waves: its sources; volts: size of its supplies [V]; floor (n,): size of each unknown
    that counts as small; tested (n,): 1 where errors count; index_two (n,): 1 for unknowns that follow from a derivative."""

    system: System
    eq: Equations
    base: Array
    waves: Waves
    volts: float
    floor: Array
    tested: Array
    index_two: NDArray[np.int64]

    def solve(
        self,
        x: Array,
        start: float,
        end: float,
        tolerance: float,
        *,
        kept: Any = None,
        max_step: float = np.inf,
        first_step: float | None = None,
        peak: Array | None = None,
        progress: Callable[[float], None] | None = None,
        keep_interrupted: bool = False,
    ) -> Path:
        """Integrate from x; tolerance: error over amplitude."""
        return integrate(
            self.eq, x, start, end, self.base, rtol=tolerance, atol=tolerance * self.floor, waves=self.waves,
            peak=self.floor if peak is None else peak, kept=kept, max_step=max_step, first_step=first_step,
            index_two=self.index_two, error_weight=self.tested, progress=progress, keep_interrupted=keep_interrupted,
        )  # fmt: skip

    def source(self, time: float) -> Array:
        """s(time): (n,)."""
        total = self.base.copy()
        if len(self.waves.forms):
            share = _value(self.waves, 0, time)
            total += self.waves.columns[0] * share
            for k in range(1, len(self.waves.forms)):
                total += self.waves.columns[k] * share * _value(self.waves, k, time)
        return total


def motion(system: System, x: Array, duration: float, ramp: float = 0.0) -> Motion:
    """Lay `system` out. ramp: time in which all supplies come up together from nothing [s], 0: they are up. x: where it starts,
    duration [s]: how long it will run; with the supplies they tell what is small and what is short."""
    base, waves = _sources(system, ramp)
    volt_rows = np.array([unit == "V" for unit in system.row_units] or [False] * system.n)
    extents = np.abs(system.s) + sum((np.abs(timed.column) * _extent(timed.waveform) for timed in system.timed), np.zeros(system.n))
    nets = np.array([kind == "net" for kind, _ in system.unknowns])
    volts = float(np.max(extents[volt_rows], initial=0.0))
    volts = max(volts if volts > 0.0 else 1.0, float(np.max(np.abs(x[nets]), initial=0.0)))
    moving = np.abs(system.C).sum(axis=0) > 0.0
    current = np.array([kind == "current" for kind, _ in system.unknowns])
    floor = np.where(current, AMPERE_FLOOR * volts, VOLT_FLOOR * volts)
    eq = equations(system.C, system.G, system.B, system.W, system.c, system.kinds, system.parameters, system.V, system.d)
    return Motion(
        system=system,
        eq=eq,
        base=base,
        waves=waves,
        volts=volts,
        floor=floor,
        tested=np.where(current & ~moving, 0.0, 1.0),
        index_two=_index_two(system, x, duration),
    )


def _index_two(system: System, x: Array, duration: float) -> NDArray[np.int64]:
    """1 for unknowns that follow from a derivative (currents in loops of capacitors and sources, voltages across cuts of inductors and
    sources): an implicit step moves them in inverse proportion to its length."""
    right = np.random.default_rng(1).uniform(0.5, 1.5, system.n)
    jac = scipy.sparse.csc_array(system.jacobian(x))
    sizes = []
    for share in (1e-9, 1e-12):
        try:
            factors = scipy.sparse.linalg.splu(scipy.sparse.csc_array(system.C / (share * duration) + jac))
        except RuntimeError:
            return np.zeros(system.n, dtype=np.int64)
        sizes.append(np.abs(factors.solve(right)))
    return (sizes[1] > 30.0 * sizes[0]).astype(np.int64)


def _extent(waveform: Any) -> float:
    """Largest size of a waveform."""
    match waveform:
        case Sine():
            return abs(float(waveform.offset)) + abs(float(waveform.amplitude))
        case Square():
            return max(abs(float(waveform.low)), abs(float(waveform.high)))
        case Ramp():
            return max(abs(float(waveform.from_)), abs(float(waveform.to)))
        case Points():
            return max(abs(float(v)) for v in waveform.values)
    raise TypeError(f"not a waveform: {waveform!r}")


def _encoded(waveform: Any) -> tuple[int, Array]:
    """Form and numbers of a waveform as the kernel reads them (kernel.wave_piece)."""
    from loopsim.numerics import kernel

    match waveform:
        case Sine():
            numbers = [
                waveform.offset, waveform.amplitude, 2.0 * np.pi * float(waveform.frequency), waveform.phase, waveform.delay
            ]  # fmt: skip
            return kernel.SINE, np.array([float(v) for v in numbers])
        case Square():
            rise, width, fall = (float(v) for v in waveform.shape)
            low, high = float(waveform.low), float(waveform.high)
            corners = [0.0, low, rise, high, rise + width, high, rise + width + fall, low]
            return kernel.LINEAR, np.array([float(waveform.period), float(waveform.delay), *corners])
        case Ramp():
            ends = [0.0, float(waveform.from_), float(waveform.duration), float(waveform.to)]
            return kernel.LINEAR, np.array([0.0, float(waveform.start), *ends])
        case Points():
            pairs = np.column_stack([np.asarray(waveform.times, dtype=float), np.asarray(waveform.values, dtype=float)])
            return kernel.LINEAR, np.concatenate([[0.0, 0.0], pairs.ravel()])
    raise TypeError(f"not a waveform: {waveform!r}")


def _sources(system: System, ramp: float) -> tuple[Array, Waves]:
    """Constant part of the sources, and the rest for the kernel."""
    from loopsim.numerics import kernel

    s = np.asarray(system.s, dtype=float)
    if ramp <= 0.0 and not system.timed:
        return s, Waves(np.zeros(0, dtype=np.int64), (), np.zeros((0, system.n)))
    at_zero = sum((timed.column * float(timed.waveform.value(0.0)) for timed in system.timed), np.zeros(system.n))
    if ramp > 0.0:
        base, scaled = s - system.supply, system.supply - at_zero
        rise = np.array([0.0, 0.0, 0.0, 0.0, ramp, 1.0])
    else:
        base, scaled = s - at_zero, np.zeros(system.n)
        rise = np.array([0.0, 0.0, 0.0, 1.0])
    encoded = [_encoded(timed.waveform) for timed in system.timed]
    sines = [timed.waveform for timed in system.timed if isinstance(timed.waveform, Sine) and float(timed.waveform.amplitude) != 0.0]

    def corners(start: float, end: float) -> list[float]:
        found = [ramp] if ramp > 0.0 else []
        for timed in system.timed:
            found += timed.waveform.corners(start, end)
        return found

    return base, Waves(
        forms=np.array([kernel.LINEAR, *(form for form, _ in encoded)], dtype=np.int64),
        data=(rise, *(numbers for _, numbers in encoded)),
        columns=np.array([scaled, *(timed.column for timed in system.timed)]),
        corners=corners,
        fastest=min((1.0 / float(sine.frequency) for sine in sines if float(sine.frequency) > 0.0), default=np.inf),
    )


def _value(waves: Waves, k: int, time: float) -> float:
    """Value of wave k."""
    from loopsim.numerics import kernel

    data = waves.data[k]
    if waves.forms[k] == kernel.SINE:
        return float(data[0] + data[1] * np.sin(data[2] * max(time - data[4], 0.0) + data[3]))
    local = time - data[1]
    if data[0] > 0.0 and local > 0.0:
        local -= data[0] * np.floor(local / data[0])
    return float(np.interp(local, data[2::2], data[3::2]))


def newton(system: System, x: Array, s: Array, *, push: float = 0.0, anchor: Array | None = None) -> Array | None:
    """A solution of G x + B psi - s + push C (x - anchor) = 0 near x by damped Newton, or None.

    push 0: at rest; push 1 / h: one implicit step of length h from `anchor`. Damping: a step that does not shrink the next one is halved
    (P. Deuflhard, Newton Methods for Nonlinear Problems, 2004, ch. 3, from memory).
    """
    anchor = x if anchor is None else anchor

    def residual(z: Array) -> Array:
        return np.asarray(system.residual(z, s) + push * (system.C @ (z - anchor)))

    with np.errstate(all="ignore"):
        for _ in range(PATIENCE):
            lu, pivots, info = dgetrf(system.jacobian(x) + push * system.C)
            if info != 0:
                return None
            step = -dgetrs(lu, pivots, residual(x))[0]
            if not np.all(np.isfinite(step)):
                return None
            if np.all(np.abs(step) <= 1e-12 * np.abs(x) + 1e-15):
                return np.asarray(x + step)
            damping = 1.0
            while damping > 1e-6:
                trial = x + damping * step
                again = -dgetrs(lu, pivots, residual(trial))[0]
                if np.linalg.norm(again) <= (1.0 - 0.25 * damping) * np.linalg.norm(step) or np.linalg.norm(again) <= 1e-14:
                    break
                damping *= 0.5
            x = x + damping * step
    return None


def held_start(given: Mapping[str, float], system: System, s: Array, duration: float) -> Array:
    """The state at time 0 in which the given nets have the given voltages, inductors carry nothing, and all else is at rest around
    that; then it is let go: capacitors keep their charge and inductors their current, the rest follows at once.

    AnalysisError `start` where that cannot be.
    """
    nets = list(given)
    places = [system.index[("net", net)] for net in nets]
    volts = np.array([given[net] for net in nets], dtype=float)
    coils = [j for j, (kind, _) in enumerate(system.unknowns) if kind == "current" and np.any(system.C[:, j] != 0.0)]
    n, k = system.n, len(nets) + len(coils)
    # a current into each held net and a voltage in each coil make up for what holds them
    pick, hold = np.zeros((n, k)), np.zeros((k, n))
    pick[places, np.arange(len(nets))] = 1.0
    for i, j in enumerate(coils):
        pick[:, len(nets) + i] = system.C[:, j] / np.max(np.abs(system.C[:, j]))
    hold[np.arange(k), places + coils] = 1.0
    wanted = np.concatenate([volts, np.zeros(len(coils))])
    x, feed = np.zeros(n), np.zeros(k)
    x[places] = volts
    for _ in range(2 * PATIENCE):
        matrix = np.block([[system.jacobian(x), -pick], [hold, np.zeros((k, k))]])
        right = -np.concatenate([system.residual(x, s) - pick @ feed, hold @ x - wanted])
        try:
            step = np.linalg.solve(matrix, right)
        except np.linalg.LinAlgError:
            step = np.linalg.lstsq(matrix, right, rcond=None)[0]
        largest = float(np.max(np.abs(step[:n]), initial=0.0))
        damping = min(1.0, max(0.5, float(np.max(np.abs(x), initial=1.0))) / max(largest, 1e-300))
        x, feed = x + damping * step[:n], feed + damping * step[n:]
        if damping == 1.0 and largest <= 1e-10 * max(1.0, float(np.max(np.abs(x)))):
            break
    else:
        raise AnalysisError("start", f"no state has {_listed(given)} with the rest at rest around it")
    off = np.abs(x[places] - volts)
    if np.any(off > 1e-6 * np.maximum(1.0, np.abs(volts))):
        worst = nets[int(np.argmax(off))]
        held = x[places[int(np.argmax(off))]]
        raise AnalysisError("start", f"{worst} cannot start at {given[worst]:g} V: a source holds it at {held:.6g} V")
    released = newton(system, x, s, push=1.0 / (INSTANT * duration), anchor=x)
    if released is None:
        raise AnalysisError("start", f"the circuit cannot be let go from {_listed(given)}")
    return released


def _listed(nets: Mapping[str, float]) -> str:
    return ", ".join(f"{net} = {volts:g} V" for net, volts in nets.items())


def growing_direction(system: System, x: Array) -> tuple[complex, Array] | None:
    """The fastest growing eigenvalue of C x' = -J x at a rest point [1/s] and its direction (real part, largest net 1), or None where
    nothing grows."""
    with np.errstate(all="ignore"):
        values, vectors = scipy.linalg.eig(-system.jacobian(x), system.C)
        size = np.abs(values)
        # an infinite eigenvalue comes out as a huge one whose direction stores nothing
        stored = np.linalg.norm(system.C @ vectors, axis=0) * size
        pushed = np.linalg.norm(system.jacobian(x) @ vectors, axis=0)
        finite = np.isfinite(values) & (size < 1e30) & (np.abs(stored - pushed) <= 1e-6 * np.maximum(stored, pushed))
    nets = np.array([kind == "net" for kind, _ in system.unknowns])
    growing = np.flatnonzero(finite & (values.real > 1e-9 * np.where(finite, size, 0.0)))
    if not len(growing):
        return None
    best = growing[int(np.argmax(values[growing].real))]
    direction = vectors[:, best]
    pivot = direction[nets][int(np.argmax(np.abs(direction[nets])))] if np.any(nets) else direction[int(np.argmax(np.abs(direction)))]
    return complex(values[best]), np.asarray((direction / pivot).real)
