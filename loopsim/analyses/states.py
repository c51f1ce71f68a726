"""Every DC operating point of a circuit, with the word whether the list is proved complete, and a verdict on each.

The proof (`points`) finds them; the sweep (`sweep`), which proves nothing, must not find one that the proof left out: if it does,
nothing is answered. Where the proof does not finish within its budget, what the sweep finds is added as found.
"""

from __future__ import annotations

import time
from collections.abc import Mapping
from typing import Any, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.points import Points, all_points
from loopsim.analyses.results import State, States, Verdict
from loopsim.analyses.stability import judge
from loopsim.analyses.sweep import sweep
from loopsim.circuit import Circuit
from loopsim.devices.phi_rows import rows_of
from loopsim.equations.assemble import assemble, let_range, parameter_values, pin_currents
from loopsim.equations.structure import check
from loopsim.equations.system import System
from loopsim.errors import AnalysisError, InternalError
from loopsim.expressions import NetRef, references
from loopsim.numerics.boxes import start_points
from loopsim.numerics.certificate import certify
from loopsim.numerics.problem import Problem

Array: TypeAlias = NDArray[np.float64]

SWEEP_SHARE = 0.1  # of the time the proof took: the cross-check must not cost more than what it checks
SWEEP_FLOOR = 0.003  # [s] and never less than this
ACTIVE_OUTPUTS = {
    "opamp": "out", "comparator": "out", "bipolar_npn": "collector", "bipolar_pnp": "collector", "mosfet_n": "drain", "mosfet_p": "drain",
}  # fmt: skip


def states(
    circuit: Circuit, settings: Mapping[str, Any] | None = None, *, box: float = 1e3, budget: float = 60.0
) -> States:
    """Every DC operating point with the named lets set [SI; degC for `ambient`].

    box: all nets within +/- this [V]; budget: wall time for the proof [s], after which the rest is undecided.
    CircuitError for a circuit that has no solution by structure, or an unknown let; AnalysisError `singular` where the equations do not
    determine the unknowns; InternalError when proof and sweep contradict each other.
    """
    if not (np.isfinite(box) and box > 0.0):
        raise AnalysisError("box", f"the start box must be a positive voltage, not {box}")
    began = time.monotonic()
    check(circuit)
    system = assemble(circuit, settings)
    found = all_points(system, box, began + budget)
    took = time.monotonic() - began
    extra = _unproved(
        system, found, box, max(SWEEP_FLOOR, SWEEP_SHARE * took if found.complete else 0.5 * budget)
    )
    x = np.concatenate([found.x, extra])
    spread = np.concatenate([found.spread, np.zeros_like(extra)])
    values = {name: float(value) for name, value in parameter_values(circuit, settings).items()}
    watch = watched(circuit)
    order = _order(system, x, watch)
    x, spread = x[order], spread[order]
    listed = _named(circuit, settings, system, x, spread, judge(system, x) if len(x) else [])
    return States(
        circuit=circuit.name,
        file=circuit.file,
        settings=values,
        states=listed,
        complete=found.complete,
        undecided=found.undecided,
        box=float(box),
        boxes=found.boxes,
        seconds=time.monotonic() - began,
        watch=watch,
        notes=(*_notes(listed), *_beyond(listed, box), *_outside_ranges(circuit, settings, values)),
        remainder=found.remainder,
        chosen=worth_showing(circuit, settings),
        units={name: parameter.unit for name, parameter in circuit.parameters.items()},
    )


def _beyond(listed: tuple[State, ...], box: float) -> tuple[str, ...]:
    """A note on nets outside the box: sources and linear parts put them there, and nothing was searched for them."""
    nets = sorted({net for state in listed for net, volts in state.nets.items() if abs(volts) > box})
    if not nets:
        return ()
    shown = ", ".join(nets[:6]) + (f" and {len(nets) - 6} more" if len(nets) > 6 else "")
    return (f"outside the box, where sources and linear parts alone put them: {shown}",)


def _outside_ranges(
    circuit: Circuit, settings: Mapping[str, Any] | None, values: Mapping[str, float]
) -> tuple[str, ...]:
    """A note on each let that was set outside the range its file states for it."""
    notes = []
    for name in settings or {}:
        span = let_range(circuit, name, settings) if name in circuit.parameters else None
        if span is not None and not span[0] <= values[name] <= span[1]:
            unit = circuit.parameters[name].unit
            notes.append(f"{name} is set outside the range its file states: {span[0]:g} .. {span[1]:g} {unit}".rstrip())
    return tuple(notes)


def worth_showing(circuit: Circuit, settings: Mapping[str, Any] | None = None) -> tuple[str, ...]:
    """Settings to print in a heading, in the circuit's order: what was set, and the lets that are made to be varied."""
    given = settings or {}
    return tuple(
        name
        for name, parameter in circuit.parameters.items()
        if name in given or (name != "ambient" and parameter.low is not None)
    )


def watched(circuit: Circuit) -> tuple[str, ...]:
    """Nets to show first: those that the `expect` lines name, else the outputs of active parts, else all."""
    named: list[str] = []
    for requirement in circuit.requirements:
        if requirement.target is not None:
            named += [
                ref.name for ref in sorted(references(requirement.target), key=str) if isinstance(ref, NetRef)
            ]
    if not named:
        named = [
            part.pins[ACTIVE_OUTPUTS[part.device]] for part in circuit.parts if part.device in ACTIVE_OUTPUTS
        ]
    kept = tuple(dict.fromkeys(net for net in named if net in circuit.nets))
    return kept or circuit.nets


def letters(count: int) -> list[str]:
    """A, B, ... Z, AA, AB, ..."""
    names = []
    for i in range(count):
        name, rest = "", i + 1
        while rest:
            rest, digit = divmod(rest - 1, 26)
            name = chr(ord("A") + digit) + name
        names.append(name)
    return names


def whole_problem(system: System) -> Problem:
    """The whole system as one problem of the search, for certificates of single points."""
    return Problem(
        system.G, system.B, system.W, system.V, rows_of(system.kinds, system.parameters), system.c, system.c, system.d, system.d,
        system.s, system.s,
    )  # fmt: skip


def _unproved(system: System, found: Points, box: float, seconds: float) -> Array:
    """What a sweep finds that the proof has not, (k, n); InternalError when the proof claims that there is no such point."""
    swept = np.asarray(sweep(system, budget=seconds), dtype=float).reshape(-1, system.n)
    nets = np.array([kind == "net" for kind, _ in system.unknowns])
    swept = swept[np.all(np.abs(swept[:, nets]) <= box, axis=1)]
    if len(swept) == 0:
        return swept
    problem = whole_problem(system)
    with np.errstate(all="ignore"):
        sure = certify(problem, swept)
        here = start_points(problem, sure.x, sure.spread)
    swept, low, high = swept[sure.good], here.low[sure.good, : system.n], here.high[sure.good, : system.n]
    new = np.ones(len(swept), dtype=bool)
    for x, spread in zip(found.x, found.spread, strict=True):
        # the same point: its certified box meets the sweep's
        new &= ~np.all((low <= x + spread) & (high >= x - spread), axis=1)
    for i in np.flatnonzero(new):
        for k in np.flatnonzero(new)[np.flatnonzero(new) > i]:
            if new[i] and np.all((low[i] <= high[k]) & (high[i] >= low[k])):
                new[k] = False
    if found.complete and np.any(new):
        lost = {name: float(v) for (_, name), v in zip(system.unknowns, swept[new][0], strict=True)}
        raise InternalError(
            f"the proof of completeness missed an operating point that was found otherwise: {lost}; please report this"
        )
    return np.asarray(swept[new])


def _order(system: System, x: Array, watch: tuple[str, ...]) -> NDArray[np.int64]:
    """Ascending by the watched nets, then by all unknowns; equal to nine digits counts as equal."""
    columns = [system.index[("net", net)] for net in watch if ("net", net) in system.index]
    columns += [j for j in range(system.n) if j not in columns]
    if len(x) == 0:
        return np.zeros(0, dtype=np.int64)
    keys = x[:, columns]
    with np.errstate(divide="ignore"):
        step = 10.0 ** np.ceil(np.log10(np.maximum(np.max(np.abs(keys), axis=0), 1e-12)) - 9)
    return np.lexsort(np.round(keys / step).T[::-1])


def _named(
    circuit: Circuit,
    settings: Mapping[str, Any] | None,
    system: System,
    x: Array,
    spread: Array,
    verdicts: list[Verdict],
) -> tuple[State, ...]:
    if len(x) == 0:
        return ()
    nets = [(name, j) for j, (kind, name) in enumerate(system.unknowns) if kind == "net"]
    by_part = {
        name: np.broadcast_to(np.asarray(value, dtype=float), (len(x),))
        for name, value in pin_currents(circuit, x, settings).items()
    }
    radii = np.max(spread, axis=1)
    return tuple(
        State(
            name=name,
            nets={net: float(x[i, j]) for net, j in nets},
            currents={part: float(current[i]) for part, current in by_part.items()},
            verdict_full=verdict,
            certified_radius=float(radii[i]),
            x=x[i],
        )
        for i, (name, verdict) in enumerate(zip(letters(len(x)), verdicts, strict=True))
    )


def _notes(listed: tuple[State, ...]) -> tuple[str, ...]:
    """The different notes of the verdicts, each with the states it is about where it is not about all."""
    by_note: dict[str, list[str]] = {}
    for state in listed:
        if state.verdict_full.note:
            by_note.setdefault(state.verdict_full.note, []).append(state.name)
    return tuple(
        note
        if len(names) == len(listed)
        else f"{', '.join(names) if len(names) <= 8 else f'{len(names)} states'}: {note}"
        for note, names in by_note.items()
    )
