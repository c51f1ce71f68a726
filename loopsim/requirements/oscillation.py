"""Period, frequency, duty and swing of the oscillation that a start leads to (`from off` unless the requirement says otherwise)."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from loopsim.circuit import Requirement
from loopsim.errors import AnalysisError
from loopsim.expressions import NetRef
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.judged import Judged, number, open_question
from loopsim.requirements.limits import Limits, limits_of
from loopsim.requirements.proof import SIMULATED

if TYPE_CHECKING:
    from loopsim.analyses.cycle import Cycle

OSCILLATION = ("period", "frequency", "duty", "swing")
EXACT = 1e-5  # of a number read off a cycle that shooting made exact: its tolerance is 1e-8, the extremes are sampled
READ_OFF = 5e-3  # of one read off a run: states that come back count as the same within 2e-3 of their swings
STILL = 1e-4  # of the largest swing: a net that moves by less takes no part
SAMPLES = 256  # of a period, for what needs no extremes
ALIKE = 1e-2  # of its swing: how near that must be


def oscillation(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `period`, `frequency`, `duty`, `swing`."""
    limits = limits_of(requirement.relation, computed.values(settings))
    if requirement.target is not None and not isinstance(requirement.target, NetRef):
        return open_question(f"{requirement.measure}: only of a net", limits)
    start = requirement.start or "off"
    try:
        found = computed.cycle(start, settings)
    except AnalysisError as error:
        if error.code != "no-cycle":
            raise
        return _at_rest(requirement, limits, f"from {start} {error.message}")
    return judge_cycle(found, requirement, limits)


def _at_rest(requirement: Requirement, limits: Limits, note: str) -> Judged:
    """No oscillation: its swing is nothing, and what else is asked of it is not there."""
    if requirement.measure == "swing":
        return number(0.0, 0.0, limits, requirement.relation.form, SIMULATED, note)
    return Judged("violated", (), limits, None, note, SIMULATED)


def judge_cycle(found: Cycle, requirement: Requirement, limits: Limits) -> Judged:
    """The number of the requirement's net in one cycle, judged."""
    if found.stable is False:
        return open_question("the cycle that was found is unstable: no circuit stays on it", limits)
    net = requirement.target.name if isinstance(requirement.target, NetRef) else None
    sampled = found.at(np.arange(SAMPLES) / SAMPLES * found.period)
    largest = max(float(np.ptp(volts)) for volts in sampled.values())
    still = net is not None and _swing(found, net) <= STILL * largest
    if still and requirement.measure != "swing":
        return Judged("violated", (), limits, None, f"{net} does not move in the oscillation", SIMULATED)
    value = _read(found, requirement.measure, net)
    error = (EXACT if found.exact else READ_OFF) * max(abs(value), largest if requirement.measure == "swing" else 0.0)
    where = f"from {found.start}: {requirement.measure} {value:.6g} in a {found.verdict} of {found.period:.6g} s"
    return number(value, error, limits, requirement.relation.form, SIMULATED, where)


def _read(found: Cycle, measure: str, net: str | None) -> float:
    if measure == "swing":
        assert net is not None
        return _swing(found, net)
    if measure == "duty":
        assert net is not None
        return found.duty(net)
    period = found.period / (1 if net is None else repeats(found, net))
    return period if measure == "period" else 1.0 / period


def _swing(found: Cycle, net: str) -> float:
    return 0.0 if net == "gnd" else found.swing(net)


def repeats(found: Cycle, net: str) -> int:
    """How often a net repeats itself within the period of the whole circuit: twice behind a rectifier, say."""
    times = np.arange(SAMPLES) / SAMPLES * found.period
    volts = found.at(times)[net]
    middle = 0.5 * (volts.max() + volts.min())
    rises = int(np.sum((volts < middle) & (np.roll(volts, -1) >= middle)))
    swing = float(np.ptp(volts))
    for count in range(rises, 1, -1):
        if rises % count == 0:
            later = found.at(times + found.period / count)[net]
            if float(np.max(np.abs(later - volts))) <= ALIKE * swing:
                return count
    return 1
