"""Where a circuit comes to rest from a start, and how long it takes: start state, final value, settling time.

Without `from START`, a start state is that of supplies that come up; a final value or a settling time belongs to a waveform where the
circuit has one, and then begins in its stable state at time 0, else to supplies that come up, too. How fast they come up can decide where a
circuit ends; where no waveform says it, a fast, a middling and a slow ramp are tried, and all of them must keep the limits.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

from loopsim.analyses.stability import judge
from loopsim.circuit import Requirement
from loopsim.equations.assemble import assemble
from loopsim.errors import AnalysisError
from loopsim.requirements.at_rest import RAMPS
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.judged import Judged, number, open_question
from loopsim.requirements.limits import Limits, limits_of
from loopsim.requirements.proof import SIMULATED
from loopsim.requirements.targets import net_of

if TYPE_CHECKING:
    from loopsim.analyses.transient import Transient

SETTLING = ("start state", "final value", "settling time")
BAND = 0.01  # of the net's whole excursion: inside it, the net has settled
TIMING = 1e-3  # of a settling time: how far it may be off
SAME = 1e-4  # of their size: runs that end this close end alike
DOUBT = 10.0  # times the tolerance of the run: how far a voltage it ends with may be off, of the net's excursion


def settling(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `start state`, `final value`, `settling time`."""
    limits = limits_of(requirement.relation, computed.values(settings))
    if net_of(requirement) not in computed.circuit.nets:
        return open_question(f"{requirement.measure}: only of a net", limits)
    start = requirement.start or _own_start(computed, requirement, settings)
    moving = bool(assemble(computed.circuit, settings).timed)
    paces = RAMPS if start == "off" and not moving and requirement.measure != "settling time" else RAMPS[:1]
    tried = [_tried(computed, requirement, settings, limits, computed.run(start, settings, pace)) for pace in paces]
    worst = min(tried, key=lambda judged: judged.badness)
    numbers = sorted(value for judged in tried for value in judged.measured)
    same = not numbers or numbers[-1] - numbers[0] <= SAME * max(abs(numbers[-1]), abs(numbers[0]))
    return worst if same else replace(worst, measured=(numbers[0], numbers[-1]))


def _tried(computed: Computed, requirement: Requirement, settings: Settings, limits: Limits, run: Transient) -> Judged:
    """One run judged. Long steps damp what grows, so that a run can come to rest where the circuit cannot stay: the end is judged first."""
    if run.end_state or run.end == "settles":
        (verdict,) = judge(assemble(computed.circuit, settings), run.path.end_x[None])
        if verdict.stable is not True:
            return open_question(f"from {run.start} it {run.end}, a point that is {verdict.text}", limits)
    return judge_run(run, requirement, limits)


def _own_start(computed: Computed, requirement: Requirement, settings: Settings) -> str:
    """The start of a requirement that names none; AnalysisError `start` where there is a choice."""
    if requirement.measure == "start state" or not assemble(computed.circuit, settings).timed:
        return "off"
    found = computed.states(settings)
    stable = [state.name for state in found if state.stable]
    if len(stable) != 1 or not found.complete:
        listed = ", ".join(stable) or "none"
        raise AnalysisError("start", f"which state it starts in is open (stable ones at time 0: {listed}): say `from`")
    return stable[0]


def judge_run(run: Transient, requirement: Requirement, limits: Limits) -> Judged:
    """The number of the requirement's net in a run that has come to rest, judged."""
    net = net_of(requirement)
    if run.end.startswith("oscillates"):
        return Judged("violated", (), limits, None, f"from {run.start} it never comes to rest: it {run.end}", SIMULATED)
    if not (run.end_state or run.end == "settles"):
        return open_question(f"from {run.start}: {run.end} after {run.times[-1]:.4g} s", limits)
    ramp = "".join(f"; {note}" for note in run.notes if note.startswith("supplies came up"))
    if requirement.measure == "settling time":
        value = run.settling_time(net, BAND)
        where = f"from {run.start}: settles in {value:.6g} s{ramp}"
        return number(value, TIMING * value, limits, requirement.relation.form, SIMULATED, where)
    value = run.final(net)
    excursion = float(max(abs(run[net]).max(), abs(value)))
    where = f"from {run.start} it {run.end} with {net} at {value:.6g} V{ramp}"
    return number(value, DOUBT * run.tolerance * excursion, limits, requirement.relation.form, SIMULATED, where)
