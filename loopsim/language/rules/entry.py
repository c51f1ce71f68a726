"""What the table of mistakes holds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

HEAD = "circuit example\n"
OPENING, CLOSING = "\u27e6", "\u27e7"  # white square brackets: they stand in no circuit file


@dataclass(frozen=True)
class Example:
    """Something malformed.

    written: a circuit file without its first line `circuit example`, or whole where `headless`; the place that the message shows stands in
    white square brackets. files: others beside it, by name; data: bytes that follow; padding: so many `#` follow.
    words: the command, `FILE` standing for the file; program: Python instead of a file.
    """

    written: str = ""
    headless: bool = False
    files: Mapping[str, str] = field(default_factory=dict)
    data: bytes = b""
    padding: int = 0
    words: tuple[str, ...] = ("states", "FILE")
    program: str = ""

    @property
    def text(self) -> str:
        """The file."""
        text = self.written.replace(OPENING, "").replace(CLOSING, "") + "#" * self.padding
        return text if self.headless else HEAD + text

    @property
    def place(self) -> tuple[int, int, int] | None:
        """Line, column and width that the message shows, or None where it shows none."""
        before, mark, rest = self.written.partition(OPENING)
        if not mark:
            return None
        line = before.count("\n") + (1 if self.headless else 2)
        return line, len(before) - before.rfind("\n"), max(1, rest.index(CLOSING))


@dataclass(frozen=True)
class Mistake:
    """code: stable; rule: in one sentence; way_out: the hint where the message has none of its own; examples: each gives this code."""

    code: str
    rule: str
    way_out: str
    examples: tuple[Example, ...]


def mistake(code: str, rule: str, way_out: str, *examples: Example | str) -> Mistake:
    """An entry of the table; an example that is a text stands for a circuit file."""
    made = tuple(Example(example) if isinstance(example, str) else example for example in examples)
    return Mistake(code, rule, way_out, made)


