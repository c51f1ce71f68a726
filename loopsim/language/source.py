"""One text with its name, and the places in it."""

from __future__ import annotations

from lark import Token

from loopsim.errors import Span
from loopsim.language import tree as t


class Source:
    """One text with its name; makes spans of places."""

    def __init__(self, file: str, text: str) -> None:
        self.file = file
        self.text = text = text.removeprefix("\ufeff")
        self.lines = text.split("\n")

    def span(self, place: t.Place) -> Span:
        """The first line of a place, as a span."""
        line = self.lines[place.line - 1].rstrip("\r") if place.line <= len(self.lines) else ""
        end = place.end_column if place.end_line == place.line else len(line) + 1
        return Span(self.file, place.line, place.column, max(end, place.column + 1), line)

    def at(self, line: int, column: int, width: int = 1) -> Span:
        """A span of one place."""
        return self.span(t.Place(line, column, line, column + width))


def place(token: Token) -> t.Place:
    """Where a token stands."""
    line, column = token.line or 1, token.column or 1
    return t.Place(line, column, token.end_line or line, token.end_column or column + 1)
