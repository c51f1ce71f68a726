"""A run in time that lasts until the circuit is at rest: how long that may take is told by its own time constants and waveforms."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np

from loopsim.analyses.results import State
from loopsim.circuit import Circuit
from loopsim.devices.waveforms import LONGEST, Sine, Square
from loopsim.equations.assemble import assemble
from loopsim.equations.system import TimedSource
from loopsim.errors import AnalysisError

if TYPE_CHECKING:
    from loopsim.analyses.transient import Transient

SPANS = 12.0  # of the slowest time constant: what is then left is below a hundred-thousandth
STRETCHES = (1.0, 8.0, 64.0)  # times the span, each tried while it is still moving
NO_DYNAMICS = 1e-3  # [s] where nothing stores anything
RAMPS = (0.01, 1.0, 100.0)  # times the slowest time constant: how fast supplies come up where no waveform says it
UNNOTICED = 1e-3  # of the first corner of a waveform: supplies that come up beside one must not change its shape


def run_to_rest(
    circuit: Circuit,
    found: Iterable[State],
    start: str,
    settings: Mapping[str, float],
    pace: float,
    tick: Callable[[float], None],
) -> Transient:
    """found: the states at time 0, for their time constants; pace: time in which supplies come up together, over the slowest of these;
    tick: called during the run, may raise to end it. The run that is given back may still be moving.

    AnalysisError `driven` where a source never stops moving.
    """
    from loopsim.analyses.transient import transient

    last, first = waveform_ends(assemble(circuit, settings).timed)
    listed = list(found)
    constant = slowest(listed) or NO_DYNAMICS
    begin: State | str = next((state for state in listed if state.name == start), start)
    ramp = min(pace * constant, UNNOTICED * first) if first else pace * constant
    for stretch in STRETCHES:
        duration = stretch * (max(SPANS * constant, 2.0 * last) + 2.0 * ramp)
        run = transient(circuit, duration, start=begin, settings=settings, ramp=ramp, progress=tick)
        if run.end != "still moving":
            break
    return run


def slowest(found: Iterable[State]) -> float:
    """The longest time constant at any of the states [s], 0 where there is none."""
    rates = [np.abs(state.eigenvalues.real) for state in found]
    every = np.concatenate([*rates, np.zeros(0)])
    every = every[every > 0.0]
    return float(1.0 / every.min()) if len(every) else 0.0


def waveform_ends(timed: Sequence[TimedSource]) -> tuple[float, float]:
    """(last corner, first corner after 0) of all waveforms [s], zeros where there is none."""
    corners: list[float] = []
    for source in timed:
        if isinstance(source.waveform, Sine | Square):
            raise AnalysisError("driven", "a source goes on moving, so the circuit never comes to rest")
        corners += source.waveform.corners(0.0, LONGEST)
    later = [corner for corner in corners if corner > 0.0]
    return max(later, default=0.0), min(later, default=0.0)
