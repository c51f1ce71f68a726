"""How many operating points there are, of which kind."""

from __future__ import annotations

from loopsim.analyses.results import State, States
from loopsim.circuit import Requirement
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.judged import Judged, open_question
from loopsim.requirements.limits import Limits, limits_of, room, within
from loopsim.requirements.proof import COMPLETE_LIST, PROVED

COUNTS = {"states": (True, False, None), "stable states": (True,), "unstable states": (False,)}
NAMED = 12  # states that a note names


def counts(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `states`, `stable states`, `unstable states`."""
    limits = limits_of(requirement.relation, computed.values(settings))
    return count(computed.states(settings), requirement, limits)


def count(found: States, requirement: Requirement, limits: Limits) -> Judged:
    """Met needs a complete list and every verdict; too many proved ones violate even so."""
    wanted = COUNTS[requirement.measure]
    open_verdicts = sum(state.stable is None for state in found) if None not in wanted else 0
    sure = sum(state.stable in wanted and state.certified_radius > 0.0 for state in found)
    seen = float(sum(state.stable in wanted for state in found))
    pair, form = limits[0], requirement.relation.form
    proof = PROVED if None in wanted else COMPLETE_LIST
    if found.complete and not open_verdicts:
        good = within(seen, pair, form)
        note = "" if good else which(found)
        return Judged("met" if good else "violated", (seen,), limits, room(seen, pair), note, proof)
    high = pair[1]
    if high is not None and (sure > high or (form == "below" and sure >= high)):
        return Judged("violated", (seen,), limits, high - sure, which(found), proof)
    return open_question(doubt(found, open_verdicts), limits, (seen,))


def which(found: States) -> str:
    """Every state in a few words: its letter, its verdict, where the first watched net is."""
    if not len(found):
        return "there is no operating point"
    named = [f"{state.name} {state.verdict}{_place(found, state)}" for state in list(found)[:NAMED]]
    more = len(found) - NAMED
    return ", ".join(named) + (f", and {more} more" if more > 0 else "")


def _place(found: States, state: State) -> str:
    return f" ({found.watch[0]} = {state[found.watch[0]]:.4g} V)" if found.watch else ""


def doubt(found: States, open_verdicts: int) -> str:
    """Why a list does not decide."""
    reasons = []
    if not found.complete:
        left = f": {'; '.join(found.remainder)}" if found.remainder else ""
        reasons.append(f"the list of states is {found.word}, not complete{left}")
    if open_verdicts:
        names = ", ".join(state.name for state in found if state.stable is None)
        reasons.append(f"the verdict on {names} is undecided")
    return "; ".join(reasons)
