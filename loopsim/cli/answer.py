"""What a verb gives back, and what it may know about where its answer goes."""

from __future__ import annotations

from dataclasses import dataclass, field

from loopsim.cli.exits import Exit
from loopsim.output.terminal import PLAIN, Palette


@dataclass(frozen=True, slots=True)
class Surroundings:
    """Where the answer goes. answers, remarks: colours of the two streams; watched: a person sees standard error
    on a terminal, so that progress may be shown; quiet: as asked for."""

    answers: Palette = PLAIN
    remarks: Palette = PLAIN
    watched: bool = False
    quiet: bool = False


@dataclass(frozen=True, slots=True)
class Answer:
    """text: for standard output; code: the exit code; remarks: lines for standard error."""

    text: str
    code: Exit = Exit.WELL
    remarks: tuple[str, ...] = field(default=())
