"""Which function serves which measure."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

from loopsim.circuit import Requirement
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.corners import over_tolerances
from loopsim.requirements.counts import COUNTS, counts
from loopsim.requirements.judged import Judged, open_question
from loopsim.requirements.jump_corners import jumps_over_tolerances
from loopsim.requirements.jumps import JUMPS, jumps
from loopsim.requirements.oscillation import OSCILLATION, oscillation
from loopsim.requirements.proof import PROVED
from loopsim.requirements.proved_tolerances import count_is_proved
from loopsim.requirements.settling import SETTLING, settling
from loopsim.requirements.slopes import slope
from loopsim.requirements.values import damping, growth_rate, values

Server = Callable[[Computed, Requirement, Settings], Judged]

SERVERS: Mapping[str, Server] = {
    **dict.fromkeys(COUNTS, counts),
    **dict.fromkeys(JUMPS, jumps),
    **dict.fromkeys(OSCILLATION, oscillation),
    **dict.fromkeys(SETTLING, settling),
    "values": values,
    "growth rate": growth_rate,
    "damping": damping,
    "slope": slope,
}


def measure(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """One requirement at one choice of its lets; AnalysisError where its analysis does not come to an end."""
    server = SERVERS.get(requirement.measure)
    if server is None:
        return open_question(f"{requirement.measure}: not measured yet")
    if not requirement.over_tolerances:
        return server(computed, requirement, settings)
    if requirement.measure in JUMPS:
        return jumps_over_tolerances(computed, requirement, settings)
    found = over_tolerances(computed, requirement, settings, lambda corner: server(computed, requirement, {**settings, **corner}))
    if computed.require_proof and found.outcome == "met" and len(found.measured) == 1:
        if count_is_proved(computed, requirement, settings, found.measured[0]):
            return replace(found, proof=PROVED)
    return found
