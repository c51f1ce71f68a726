"""Which function serves which measure."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from loopsim.circuit import Requirement
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.counts import COUNTS, counts
from loopsim.requirements.judged import Judged
from loopsim.requirements.jumps import JUMPS, jumps
from loopsim.requirements.slopes import slope
from loopsim.requirements.values import damping, growth_rate, values

Server = Callable[[Computed, Requirement, Settings], Judged]

SERVERS: Mapping[str, Server] = {
    **dict.fromkeys(COUNTS, counts),
    **dict.fromkeys(JUMPS, jumps),
    "values": values,
    "growth rate": growth_rate,
    "damping": damping,
    "slope": slope,
}
