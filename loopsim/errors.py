"""Where a mistake stands, what rule it breaks, and the ways the tool can fail.

One class a layer: `CircuitError` is the author's mistake in a circuit file and carries its place; `AnalysisError` is an
analysis that could not finish and carries what it had; `InternalError` is a contradiction inside loopsim, a bug to report.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from loopsim.printable import cell_width, one_column, printable

EXCERPT = 120  # characters of a long source line that are shown around the place, so that a caret still meets its line


@dataclass(frozen=True, slots=True)
class Span:
    """A stretch of one line of a source text.

    file: as the user named it; line, column: from 1; end_column: one past the last character, on the same line.
    text: the whole source line, without its line end, so that a caret can be drawn without opening the file again.
    """

    file: str
    line: int
    column: int
    end_column: int
    text: str = ""

    def __str__(self) -> str:
        return f"{self.file}:{self.line}:{self.column}"


class LoopsimError(Exception):
    """Base of every error that loopsim raises on purpose."""


class CircuitError(LoopsimError):
    """A mistake in a circuit file (or in data given to the builder), with its place and a way out.

    code: stable, lower case with hyphens, one page each in docs/reference/errors.md; hint: the way out, may be empty.
    """

    def __init__(self, code: str, message: str, span: Span | None = None, hint: str = "") -> None:
        self.code = code
        self.message = message
        self.span = span
        self.hint = hint
        super().__init__(self.head())

    @property
    def file(self) -> str | None:
        return self.span.file if self.span else None

    @property
    def line(self) -> int | None:
        return self.span.line if self.span else None

    @property
    def column(self) -> int | None:
        return self.span.column if self.span else None

    def head(self) -> str:
        """The first line: file:line:column: code: message. Safe to print whatever the file held."""
        place = f"{printable(str(self.span))}: " if self.span else ""
        return f"{place}{self.code}: {printable(self.message)}"

    def __str__(self) -> str:
        """The head, the source line and a caret under the place with the hint behind it."""
        hint = printable(self.hint)
        if self.span is None or not self.span.text:
            return self.head() + (f"\n    {hint}" if hint else "")
        line, start, end = _excerpt(self.span)
        number = str(self.span.line)
        caret = " " * cell_width(line[:start]) + "^" * max(1, cell_width(line[start:end]))
        return f"{self.head()}\n    {number} | {line}\n    {' ' * len(number)} | {caret}" + (f" {hint}" if hint else "")


def _excerpt(span: Span) -> tuple[str, int, int]:
    """What is shown of the source line, one safe character for each of its own, and where the span stands in it."""
    line = one_column(span.text)
    start = min(max(span.column - 1, 0), len(line))
    end = min(max(span.end_column - 1, start), len(line))
    if len(line) <= EXCERPT:
        return line, start, end
    first = max(0, min(start - EXCERPT // 3, len(line) - EXCERPT))
    return line[first : first + EXCERPT], start - first, min(end - first, EXCERPT)


class AnalysisError(LoopsimError):
    """An analysis that could not finish. last_good: net name to volts at the last good state, may be empty."""

    def __init__(self, code: str, message: str, last_good: Mapping[str, float] | None = None, hint: str = "") -> None:
        self.code = code
        self.message = message
        self.last_good = dict(last_good or {})
        self.hint = hint
        super().__init__(f"{code}: {message}" + (f" ({hint})" if hint else ""))


class MissingExtra(LoopsimError):
    """An optional library is not installed. extra: the name to install, as in `pip install loopsim[plot]`."""

    def __init__(self, extra: str, purpose: str) -> None:
        self.extra = extra
        super().__init__(f"{purpose} needs the optional extra `{extra}`: pip install 'loopsim[{extra}]'")


class InternalError(LoopsimError):
    """Two parts of loopsim contradict each other; nothing that was computed may be believed."""
