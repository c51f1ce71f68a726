"""Judge the requirements of a circuit: measure, compare, say where. What is not proved is undecided, never met."""

from __future__ import annotations

import itertools
import time
from collections.abc import Mapping
from dataclasses import dataclass, field

from loopsim.analyses.results import State, States
from loopsim.analyses.states import states
from loopsim.analyses.trace import trace
from loopsim.circuit import Circuit, Relation, Requirement
from loopsim.equations.assemble import parameter_values
from loopsim.errors import AnalysisError
from loopsim.expressions import NetRef, evaluate
from loopsim.requirements.outcomes import RANK, RequirementOutcome

Limits = tuple[tuple[float | None, float | None], ...]
COUNTS = {"states": (True, False, None), "stable states": (True,), "unstable states": (False,)}
JUMPS = {"rising threshold": "rising", "falling threshold": "falling", "hysteresis": "hysteresis"}
SERVED = (*COUNTS, "values", "growth rate", "damping")


@dataclass
class Runs:
    """One list of states for each settings of a circuit. deadline: [s] of the monotonic clock."""

    circuit: Circuit
    box: float
    deadline: float
    known: dict[tuple[tuple[str, float], ...], States] = field(default_factory=dict)

    def states(self, settings: Mapping[str, float]) -> States:
        """The operating points at `settings`, found once."""
        key = tuple(sorted(settings.items()))
        if key not in self.known:
            left = max(0.01, self.deadline - time.monotonic())
            self.known[key] = states(self.circuit, settings, box=self.box, budget=left)
        return self.known[key]


@dataclass(frozen=True)
class Judged:
    """One requirement at one binding of its lets."""

    outcome: str
    measured: tuple[float, ...] = ()
    limits: Limits = ()
    margin: float | None = None
    note: str = ""


def verify(
    circuit: Circuit, settings: Mapping[str, float] | None = None, *, box: float = 1e3, budget: float = 60.0
) -> tuple[RequirementOutcome, ...]:
    """Every requirement of the circuit, in order. box [V] as for `states`; budget: wall time for all of them [s]."""
    runs = Runs(circuit, box, time.monotonic() + budget)
    return tuple(_outcome(runs, requirement, settings or {}) for requirement in circuit.requirements)


def _outcome(runs: Runs, requirement: Requirement, settings: Mapping[str, float]) -> RequirementOutcome:
    began = time.monotonic()
    worst = min(
        (_at(runs, requirement, bound) for bound in _bindings(runs.circuit, requirement, settings)),
        key=lambda judged: (RANK[judged.outcome], float("inf") if judged.margin is None else judged.margin),
    )
    span = requirement.span
    return RequirementOutcome(
        runs.circuit.name, requirement.label, requirement.text, worst.outcome, worst.measured, worst.limits, worst.margin,
        time.monotonic() - began, worst.note, span.file if span else runs.circuit.file, span.line if span else None,
    )  # fmt: skip


def _bindings(circuit: Circuit, requirement: Requirement, settings: Mapping[str, float]) -> list[dict[str, float]]:
    """Every combination of the `at` values [SI]."""
    values = parameter_values(circuit, settings)
    choices = [[float(evaluate(formula, values)) for formula in formulas] for _, formulas in requirement.at]
    names = [let for let, _ in requirement.at]
    return [{**settings, **dict(zip(names, chosen, strict=True))} for chosen in itertools.product(*choices)]


def limits_of(relation: Relation, values: Mapping[str, object]) -> Limits:
    """(low, high) of each target [SI], None where open."""
    found: list[tuple[float | None, float | None]] = []
    for value, low, high in relation.targets:
        if relation.form == "below":
            found.append((None, _number(value, values)))
        elif relation.form == "above":
            found.append((_number(value, values), None))
        else:
            found.append((_number(low, values), _number(high, values)))
    return tuple(found)


def _number(formula: object, values: Mapping[str, object]) -> float | None:
    return None if formula is None else float(evaluate(formula, values))  # type: ignore[arg-type]


def room(value: float, limits: tuple[float | None, float | None]) -> float:
    """Distance of a value to the nearer limit, negative outside."""
    low, high = limits
    return min(float("inf") if low is None else value - low, float("inf") if high is None else high - value)


def within(value: float, limits: tuple[float | None, float | None], form: str) -> bool:
    """Whether a value keeps its limits; below and above are strict."""
    left = room(value, limits)
    return left > 0.0 if form in ("below", "above") else left >= 0.0


def _at(runs: Runs, requirement: Requirement, settings: Mapping[str, float]) -> Judged:
    if requirement.over_tolerances:
        return Judged("undecided", note="over tolerances: not measured yet")
    if requirement.measure in JUMPS:
        return _jump(runs, requirement, settings)
    if requirement.measure not in SERVED:
        return Judged("undecided", note=f"{requirement.measure}: not measured yet")
    values = parameter_values(runs.circuit, settings)
    limits = limits_of(requirement.relation, values)
    try:
        found = runs.states(settings)
    except AnalysisError as error:
        return Judged("undecided", limits=limits, note=str(error))
    if requirement.measure in COUNTS:
        return count(found, requirement, limits)
    return _each(found, requirement, limits, values)


def _jump(runs: Runs, requirement: Requirement, settings: Mapping[str, float]) -> Judged:
    """Where a net jumps; decided only where the trace is proved over its whole range."""
    limits = limits_of(requirement.relation, parameter_values(runs.circuit, settings))
    if requirement.along is None or not isinstance(requirement.target, NetRef):
        return Judged("undecided", limits=limits, note=f"{requirement.measure}: only of a net along a let")
    net, left = requirement.target_text, max(0.01, runs.deadline - time.monotonic())
    try:
        curve = trace(runs.circuit, requirement.along, watch=net, box=runs.box, budget=left, settings=settings)
        value = getattr(curve.thresholds(net), JUMPS[requirement.measure])
    except (AnalysisError, KeyError) as error:
        return Judged("undecided", limits=limits, note=str(error))
    measured = () if value is None else (value,)
    if not curve.over_range:
        return Judged("undecided", measured, limits, None, "the trace is not proved over its whole range")
    if value is None:
        return Judged("violated", measured, limits, None, f"{net} never jumps that way")
    good = within(value, limits[0], requirement.relation.form)
    return Judged("met" if good else "violated", measured, limits, room(value, limits[0]), "" if good else f"jumps at {value:.6g}")


def count(found: States, requirement: Requirement, limits: Limits) -> Judged:
    """Counts: met needs a complete list and every verdict; too many proved ones violate even so."""
    wanted = COUNTS[requirement.measure]
    open_verdicts = sum(state.stable is None for state in found) if None not in wanted else 0
    sure = sum(state.stable in wanted and state.certified_radius > 0.0 for state in found)
    seen = float(sum(state.stable in wanted for state in found))
    pair, form = limits[0], requirement.relation.form
    text = ", ".join(f"{state.name} {state.verdict}" for state in found)
    if found.complete and not open_verdicts:
        good = within(seen, pair, form)
        return Judged("met" if good else "violated", (seen,), limits, room(seen, pair), "" if good else text)
    high = pair[1]
    if high is not None and (sure > high or (form == "below" and sure >= high)):
        return Judged("violated", (seen,), limits, high - sure, text)
    return Judged("undecided", (seen,), limits, None, f"{found.word}; {open_verdicts} verdicts undecided")


def _each(found: States, requirement: Requirement, limits: Limits, values: Mapping[str, object]) -> Judged:
    """A number of each state, all of which must keep the limits; a set must moreover be hit whole."""
    chosen = [state for state in found if not requirement.in_stable_states or state.stable is True]
    unsure = not found.complete or (requirement.in_stable_states and any(s.stable is None for s in found))
    pairs = [(state, _value(state, requirement, values)) for state in chosen]
    numbers = tuple(sorted(value for _, value in pairs if value is not None))
    form = requirement.relation.form
    if any(value is None for _, value in pairs):
        return Judged("undecided", numbers, limits, None, f"a state has no {requirement.measure}")
    best = [(max(room(v, pair) for pair in limits), state, v) for state, v in pairs if v is not None]
    outside = [(left, s, v) for left, s, v in best if not any(within(v, pair, form) for pair in limits)]
    margin = min((left for left, _, _ in best), default=None)
    if outside:
        left, state, value = min(outside, key=lambda entry: entry[0])
        proved = state.certified_radius > 0.0
        return Judged("violated" if proved else "undecided", numbers, limits, left, f"state {state.name}: {value:.6g}")
    if unsure or (not numbers and not found.complete):
        return Judged("undecided", numbers, limits, None, f"{found.word} list of states")
    missing = [pair for pair in limits if not any(within(v, pair, form) for v in numbers)]
    if missing:
        return Judged("violated", numbers, limits, None, f"no state in {missing[0][0]} .. {missing[0][1]}")
    return Judged("met", numbers, limits, margin)


def _value(state: State, requirement: Requirement, values: Mapping[str, object]) -> float | None:
    if requirement.measure == "growth rate":
        return state.growth_rate
    if requirement.measure == "damping":
        return state.damping
    assert requirement.target is not None
    return float(evaluate(requirement.target, values, dict(state.nets)))
