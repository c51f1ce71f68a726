"""Sustained oscillation: its period, shape and stability.

The circuit runs until its state comes back; shooting then makes one period exact: find x and T with flow(x, T) = x, by Newton with
the monodromy matrix M = d flow / d x, whose eigenvalues (Floquet multipliers) judge the cycle. M is the product of the exact
derivatives of the steps that were taken, each from the collocation equations of Radau IIA (T. S. Parker, L. O. Chua, Practical
Numerical Algorithms for Chaotic Systems, 1989, ch. 5, for shooting; from memory).
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.motion import Motion, growing_direction, motion, newton
from loopsim.analyses.transient import Start, _start, _watched
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble, parameter_values
from loopsim.equations.structure import check
from loopsim.equations.system import System
from loopsim.errors import AnalysisError
from loopsim.numerics.radau import Path, crossings, prepare, tableau

Array: TypeAlias = NDArray[np.float64]

SEARCH_TOLERANCE = 1e-5  # of the run that looks for a cycle
TOLERANCE = 1e-8  # of the period that shooting works on
LENGTHEN = 4.0  # each further stretch of the search over the last
MAX_STEPS = 1_000_000  # of the search
SAME = 2e-3  # of the swings: states this close are the same one come back
SHOTS = 12  # Newton steps of the shooting; three or four are usual
MARGIN = 1e-3  # a multiplier's size within this of 1 (or within the error of the one that must be 1) is not judged
TINY_NUDGE = 1e-3  # of the supplies: how far an unstable rest point is left in the search
BATCH = 2_000_000  # numbers in one batch of step derivatives


@dataclass(frozen=True, eq=False)
class Cycle:
    """One periodic motion.

    period [s]; multipliers: (n,) Floquet multipliers, largest first, the one that belongs to a shift in time left out; stable: True,
    False or None; shift_error: how far the multiplier left out is from 1, a measure of the arithmetic. x: (n,) unknowns at the phase
    where the watched net passes its middle upwards. path: one period from there. exact: False where shooting did not converge and
    everything is read off the run.
    """

    circuit: str
    file: str | None
    settings: Mapping[str, float]
    start: str
    period: float
    multipliers: NDArray[np.complex128]
    stable: bool | None
    shift_error: float
    x: Array
    watch: tuple[str, ...]
    nets: tuple[str, ...]
    path: Path
    columns: Mapping[tuple[str, str], int]
    exact: bool
    seconds: float
    notes: tuple[str, ...] = field(default=())

    @property
    def frequency(self) -> float:
        """Cycles per second [Hz]."""
        return 1.0 / self.period

    @property
    def verdict(self) -> str:
        """How the cycle answers a small disturbance."""
        if self.stable is None:
            return "undecided"
        return "stable cycle" if self.stable else "unstable cycle"

    @property
    def times(self) -> Array:
        """From 0 to one period [s]."""
        return self.path.grid[0]

    def __getitem__(self, net: str) -> Array:
        """Voltage of a net [V] at `times`."""
        return self.path.grid[1][:, self.columns[("net", net)]]

    def at(self, time: Any) -> dict[str, Any]:
        """Every net [V] at a time or an array of times, carried on periodically."""
        wanted = np.mod(np.asarray(time, dtype=float), self.period)
        values = self.path.at(np.atleast_1d(wanted))
        found = {net: values[:, self.columns[("net", net)]] for net in self.nets}
        return found if wanted.ndim else {net: float(column[0]) for net, column in found.items()}

    def extremes(self, net: str) -> tuple[float, float]:
        """Lowest and highest voltage of a net in the period [V]."""
        column = self.columns[("net", net)]
        low, high = (float(sign * _top(self.path, column, sign)) for sign in (-1.0, 1.0))
        return low, high

    def swing(self, net: str) -> float:
        """Highest less lowest voltage [V]."""
        low, high = self.extremes(net)
        return high - low

    def duty(self, net: str) -> float:
        """Share of the period that the net spends above the middle of its swing."""
        low, high = self.extremes(net)
        times, signs = crossings(self.path, self.columns[("net", net)], 0.5 * (low + high))
        if not len(times):
            return 0.0
        start = float(self[net][0] >= 0.5 * (low + high))
        marks = np.concatenate([[0.0], times, [float(self.times[-1])]])
        above = np.concatenate([[start], (signs > 0).astype(float)])
        return float(np.sum(np.diff(marks) * above) / self.period)

    def to_dict(self) -> dict[str, Any]:
        """The JSON form, without the frame that every verb shares."""
        shown = self.watch or self.nets
        return {
            "start": self.start,
            "period": self.period,
            "frequency": self.frequency,
            "verdict": self.verdict,
            "stable": self.stable,
            "multipliers": [[float(m.real), float(m.imag)] for m in self.multipliers],
            "shift_error": self.shift_error,
            "exact": self.exact,
            "swing": {net: self.swing(net) for net in shown},
            "duty": {net: self.duty(net) for net in shown},
            "times": [float(t) for t in self.times],
            "nets": {net: [float(v) for v in self[net]] for net in shown},
            "notes": list(self.notes),
        }

    def plot(self, path: str, nets: Sequence[str] = ()) -> None:
        """Draw two periods of the nets (the watched ones) into a file; the suffix decides: svg, png, pdf."""
        from loopsim.output.plots_time import plot_cycle

        plot_cycle(self, path, tuple(nets))

    def __str__(self) -> str:
        from loopsim.output.time_text import cycle_text

        return cycle_text(self)

    def __repr__(self) -> str:
        return f"Cycle({self.circuit}: period {self.period:.9g} s, {self.verdict})"

    def _repr_html_(self) -> str:
        from html import escape

        return f"<pre>{escape(str(self))}</pre>"


def cycle(
    circuit: Circuit,
    *,
    start: Start = "off",
    nudge: float = 0.0,
    watch: Sequence[str] | str = (),
    tolerance: float = TOLERANCE,
    duration: float | None = None,
    settings: Mapping[str, Any] | None = None,
    budget: float = 60.0,
    progress: Callable[[float], None] | None = None,
    tell: Callable[[str], None] | None = None,
) -> Cycle:
    """The oscillation that `start` leads to (starts as in `transient`; a rest point that is unstable is left by a small nudge).

    duration: how long to look for it at most [s], unlimited unless given; budget: wall time for the search [s].
    progress: called with the share of the budget that is used. Raises AnalysisError
    `no-cycle` where the circuit comes to rest, `no-repetition` where nothing came back in time, `driven` where a source moves.
    """
    check(circuit)
    system = assemble(circuit, settings)
    if system.timed:
        raise AnalysisError("driven", f"a source of {circuit.name} moves in time, so its cycle is not its own", hint="use transient")
    watched = _watched(circuit, watch)
    prepare(tell)
    began = time.monotonic()  # compiling, once in a fresh environment, is none of the search's time
    scale = _shortest_time(system)
    x, words, ramp, _ = _start(circuit, system, start, 100.0 * scale, scale, settings)
    plan = motion(system, x, 100.0 * scale, ramp)
    notes: list[str] = []
    if nudge:
        direction = growing_direction(system, x)
        if direction is None:
            raise AnalysisError("nudge", "nothing grows from this start, so there is no direction to nudge it in")
        x = x + nudge * direction[1]
    told = None if progress is None else lambda: progress(min((time.monotonic() - began) / max(budget, 1e-9), 1.0))
    path, column, period = _search(circuit, plan, x, scale, watched, began + budget, duration, notes, told)
    level = _middle(path, column)
    t0 = _last_rise(path, column, level)
    plan = motion(system, path.end_x, period)
    shot = _shoot(plan, path.at([t0])[0], period, column, level, tolerance)
    if shot is None:
        notes.append("shooting did not converge: read off the run")
        around = plan.solve(path.at([t0])[0], 0.0, period, tolerance, peak=_peaks(path))
        multipliers, stable, error, exact = np.zeros(0, dtype=np.complex128), None, 1.0, False
    else:
        around, period = shot
        multipliers, error = _multipliers(system, around)
        stable, exact = _judged(multipliers, error), True
    return Cycle(
        circuit=circuit.name,
        file=circuit.file,
        settings={name: float(value) for name, value in parameter_values(circuit, settings).items()},
        start=words,
        period=float(period),
        multipliers=multipliers,
        stable=stable,
        shift_error=error,
        x=around.at([0.0])[0],
        watch=watched,
        nets=tuple(name for kind, name in system.unknowns if kind == "net"),
        path=around,
        columns=dict(system.index),
        exact=exact,
        seconds=time.monotonic() - began,
        notes=tuple(notes),
    )


def cycles(circuit: Circuit, starts: Sequence[Start], **options: Any) -> tuple[Cycle, ...]:
    """The different cycles that several starts lead to, by rising period; starts that come to rest add none. options: as `cycle`."""
    found: list[Cycle] = []
    for start in starts:
        try:
            one = cycle(circuit, start=start, **options)
        except AnalysisError as error:
            if error.code != "no-cycle":
                raise
            continue
        if not any(_same_cycle(one, other) for other in found):
            found.append(one)
    return tuple(sorted(found, key=lambda c: c.period))


def _same_cycle(one: Cycle, other: Cycle) -> bool:
    """Equal period and equal extremes of every net."""
    if abs(one.period - other.period) > SAME * one.period:
        return False
    for net in one.nets:
        a, b = one.extremes(net), other.extremes(net)
        if max(abs(a[0] - b[0]), abs(a[1] - b[1])) > 5.0 * SAME * max(one.swing(net), other.swing(net), 1e-12):
            return False
    return True


def repetition(path: Path, nets: Sequence[int], floor: float) -> float | None:
    """Time between the last two passages of the widest net through its middle in the same state, or None.

    nets: columns that are nets; all columns must come back. floor: swings of nets below this [V] do not count.
    """
    if not len(path.times) or not len(nets):
        return None
    half, low, high = _recent_extremes(path)
    swings = (high - low)[list(nets)]
    if float(swings.max()) <= floor:
        return None
    column = list(nets)[int(np.argmax(swings))]
    passages, signs = crossings(path, column, 0.5 * (low + high)[column])
    rises = passages[(signs > 0) & (passages >= half)]
    if len(rises) < 3:
        return None
    states = path.at(rises)
    # a constant has no swing of its own to be measured by
    scale = np.maximum(high - low, 1e-3 * np.maximum(np.abs(low), np.abs(high)))
    scale[list(nets)] = np.maximum(scale[list(nets)], floor)
    apart = np.max(np.abs(states - states[-1]) / np.maximum(scale, 1e-300), axis=1)
    same = np.flatnonzero(apart[:-1] <= SAME)
    if len(same) < 2:
        return None
    periods = np.diff(np.append(rises[same[-2:]], rises[-1]))
    return float(periods[-1]) if abs(periods[1] - periods[0]) <= SAME * periods[1] else None


def _recent_extremes(path: Path) -> tuple[float, Array, Array]:
    """Start of the second half of the run, and the extremes of every kept unknown since."""
    half = 0.5 * (path.times[0] + path.end)
    first = int(np.searchsorted(path.times, half))
    low, high = _extremes(path, first)
    return float(half), low, high


def _extremes(path: Path, first: int = 0) -> tuple[Array, Array]:
    """Lowest and highest value of every kept unknown from step `first` on, on a fine grid of each step's polynomial."""
    first = min(first, len(path.times) - 1)
    low = np.full(path.starts.shape[1], np.inf)
    high = -low
    for q in np.linspace(0.0, 1.0, 17):
        total = np.zeros_like(path.starts[first:])
        for a in range(path.polynomials.shape[1] - 1, -1, -1):
            total = (total + path.polynomials[first:, a]) * q
        values = path.starts[first:] + total
        low, high = np.minimum(low, values.min(axis=0)), np.maximum(high, values.max(axis=0))
    return low, high


def _top(path: Path, column: int, sign: float) -> float:
    """Largest value of sign * unknown over the whole path: the best of a coarse grid, then a fine one around it."""
    coarse = np.linspace(0.0, 1.0, 17)
    times = (path.times[:, None] + path.steps[:, None] * coarse[:-1]).ravel()
    times = np.append(times, path.end)
    best = int(np.argmax(sign * path.at(times)[:, column]))
    fine = np.linspace(times[max(best - 1, 0)], times[min(best + 1, len(times) - 1)], 1001)
    return float(np.max(sign * path.at(fine)[:, column]))


def _peaks(path: Path) -> Array:
    low, high = _extremes(path)
    return np.maximum(np.abs(low), np.abs(high))


def _middle(path: Path, column: int) -> float:
    _, low, high = _recent_extremes(path)
    return float(0.5 * (low[column] + high[column]))


def _last_rise(path: Path, column: int, level: float) -> float:
    times, signs = crossings(path, column, level)
    return float(times[signs > 0][-1])


def _shortest_time(system: System) -> float:
    """A time that is short for the circuit [s]: that of its fastest growing or fastest oscillating motion near rest."""
    x = newton(system, np.zeros(system.n), system.s)
    if x is None:
        x = np.zeros(system.n)
    found = growing_direction(system, x)
    if found is not None:
        return 10.0 / abs(found[0])
    # nothing grows from the rest point that was found: the geometric mean of the time constants is as good a place to begin
    with np.errstate(all="ignore"):
        values = np.abs(np.linalg.eigvals(np.linalg.lstsq(system.jacobian(x), system.C, rcond=None)[0]))
    values = values[np.isfinite(values) & (values > 1e-18)]
    return float(np.exp(np.mean(np.log(values)))) if len(values) else 1e-3


def _search(
    circuit: Circuit, plan: Motion, x: Array, scale: float, watched: tuple[str, ...], deadline: float, duration: float | None,
    notes: list[str], told: Callable[[], None] | None,
) -> tuple[Path, int, float]:
    """Run on in stretches, each longer than the last, until the state comes back: (last stretch, column of the widest net, period)."""
    system = plan.system
    nets = [j for j, (kind, _) in enumerate(system.unknowns) if kind == "net"]
    floor = 1e-3 * plan.volts
    begin, length, steps, nudges = 0.0, 10.0 * scale, 0, 0
    peak: Array | None = None

    def in_time(reached: float) -> None:
        if told is not None:
            told()
        if time.monotonic() > deadline:
            raise AnalysisError("no-repetition", f"no state came back within {reached:.4g} s", hint="allow it more time")

    while True:
        length = length if duration is None else min(length, max(duration - begin, 1e-3 * duration))
        path = plan.solve(x, begin, begin + length, SEARCH_TOLERANCE, peak=peak, progress=in_time)
        if path.outcome != 0:
            raise AnalysisError("step-too-small", f"the run that looks for a cycle stopped at {path.end:.6g} s")
        period = repetition(path, nets, floor)
        if period is not None:
            _, low, high = _recent_extremes(path)
            chosen = [system.index[("net", net)] for net in watched if ("net", net) in system.index]
            chosen = [j for j in chosen if high[j] - low[j] > 0.05 * np.max((high - low)[nets])] or nets
            return path, max(chosen, key=lambda j: float(high[j] - low[j])), period
        rest = newton(system, path.end_x, plan.source(path.end))
        x = path.end_x
        # at rest: nothing has moved for the last half of a stretch that is long by the circuit's own times
        _, low, high = _recent_extremes(path)
        still = float(np.max((high - low)[nets], initial=0.0)) <= 1e-6 * plan.volts
        if rest is not None and still and np.max(np.abs(rest - x)[nets], initial=0.0) <= 1e-4 * plan.volts:
            growing = growing_direction(system, rest)
            if growing is None or nudges == 1:
                shown = ", ".join(f"{net} = {rest[system.index[('net', net)]]:.4g} V" for net in watched[:3])
                raise AnalysisError("no-cycle", f"{circuit.name} comes to rest at {shown}", hint="start it elsewhere, or nudge it")
            notes.append("left an unstable rest point by a small nudge")
            x = rest + TINY_NUDGE * plan.volts * growing[1]
            nudges += 1
        steps += path.accepted
        begin, length = path.end, length * LENGTHEN
        peak = np.maximum(plan.floor, np.minimum(_peaks(path), np.abs(x) + 10.0 * plan.volts))
        past = duration is not None and begin >= duration * (1.0 - 1e-9)
        if past or steps > MAX_STEPS or time.monotonic() > deadline:
            raise AnalysisError("no-repetition", f"no state came back within {begin:.4g} s", hint="look longer, or use transient")


def _shoot(plan: Motion, x: Array, period: float, column: int, level: float, tolerance: float) -> tuple[Path, float] | None:
    """One exact period from the phase where unknown `column` passes `level`, by Newton on (x, period); None where it does not converge."""
    system = plan.system
    n = system.n
    peak = None
    for _ in range(SHOTS):
        path = plan.solve(x, 0.0, period, tolerance, peak=peak)
        if path.outcome != 0:
            return None
        peak = _peaks(path)
        monodromy = step_product(system, path)
        rate = _end_rate(path)
        matrix = np.zeros((n + 1, n + 1))
        matrix[:n, :n] = monodromy - np.eye(n)
        matrix[:n, n] = rate
        matrix[n, column] = 1.0
        right = np.append(x - path.end_x, level - x[column])
        change = np.linalg.lstsq(matrix, right, rcond=None)[0]
        size = float(np.max(np.abs(change[:n]) / np.maximum(peak, plan.floor)))
        if abs(change[n]) > 0.5 * period or not np.isfinite(size):
            return None
        damping = min(1.0, 0.3 / max(size, 1e-300))
        x, period = x + damping * change[:n], period + damping * float(change[n])
        if damping == 1.0 and size <= 100.0 * tolerance and abs(change[n]) <= 10.0 * tolerance * period:
            return plan.solve(x, 0.0, period, tolerance, peak=peak), period
    return None


def _end_rate(path: Path) -> Array:
    """dx/dt at the end of the last step (n,)."""
    powers = np.arange(1, path.polynomials.shape[1] + 1)
    return np.asarray(powers @ path.polynomials[-1] / path.steps[-1])


def step_product(system: System, path: Path) -> Array:
    """d x(end) / d x(start): (n, n), the product of the derivatives of all steps.

    Of one step of length h with stages X_a: (A^-1 / h x C + diag(J(X_a))) dZ = -[J(X_1); ...], and the step's derivative is 1 + dZ_k.
    """
    stages, n = path.polynomials.shape[1], system.n
    method = tableau(stages)
    coupling = np.kron(method.A_inverse, system.C)
    product = np.eye(n)
    batch = max(1, BATCH // (stages * n) ** 2)
    for first in range(0, len(path.times), batch):
        part = slice(first, first + batch)
        powers = method.nodes[:, None] ** np.arange(1, stages + 1)
        values = path.starts[part, None, :] + np.einsum("ap,kpn->kan", powers, path.polynomials[part])
        count = len(values)
        jacobians = system.jacobian(values.reshape(count * stages, n)).reshape(count, stages, n, n)
        matrices = coupling / path.steps[part, None, None]
        for a in range(stages):
            matrices[:, a * n : (a + 1) * n, a * n : (a + 1) * n] += jacobians[:, a]
        changes = np.linalg.solve(matrices, -jacobians.reshape(count, stages * n, n))
        for change in changes[:, -n:, :]:
            product = product + change @ product
    return product


def _multipliers(system: System, path: Path) -> tuple[NDArray[np.complex128], float]:
    """Floquet multipliers without the one of a shift in time, largest first; how far that one is from 1."""
    values = np.linalg.eigvals(step_product(system, path)).astype(np.complex128)
    shift = int(np.argmin(np.abs(values - 1.0)))
    rest = np.delete(values, shift)
    return rest[np.argsort(-np.abs(rest))], float(abs(values[shift] - 1.0))


def _judged(multipliers: NDArray[np.complex128], error: float) -> bool | None:
    """Stable where all multipliers lie inside the unit circle, by more than the error of the one that is known."""
    largest = float(np.max(np.abs(multipliers), initial=0.0))
    doubt = max(MARGIN, 10.0 * error)
    if abs(largest - 1.0) <= doubt:
        return None
    return largest < 1.0
