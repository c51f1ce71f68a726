"""How a circuit moves: from a start, for a time, and where it ends.

The integrator is `loopsim.numerics.radau`; `loopsim.analyses.motion` lays the circuit out for it. The result holds the collocation
polynomial of every step, so that any time and any crossing can be asked for afterwards.
"""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopsim.analyses.motion import Motion, growing_direction, held_start, motion, newton
from loopsim.analyses.results import State
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble, parameter_values
from loopsim.equations.structure import check
from loopsim.equations.system import System
from loopsim.errors import AnalysisError
from loopsim.numerics.radau import INTERRUPTED, Path, crossings, prepare

if TYPE_CHECKING:
    from loopsim.analyses.results import States

Array: TypeAlias = NDArray[np.float64]
Start: TypeAlias = "State | str | Mapping[str, float]"

RAMP_SHARE = 0.01  # of the duration: how long supplies take to come up unless told
LONGEST_SHARE = 0.02  # of the duration: no step is longer, so that slow stretches are still drawn as curves
KEEP_ALL = 200  # unknowns up to which all are recorded, not only the watched nets
SAME_STATE = 1e-3  # of the supplies: an end this close to a rest point is that rest point
STATES_BUDGET = 20.0  # s for the list of states that the end is compared with
TOLERANCE = 1e-5
GROWTH_STEP = 0.5  # steps over the time constant of a growing motion that its growth is seen with
WATCHED_STEPS = 100_000  # a run is repeated with such steps up to this many


@dataclass(frozen=True, slots=True)
class Crossing:
    """A net passing a level [V] at a time [s]; direction: "rising" or "falling"."""

    time: float
    net: str
    level: float
    direction: str


@dataclass(frozen=True, eq=False)
class Transient:
    """How the nets moved.

    start: the start in words; duration: as asked for [s]; watch: nets to show first; nets: all that were recorded; path: steps and
    polynomials; columns: unknown to its column in path. end: "ends in state C", "settles", "oscillates" or "still moving" with what
    is known; end_state: the letter, or None. completed: False where the run stopped early (then an error carries this object).
    states: the states it was compared with, or None where it was compared with none.
    """

    circuit: str
    file: str | None
    settings: Mapping[str, float]
    start: str
    duration: float
    tolerance: float
    watch: tuple[str, ...]
    nets: tuple[str, ...]
    path: Path
    columns: Mapping[tuple[str, str], int]
    end: str
    end_state: str | None
    completed: bool
    seconds: float
    notes: tuple[str, ...] = field(default=())
    states: States | None = None

    @property
    def times(self) -> Array:
        """Where the steps begin and end [s]."""
        return self.path.grid[0]

    @property
    def steps(self) -> int:
        """Accepted steps."""
        return self.path.accepted

    @property
    def rejected(self) -> int:
        """Steps tried and taken back."""
        return self.path.rejected

    def __getitem__(self, net: str) -> Array:
        """Voltage of a net to gnd [V] at `times`."""
        if net == "gnd":
            return np.zeros(len(self.times))
        return self.path.grid[1][:, self._column("net", net)]

    def at(self, time: ArrayLike) -> dict[str, Any]:
        """Every recorded net [V] at one time, or at an array of times, by the polynomial of the step: no approximation beyond the run's."""
        wanted = np.asarray(time, dtype=float)
        self._inside(wanted)
        values = self.path.at(np.atleast_1d(wanted))
        found = {net: values[:, self.columns[("net", net)]] for net in self.nets}
        return found if wanted.ndim else {net: float(column[0]) for net, column in found.items()}

    def current(self, part: str) -> Array:
        """Current [A] at `times` through a part whose current is an unknown (sources, inductors)."""
        return self.path.grid[1][:, self._column("current", part)]

    def crossings(self, net: str, level: float, direction: str = "") -> tuple[Crossing, ...]:
        """When the net passes `level` [V]; direction: "rising" or "falling" for these alone."""
        times, signs = crossings(self.path, self._column("net", net), level)
        found = [Crossing(float(t), net, level, "rising" if sign > 0 else "falling") for t, sign in zip(times, signs, strict=True)]
        return tuple(c for c in found if not direction or c.direction == direction)

    def final(self, net: str) -> float:
        """Voltage of a net at the end [V]."""
        return float(self.path.grid[1][-1, self._column("net", net)])

    def settling_time(self, net: str, band: float = 0.01) -> float:
        """Time [s] after which the net stays within `band` of its whole excursion around its final value."""
        column = self._column("net", net)
        grid = self.fine_times()
        values = self.path.at(grid)[:, column]
        last, swing = values[-1], float(np.ptp(values))
        outside = np.flatnonzero(np.abs(values - last) > band * swing)
        if not len(outside):
            return 0.0
        ends = [crossings(self.path, column, last + sign * band * swing)[0] for sign in (-1.0, 1.0)]
        later = np.concatenate(ends)
        later = later[later >= grid[outside[-1]]]
        return float(later.min()) if len(later) else float(grid[min(outside[-1] + 1, len(grid) - 1)])

    def fine_times(self, parts: int = 4) -> Array:
        """Times for drawing: every step in `parts` equal parts."""
        times = self.times
        shares = np.arange(parts) / parts
        inner = (times[:-1, None] + np.diff(times)[:, None] * shares).ravel()
        return np.append(inner, times[-1])

    def table(self, samples: int = 1001) -> tuple[Array, dict[str, Array]]:
        """Equally spaced times [s] and the recorded nets there [V]."""
        grid = np.linspace(self.times[0], self.times[-1], samples)
        return grid, self.at(grid)

    def to_dict(self) -> dict[str, Any]:
        """The JSON form, without the frame that every verb shares."""
        shown = self.watch or self.nets
        return {
            "start": self.start,
            "duration": self.duration,
            "times": [float(t) for t in self.times],
            "nets": {net: [float(v) for v in self[net]] for net in shown},
            "steps": self.steps,
            "rejected": self.rejected,
            "end": self.end,
            "end_state": self.end_state,
            "completed": self.completed,
            "notes": list(self.notes),
        }

    def to_dataframe(self) -> Any:
        """A pandas table of the recorded nets at `times`; MissingExtra where pandas is not installed."""
        try:
            import pandas
        except ImportError:
            from loopsim.errors import MissingExtra

            raise MissingExtra("pandas", "a data frame") from None
        return pandas.DataFrame({net: self[net] for net in self.nets}, index=pandas.Index(self.times, name="time"))

    def plot(self, path: str, nets: Sequence[str] = ()) -> None:
        """Draw the nets (the watched ones) over time into a file, the states that are known marked; the suffix decides: svg, png, pdf."""
        from loopsim.output.plots_time import plot_transient

        shown = tuple(nets) or self.watch or self.nets
        levels = [(net, state[net], state.name) for state in self.states or () for net in shown if net in self.nets]
        plot_transient(self, path, tuple(nets), levels)

    def _column(self, kind: str, name: str) -> int:
        if (kind, name) not in self.columns:
            what = "net" if kind == "net" else "current through"
            known = ", ".join(n for k, n in self.columns if k == kind)
            raise AnalysisError("not-recorded", f"no {what} {name} was recorded", hint=f"recorded: {known}")
        return self.columns[(kind, name)]

    def _inside(self, wanted: Array) -> None:
        first, last = float(self.times[0]), float(self.times[-1])
        if np.any(wanted < first) or np.any(wanted > last * (1.0 + 1e-12)):
            raise AnalysisError("time", f"the run covers {first:g} s to {last:g} s")

    def __str__(self) -> str:
        from loopsim.output.time_text import transient_text

        return transient_text(self)

    def __repr__(self) -> str:
        return f"Transient({self.circuit}: {self.times[-1]:.6g} s from {self.start}, {self.steps} steps, {self.end})"

    def _repr_html_(self) -> str:
        from html import escape

        return f"<pre>{escape(str(self))}</pre>"


class TransientError(AnalysisError):
    """A run that stopped early. partial: what there is of it, or None where not one step was taken."""

    def __init__(self, code: str, message: str, partial: Transient | None, last_good: Mapping[str, float], hint: str = "") -> None:
        self.partial = partial
        super().__init__(code, message, last_good, hint)


class TransientInterrupted(KeyboardInterrupt):
    """A run that was interrupted from outside. partial: what there is of it."""

    def __init__(self, partial: Transient) -> None:
        self.partial = partial
        super().__init__(f"interrupted at {partial.times[-1]:.6g} s of {partial.duration:.6g} s, after {partial.steps} steps")


def transient(
    circuit: Circuit,
    duration: float,
    *,
    start: Start = "off",
    watch: Sequence[str] | str = (),
    nudge: float = 0.0,
    tolerance: float = TOLERANCE,
    ramp: float | None = None,
    settings: Mapping[str, Any] | None = None,
    max_step: float | None = None,
    progress: Callable[[float], None] | None = None,
    tell: Callable[[str], None] | None = None,
) -> Transient:
    """Integrate the circuit for `duration` [s].

    start: a State, its letter, "off" (everything at rest without supplies, which then come up together within `ramp` [s], a hundredth
    of the duration unless given), or net voltages (the rest at rest around them, then let go). nudge: displacement [V] of the net that
    moves most along the fastest growing direction of the start; its sign chooses the side. tolerance: wanted error over amplitude.
    settings: let name to SI value. progress: called with the share done; tell: hears when the kernel is compiled for the first time.
    Raises CircuitError for a faulty circuit, AnalysisError for a start that does not exist, TransientError (with the partial run) where
    no step is small enough; an interrupt becomes TransientInterrupted, a KeyboardInterrupt with the partial run.
    """
    began = time.monotonic()
    _check_numbers(duration, tolerance, nudge, ramp)
    check(circuit)
    system = assemble(circuit, settings)
    watched = _watched(circuit, watch)
    prepare(tell)
    x, words, ramp_time, listed = _start(circuit, system, start, duration, ramp, settings)
    notes: list[str] = []
    if nudge:
        x, note = _nudged(system, x, nudge)
        notes.append(note)
    plan = motion(system, x, duration, ramp_time)
    kept = [j for j, (kind, name) in enumerate(system.unknowns) if system.n <= KEEP_ALL or (kind == "net" and name in watched)]
    longest = min(max_step or np.inf, LONGEST_SHARE * duration)
    told = None if progress is None else lambda t: progress(t / duration)
    path = plan.solve(x, 0.0, duration, tolerance, kept=kept, max_step=longest, progress=told, keep_interrupted=True)
    left_alone = ramp_time == 0.0 and not nudge
    growth = None if left_alone or path.outcome != 0 else _growth_at_rest(plan, path)
    if growth is not None and duration * abs(growth) <= WATCHED_STEPS * GROWTH_STEP:
        # long steps see what grows as dying away: look again with steps short enough for it
        path = plan.solve(
            x, 0.0, duration, tolerance, kept=kept, max_step=min(longest, GROWTH_STEP / abs(growth)), progress=told,
            keep_interrupted=True,
        )  # fmt: skip
        growth = _growth_at_rest(plan, path) if path.outcome == 0 else None
    if growth is not None:
        notes.append(f"the end is unstable ({growth.real:.3g} /s): nothing disturbed the run there; start elsewhere or nudge it")
    columns = {system.unknowns[j]: i for i, j in enumerate(kept)}
    nets = tuple(name for kind, name in columns if kind == "net")
    completed = path.outcome == 0
    end, end_state = ("stopped early", None)
    interrupted = path.outcome == INTERRUPTED
    if completed:
        try:
            end, end_state, note, listed = _end(circuit, plan, path, settings, listed, duration)
            notes += [note] if note else []
        except KeyboardInterrupt:
            interrupted, end = True, "not compared with the states"
    if ramp_time > 0.0:
        notes.append(f"supplies came up together within {_spoken(ramp_time)}")
    run = Transient(
        circuit=circuit.name,
        file=circuit.file,
        settings={name: float(value) for name, value in parameter_values(circuit, settings).items()},
        start=words,
        duration=float(duration),
        tolerance=tolerance,
        watch=watched,
        nets=nets,
        path=path,
        columns=columns,
        end=end,
        end_state=end_state,
        completed=completed,
        seconds=time.monotonic() - began,
        notes=tuple(notes),
        states=listed,
    )
    if interrupted:
        raise TransientInterrupted(run) if path.accepted else KeyboardInterrupt
    if not completed:
        raise _failure(system, path, run)
    return run


def _spoken(seconds: float) -> str:
    """A time in the unit that suits it."""
    size, unit = next(((size, unit) for size, unit in ((1.0, "s"), (1e-3, "ms"), (1e-6, "us")) if seconds >= size), (1e-9, "ns"))
    return f"{seconds / size:g} {unit}"


def _check_numbers(duration: float, tolerance: float, nudge: float, ramp: float | None) -> None:
    if not (np.isfinite(duration) and duration > 0.0):
        raise AnalysisError("duration", f"the duration must be a positive time, not {duration}")
    if not 1e-9 <= tolerance <= 0.1:
        raise AnalysisError("tolerance", f"the tolerance must lie between 1e-9 and 0.1, not {tolerance}")
    if not np.isfinite(nudge):
        raise AnalysisError("nudge", f"the nudge must be a voltage, not {nudge}")
    if ramp is not None and not (np.isfinite(ramp) and ramp > 0.0):
        raise AnalysisError("ramp", f"the ramp must be a positive time, not {ramp}")


def _watched(circuit: Circuit, watch: Sequence[str] | str) -> tuple[str, ...]:
    """The nets asked for, else those that matter in `states`."""
    from loopsim.analyses.states import watched

    named = (watch,) if isinstance(watch, str) else tuple(watch)
    for net in named:
        if net not in circuit.nets:
            raise AnalysisError("unknown-net", f"{circuit.name} has no net {net}", hint=f"its nets: {', '.join(circuit.nets)}")
    return named or watched(circuit)


def _start(
    circuit: Circuit, system: System, start: Start, duration: float, ramp: float | None, settings: Mapping[str, Any] | None
) -> tuple[Array, str, float, States | None]:
    """Unknowns at time 0, the start in words, the ramp time (0: supplies are up), and the list of states where it was needed."""
    if isinstance(start, State):
        if len(start.x) != system.n:
            raise AnalysisError("start", f"state {start.name} belongs to another circuit")
        return np.array(start.x, dtype=float), f"state {start.name}", 0.0, None
    if isinstance(start, str) and start == "off":
        source = system.s - system.supply
        x = newton(system, np.zeros(system.n), source)
        if x is None:
            raise AnalysisError("start", "no rest point was found with the supplies off", hint="start from a state or from net voltages")
        return x, "off", RAMP_SHARE * duration if ramp is None else ramp, None
    if isinstance(start, str):
        listed = _states(circuit, settings)
        try:
            return np.array(listed[start].x, dtype=float), f"state {start}", 0.0, listed
        except KeyError:
            known = ", ".join(state.name for state in listed) or "none"
            raise AnalysisError("start", f"there is no state {start}", hint=f"states: {known}; or off, or net = volts") from None
    for net in start:
        if ("net", net) not in system.index:
            raise AnalysisError("unknown-net", f"{circuit.name} has no net {net}", hint=f"its nets: {', '.join(circuit.nets)}")
    words = ", ".join(f"{net} = {volts:g} V" for net, volts in start.items())
    return held_start(start, system, system.source(0.0), duration), words, 0.0, None


def _states(circuit: Circuit, settings: Mapping[str, Any] | None) -> States:
    from loopsim.analyses.states import states

    return states(circuit, settings=settings, budget=STATES_BUDGET)


def _nudged(system: System, x: Array, nudge: float) -> tuple[Array, str]:
    found = growing_direction(system, x)
    if found is None:
        raise AnalysisError("nudge", "nothing grows from this start, so there is no direction to nudge it in", hint="leave the nudge out")
    rate, direction = found
    kind = "a growing oscillation" if rate.imag else "a growing exponential"
    return x + nudge * direction, f"nudged by {nudge:g} V along {kind} of {rate.real:.4g} /s"


def _end(
    circuit: Circuit, plan: Motion, path: Path, settings: Mapping[str, Any] | None, listed: States | None, duration: float
) -> tuple[str, str | None, str, States | None]:
    """(where it ended, the letter, a note, the states as far as they were needed)."""
    from loopsim.analyses.cycle import repetition

    system, x = plan.system, path.end_x
    source = plan.source(path.end)
    nets = np.array([kind == "net" for kind, _ in system.unknowns])
    recent = path.at(np.linspace(path.end - 0.02 * duration, path.end, 21))
    moved = float(np.max(np.ptp(recent, axis=0)[[kind == "net" for kind, _ in _kept_unknowns(system, path)]], initial=0.0))
    rest = newton(system, x, source)
    if rest is not None and np.max(np.abs(rest - x)[nets], initial=0.0) <= SAME_STATE * plan.volts and moved <= SAME_STATE * plan.volts:
        if not np.allclose(source, system.s, rtol=1e-9, atol=1e-12 * plan.volts):
            return "settles", None, "the sources have moved away from their values at time 0, so the end is not one of their states", listed
        listed = _states(circuit, settings) if listed is None else listed
        near = [state for state in listed if np.max(np.abs(state.x - rest)[nets], initial=0.0) <= SAME_STATE * plan.volts]
        if near:
            return f"ends in state {near[0].name}", near[0].name, "", listed
        return "settles", None, "the end is a rest point that is not in the list of states", listed
    again = repetition(path, [i for i, (kind, _) in enumerate(_kept_unknowns(system, path)) if kind == "net"], SAME_STATE * plan.volts)
    if again is not None and not _driven(system, path.end):
        return f"oscillates with a period of {again:.6g} s", None, "", listed
    return "still moving", None, "", listed


def _growth_at_rest(plan: Motion, path: Path) -> complex | None:
    """The fastest growing eigenvalue [1/s] where the run came to rest, or None where it did not or nothing grows."""
    system = plan.system
    rest = newton(system, path.end_x, plan.source(path.end))
    nets = np.array([kind == "net" for kind, _ in system.unknowns])
    if rest is None or np.max(np.abs(rest - path.end_x)[nets], initial=0.0) > SAME_STATE * plan.volts:
        return None
    found = growing_direction(system, rest)
    return None if found is None else found[0]


def _kept_unknowns(system: System, path: Path) -> list[tuple[str, str]]:
    if path.starts.shape[1] == system.n:
        return list(system.unknowns)
    return [("net", "")] * path.starts.shape[1]


def _driven(system: System, end: float) -> bool:
    """Whether a source still moves at the end of the run."""
    times = np.linspace(0.98 * end, end, 41)
    return any(np.ptp([float(timed.waveform.value(float(t))) for t in times]) > 0.0 for timed in system.timed)


def _failure(system: System, path: Path, run: Transient) -> TransientError:
    last = {name: float(path.end_x[j]) for j, (kind, name) in enumerate(system.unknowns) if kind == "net"}
    kind, name = system.unknowns[path.worst]
    what = f"net {name}" if kind == "net" else f"{kind} of {name}"
    return TransientError(
        "step-too-small",
        f"the run stopped at {path.end:.6g} s after {path.accepted} steps: no step is short enough there; worst at {what}",
        run if path.accepted else None,
        last,
        hint="a loop without any delay jumps at once: give its nets their stray capacitances",
    )
