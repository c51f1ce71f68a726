"""What a stream may be given: colour or none, and how wide a line may run. Judged for each stream by itself."""

from __future__ import annotations

import os
import shutil
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TextIO

# Blue and orange keep apart for every common kind of colour blindness; weight says the rest.
STRONG, FAINT, CALM, ALARM = "1", "2", "34", "38;5;166"


@dataclass(frozen=True, slots=True)
class Palette:
    """How to mark words. active: with colour codes, or plain text."""

    active: bool = False

    def _mark(self, text: str, code: str) -> str:
        return f"\x1b[{code}m{text}\x1b[0m" if self.active and text else text

    def strong(self, text: str) -> str:
        """A heading."""
        return self._mark(text, STRONG)

    def faint(self, text: str) -> str:
        """A note."""
        return self._mark(text, FAINT)

    def calm(self, text: str) -> str:
        """What is well."""
        return self._mark(text, CALM)

    def alarm(self, text: str) -> str:
        """What asks for attention."""
        return self._mark(text, ALARM)


PLAIN = Palette()


def is_terminal(stream: TextIO) -> bool:
    """Whether a person watches this stream on a terminal that can move its cursor."""
    try:
        return stream.isatty() and os.environ.get("TERM", "") != "dumb"
    except ValueError:  # closed
        return False


def palette_for(stream: TextIO, environment: Mapping[str, str], wish: str = "auto") -> Palette:
    """Colour for `stream` unless the wish is "never", NO_COLOR is set to anything, TERM is dumb, or nobody watches."""
    if wish == "never" or environment.get("NO_COLOR") or environment.get("TERM", "") == "dumb":
        return PLAIN
    try:
        return Palette(active=stream.isatty())
    except ValueError:
        return PLAIN


def line_width(fallback: int = 100) -> int:
    """Columns of the terminal, `fallback` where there is none."""
    return max(40, shutil.get_terminal_size((fallback, 24)).columns)
