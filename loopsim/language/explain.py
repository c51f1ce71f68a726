"""From the place where the parser stops to the mistake that was made."""

from __future__ import annotations

import re
from collections.abc import Iterable

from lark import UnexpectedCharacters, UnexpectedInput, UnexpectedToken

from loopsim.errors import CircuitError
from loopsim.language import tree as t
from loopsim.language.mistakes import syntax_mistake
from loopsim.language.source import Source, place

_BRACKETS = re.compile(r'"[^"]*"|#.*|[()]')  # texts and comments are passed over


def explained(source: Source, error: UnexpectedInput) -> CircuitError:
    """The mistake behind a place where the grammar cannot go on."""
    if isinstance(error, UnexpectedCharacters):
        where = t.Place(error.line, error.column, error.line, error.column + 1)
        return _at(source, where, "", error.char, error.allowed or set())
    wanted: Iterable[str] = getattr(error, "accepts", None) or getattr(error, "expected", None) or ()
    if isinstance(error, UnexpectedToken) and error.token.type != "$END":
        where = place(error.token)
        if error.token.type != "_LINE_END":
            return _at(source, where, error.token.type, str(error.token), wanted)
        # the statement breaks off: point behind its last character
        column = min(where.column, len(source.lines[where.line - 1]) + 1)
        return _at(source, t.Place(where.line, column, where.line, column + 1), "_LINE_END", "", wanted)
    last = max((i for i, line in enumerate(source.lines, start=1) if line.strip()), default=1)
    end = len(source.lines[last - 1].rstrip("\r")) + 1
    return _at(source, t.Place(last, end, last, end + 1), "$END", "", wanted)


def _at(source: Source, where: t.Place, kind: str, text: str, wanted: Iterable[str]) -> CircuitError:
    """A bracket that an earlier line leaves open is the mistake, whatever stands here."""
    opening = _left_open(source, where.line)
    if opening is not None:
        return CircuitError("unfinished", "this bracket is not closed", source.at(*opening), "close it with )")
    line = source.lines[where.line - 1]
    return syntax_mistake(source.span(where), kind, text, wanted, line[: where.column - 1], line[where.column - 1 :])


def _left_open(source: Source, line: int) -> tuple[int, int] | None:
    """Line and column of the last round bracket that the lines before `line` open and do not close."""
    opened: list[tuple[int, int]] = []
    for number, text in enumerate(source.lines[: line - 1], start=1):
        for mark in _BRACKETS.finditer(text):
            if mark.group() == "(":
                opened.append((number, mark.start() + 1))
            elif mark.group() == ")" and opened:
                opened.pop()
    return opened[-1] if opened else None
