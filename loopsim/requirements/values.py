"""Numbers that every operating point has: the value of a net or formula, the growth rate, the damping, the slope along a let."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.results import State, States
from loopsim.circuit import Requirement
from loopsim.expressions import NetRef
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.counts import doubt
from loopsim.requirements.judged import Judged, open_question
from loopsim.requirements.limits import Limits, best_room, keeps_one, limits_of, pair_text, unmet
from loopsim.requirements.proof import COMPLETE_LIST, PROVED
from loopsim.requirements.targets import value_of


@dataclass(frozen=True)
class Reading:
    """A number at one state and how far it may be off."""

    state: State
    value: float
    error: float


def values(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `values`: a net is known to the radius of its proof, a formula is worked out from the nets."""
    lets = computed.values(settings)
    exact = isinstance(requirement.target, NetRef)

    def read(state: State) -> tuple[float, float] | None:
        found = value_of(computed.circuit, requirement, lets, state.nets, state.currents)
        return None if found is None else (found, state.certified_radius)

    return of_states(computed, requirement, settings, read, PROVED if exact else COMPLETE_LIST)


def growth_rate(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `growth rate`."""
    return of_states(computed, requirement, settings, lambda s: _or_none(s.growth_rate), COMPLETE_LIST)


def damping(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `damping`: the smallest ratio of all modes, so that a growing real one (-1) is not hidden by a pair that decays."""
    return of_states(computed, requirement, settings, lambda s: _or_none(smallest_ratio(s.eigenvalues)), COMPLETE_LIST)


def smallest_ratio(eigenvalues: NDArray[np.complex128]) -> float | None:
    """-Re / abs of the least damped mode: 1 for a decaying real one, -1 for a growing one; None without modes or with one at zero."""
    if len(eigenvalues) == 0 or np.any(eigenvalues == 0.0):
        return None
    return float(np.min(-eigenvalues.real / np.abs(eigenvalues)))


def _or_none(value: float | None) -> tuple[float, float] | None:
    return None if value is None else (value, 0.0)


def of_states(
    computed: Computed,
    requirement: Requirement,
    settings: Settings,
    read: Callable[[State], tuple[float, float] | None],
    proof: str,
) -> Judged:
    """A number of each state (each stable one where the requirement says so), judged. read: (value, error) or None."""
    limits = limits_of(requirement.relation, computed.values(settings))
    found = computed.states(settings)
    chosen = [state for state in found if not requirement.in_stable_states or state.stable is True]
    readings, missing = [], []
    for state in chosen:
        pair = read(state)
        if pair is None:
            missing.append(state.name)
        else:
            readings.append(Reading(state, *pair))
    return judge_readings(found, requirement, limits, readings, missing, proof)


def judge_readings(
    found: States, requirement: Requirement, limits: Limits, readings: list[Reading], missing: list[str], proof: str
) -> Judged:
    """All must keep the limits; of a set, each pair must moreover be hit. Outside in a certified state violates, whatever else is open."""
    form, measured = requirement.relation.form, tuple(sorted(reading.value for reading in readings))
    rooms = [(best_room(r.value, limits), r) for r in readings]
    margin = min((left for left, _ in rooms), default=None)
    outside = [(left, r) for left, r in rooms if not keeps_one(r.value, limits, form)]
    sure = [(left, r) for left, r in outside if r.state.certified_radius > 0.0 and -left >= r.error]
    if sure:
        left, worst = min(sure, key=lambda entry: entry[0])
        note = f"state {worst.state.name} ({worst.state.verdict}): {worst.value:.6g}"
        return Judged("violated", measured, limits, left, note, proof)
    if missing:
        return open_question(f"{requirement.measure}: no number in state {', '.join(missing)}", limits, measured)
    if outside:
        name = outside[0][1].state.name
        return open_question(f"state {name} is outside its limits but not proved to be there", limits, measured)
    open_verdicts = sum(s.stable is None for s in found) if requirement.in_stable_states else 0
    if not found.complete or open_verdicts:
        return open_question(doubt(found, open_verdicts), limits, measured)
    unhit = unmet(measured, limits, form) if readings or form == "set" else []
    if unhit:
        return Judged("violated", measured, limits, None, f"no state in {pair_text(unhit[0], requirement.unit)}", proof)
    if not readings:
        kind = "stable state" if requirement.in_stable_states else "operating point"
        return Judged("violated", (), limits, None, f"there is no {kind} to have it", proof)
    tight = [r for left, r in rooms if left < r.error]
    if tight:
        note = f"state {tight[0].state.name}: closer to its limit than the {tight[0].error:.2g} to which it is known"
        return open_question(note, limits, measured)
    return Judged("met", measured, limits, margin, "", proof)
