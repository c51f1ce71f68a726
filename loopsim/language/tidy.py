"""The standard layout of a circuit file: spacing, indentation, blank lines. Comments and meaning stay, which is checked."""

from __future__ import annotations

import re

from loopsim.language.parser import statements
from loopsim.language.source import Source
from loopsim.units import CODE_PATTERN, UNIT_PATTERN

INDENT = "  "
_TOKEN = re.compile(
    r'(?P<text>"[^"]*"?)|(?P<comment>#.*)|(?P<link>--|->)|(?P<spread>\+/-|\u00b1)|(?P<range>\.\.)'
    rf"|(?P<code>{CODE_PATTERN})|(?P<number>[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?)"
    r"|(?P<name>[A-Za-z_][A-Za-z0-9_]*(?:\.[A-Za-z_][A-Za-z0-9_]*)*)|(?P<mark>[^\s])|(?P<blank>\s+)"
)
_UNIT = re.compile(UNIT_PATTERN)


def tidy(text: str, file: str = "<text>") -> str:
    """`text` in the standard layout. CircuitError when it does not parse: a broken file is left to its author."""
    source = Source(file, text)
    before = statements(source)
    laid_out = _lay_out(source.text)
    after = statements(Source(file, laid_out))
    if _shape(before) != _shape(after):  # a guard, not a path that is expected
        return text
    return laid_out


def _shape(found: object) -> str:
    """Statements without their places."""
    return re.sub(r"Place\([^)]*\)", "", repr(found))


def _lay_out(text: str) -> str:
    lines: list[str] = []
    depth = round_depth = 0
    goes_on = False
    for raw in text.replace("\r\n", "\n").split("\n"):
        tokens = _tokens(raw)
        if not tokens:
            if lines and lines[-1] != "":
                lines.append("")
            continue
        closing = tokens[0][1] == "}"
        level = depth - (1 if closing else 0) + (1 if goes_on or round_depth else 0)
        starts_with_link = tokens[0][0] == "link" and not goes_on
        lines.append(INDENT * (max(0, level) + (1 if starts_with_link else 0)) + _join(tokens))
        for kind, word in tokens:
            if kind == "mark":
                depth += {"{": 1, "}": -1}.get(word, 0) if not _is_set(raw) else 0
                round_depth += {"(": 1, ")": -1}.get(word, 0)
        last = next((token for token in reversed(tokens) if token[0] != "comment"), ("", ""))
        goes_on = round_depth > 0 or last[0] == "link" or last[1] == "," or (goes_on and last == ("", ""))
        depth = max(0, depth)
        round_depth = max(0, round_depth)
    while lines and lines[-1] == "":
        lines.pop()
    while lines and lines[0] == "":
        lines.pop(0)
    return "\n".join(lines) + "\n" if lines else ""


def _is_set(raw: str) -> bool:
    """Braces of a set of values, which open and close within a requirement."""
    return raw.lstrip().startswith("expect")


def _tokens(line: str) -> list[tuple[str, str]]:
    found: list[tuple[str, str]] = []
    at = 0
    while at < len(line):
        if found and found[-1][0] == "number":
            blank = re.match(r"[ \t]*", line[at:])
            skip = blank.end() if blank else 0
            unit = _UNIT.match(line, at + skip)
            if unit:
                found.append(("unit", unit.group()))
                at = unit.end()
                continue
        match = _TOKEN.match(line, at)
        if match is None:
            break
        at = match.end()
        kind = match.lastgroup or "mark"
        if kind != "blank":
            found.append((kind, match.group().rstrip() if kind == "comment" else match.group()))
    return found


def _join(tokens: list[tuple[str, str]]) -> str:
    out = ""
    previous: tuple[str, str] = ("", "")
    before_previous: tuple[str, str] = ("", "")
    for token in tokens:
        out += _gap(before_previous, previous, token) + token[1]
        before_previous, previous = previous, token
    return out.rstrip()


def _gap(before_previous: tuple[str, str], previous: tuple[str, str], token: tuple[str, str]) -> str:
    """What stands between two tokens. before_previous: the one before them, ("", "") for none."""
    if previous[0] == "":
        return ""
    if token[0] == "comment":
        return "  "
    if token[1] in (",", ";", ")", ":") or previous[1] == "(" or "^" in (token[1], previous[1]):
        return ""
    if token[1] == "(" and previous[0] == "name":
        return ""
    return "" if _is_sign(previous, before_previous) else " "


def _is_sign(token: tuple[str, str], before: tuple[str, str]) -> bool:
    """Whether a plus or minus belongs to what follows and joins nothing."""
    return token in (("mark", "-"), ("mark", "+")) and (
        before[0] in ("", "link", "range", "spread")
        or before[1] in ("(", ",", "=", "+", "-", "*", "/", "^", "<", ">", "{", ":", ";", "in", "of")
    )
