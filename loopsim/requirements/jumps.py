"""Where a net jumps while a let moves slowly: rising threshold, falling threshold, and their distance.

The value comes from folds located on the branches that a slow ride from each end takes. How far it is proved is told by the label: `proved`
where the proof covers every value of the let, else at how many values of the let all states were proved to lie on those branches.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopsim.circuit import Requirement
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.judged import Judged, number, open_question
from loopsim.requirements.limits import Limits, limits_of
from loopsim.requirements.proof import PROVED, STATIONS
from loopsim.requirements.targets import net_of

if TYPE_CHECKING:
    from loopsim.analyses.trace import Fold, Trace

JUMPS = {"rising threshold": "rising", "falling threshold": "falling", "hysteresis": "hysteresis"}


def jumps(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `rising threshold`, `falling threshold`, `hysteresis`."""
    limits = limits_of(requirement.relation, computed.values(settings))
    if requirement.along is None or net_of(requirement) not in computed.circuit.nets:
        return open_question(f"{requirement.measure}: only of a net along a let", limits)
    # corners are no proof anyway
    proving = computed.require_proof and not requirement.over_tolerances
    curve = (computed.proved_trace if proving else computed.trace)(requirement.along, settings)
    return judge_trace(curve, requirement, limits)


def judge_trace(curve: Trace, requirement: Requirement, limits: Limits) -> Judged:
    """The threshold of the requirement's net, judged; undecided unless the states are complete at every station."""
    net = net_of(requirement)
    known = curve.thresholds(net)
    value: float | None = getattr(known, JUMPS[requirement.measure])
    measured = () if value is None else (value,)
    if not curve.complete or curve.notes:
        why = curve.notes[0] if curve.notes else f"complete at {len(curve.complete_at)} of {len(curve.stations)} stations"
        return open_question(f"the trace is not complete: {why}", limits, measured)
    no_start = _no_start(curve, requirement)
    if no_start:
        return open_question(no_start, limits, measured)
    proof = PROVED if curve.over_range and not curve.gaps else STATIONS.format(len(curve.stations))
    if value is None:
        return _none(curve, requirement, limits, proof)
    error = _precision(curve, requirement.measure)
    return number(value, error, limits, requirement.relation.form, proof, _where(curve, requirement, value))


def ways_of(requirement: Requirement) -> tuple[str, ...]:
    """The thresholds that a measure is made of."""
    return ("rising", "falling") if requirement.measure == "hysteresis" else (JUMPS[requirement.measure],)


def _no_start(curve: Trace, requirement: Requirement) -> str:
    """Why a slow ride has nowhere to begin, or may begin in more states than are known to be stable; empty where it can."""
    for way in ways_of(requirement):
        end = curve.low if way == "rising" else curve.high
        stable = [b.stable[k] for b in curve.branches if not b.closed for k in (0, -1) if float(b.values[k]) == end]
        if None in stable:
            return f"whether a state at {requirement.along} = {end:.6g} is stable is undecided"
        if True not in stable:
            return f"no state at {requirement.along} = {end:.6g} is stable, so that no slow ride begins there"
    return ""


def _none(curve: Trace, requirement: Requirement, limits: Limits, proof: str) -> Judged:
    """No such jump: sure only where nothing else could have ended the ride."""
    if curve.crossings:
        first = curve.crossings[0]
        note = f"no jump found, and the stability changes without a fold at {first.at:.6g}"
        return open_question(note, limits)
    unlanded = [fold for fold in curve.folds if fold.from_stable and fold.lands is None]
    if unlanded:
        return open_question(f"where the jump at {unlanded[0].at:.6g} lands was not found", limits)
    net = net_of(requirement)
    small = [fold for fold in curve.folds if fold.from_stable and fold.direction in ways_of(requirement)]
    if small:
        at, lands = small[0], small[0].lands or {}
        note = f"a branch ends at {at.at:.6g}, but {net} hardly moves there: {at.nets[net]:.4g} to {lands.get(net, at.nets[net]):.4g} V"
        return open_question(note, limits)
    way = {"rising threshold": "for a rising", "falling threshold": "for a falling"}.get(requirement.measure, "both ways for a")
    note = f"{net} never jumps {way} {requirement.along} within {curve.low:.6g} .. {curve.high:.6g}"
    return Judged("violated", (), limits, None, note, proof)


def _precision(curve: Trace, measure: str) -> float:
    """How far a threshold may be off [unit of the let]: by the precision of its folds, twice for a distance."""
    worst = max((fold.precision for fold in curve.folds), default=0.0)
    return worst * (curve.high - curve.low) * (2.0 if measure == "hysteresis" else 1.0)


def _where(curve: Trace, requirement: Requirement, value: float) -> str:
    """`out jumps from 0.02 to 8.98 V at level = 5.45`."""
    net, known = net_of(requirement), curve.thresholds(net_of(requirement))
    if requirement.measure == "hysteresis":
        return f"{net} jumps at {requirement.along} = {known.rising:.6g} and back at {known.falling:.6g}"
    direction = JUMPS[requirement.measure]
    fold = fold_at(curve, value, direction)
    moved = ""
    if fold is not None and fold.lands is not None:
        moved = f" from {fold.nets[net]:.4g} to {fold.lands[net]:.4g} V"
    others = [at for at in getattr(known, f"all_{direction}") if at != value]
    more = f", again at {', '.join(f'{at:.6g}' for at in others)}" if others else ""
    return f"{net} jumps{moved} at {requirement.along} = {value:.6g}{more}"


def fold_at(curve: Trace, value: float, direction: str) -> Fold | None:
    """The fold whose place is the threshold."""
    near = [fold for fold in curve.folds if fold.direction == direction and fold.at == value]
    return near[0] if near else None
