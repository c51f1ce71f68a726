"""Exit codes of the command, and which of several applies."""

from __future__ import annotations

from collections.abc import Iterable
from enum import IntEnum


class Exit(IntEnum):
    """What the shell is told."""

    WELL = 0
    VIOLATED = 1
    MISTAKE = 2
    UNDECIDED = 3
    INTERNAL = 4
    NOTHING = 5
    INTERRUPTED = 130


MEANINGS = {
    Exit.WELL: "all well",
    Exit.VIOLATED: "a requirement is violated",
    Exit.MISTAKE: "a mistake in the command line or in a circuit file",
    Exit.UNDECIDED: "something stayed undecided within the budget",
    Exit.INTERNAL: "loopsim contradicts itself: a bug to report",
    Exit.NOTHING: "nothing to verify was found",
    Exit.INTERRUPTED: "interrupted; what was finished is kept",
}

RANKING = (
    Exit.INTERRUPTED,
    Exit.INTERNAL,
    Exit.MISTAKE,
    Exit.VIOLATED,
    Exit.UNDECIDED,
    Exit.NOTHING,
    Exit.WELL,
)


def highest_ranked(codes: Iterable[int]) -> Exit:
    """The one code that speaks for all of them; WELL for none."""
    seen = set(codes)
    return next((code for code in RANKING if code in seen), Exit.WELL)
