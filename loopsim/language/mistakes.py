"""What can be wrong in a circuit file, in words: one table that is the messages, their test and their page.

`MISTAKES` maps a code to (what it says, examples that give it). The examples are whole texts; a test parses every one.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable

from loopsim.errors import CircuitError, Span

STATEMENTS = ("circuit", "use", "let", "kind", "curve", "block", "couple", "expect")

# how a terminal is called in a message
TERMINALS = {
    "NAME": "a name", "NUMBER": "a number", "UNIT": "a unit", "PERCENT": "`%`", "CODE": "a value code", "STRING": "a text in quotes",
    "PLAIN_LINK": "`--`", "ARROW": "`->`", "PLUS_MINUS": "`+/-`", "RANGE": "`..`", "EQUALS": "`=`", "COLON": "`:`", "SEMICOLON": "`;`",
    "COMMA": "`,`", "OPEN": "`(`", "CLOSE": "`)`", "BRACE_OPEN": "`{`", "BRACE_CLOSE": "`}`", "LESS": "`<`", "GREATER": "`>`",
    "PLUS": "`+`", "MINUS": "`-`", "STAR": "`*`", "SLASH": "`/`", "CARET": "`^`", "_LINE_END": "the end of the line",
    "IN": "`in`", "OF": "`of`", "ALONG": "`along`", "AT": "`at`", "FROM": "`from`", "IN_STABLE_STATES": "`in stable states`",
    "OVER_TOLERANCES": "`over tolerances`", **{word.upper(): f"`{word}`" for word in STATEMENTS},
}  # fmt: skip


def nearest(word: str, known: Iterable[str]) -> str:
    """A hint with the nearest known name, or nothing."""
    found = difflib.get_close_matches(word, list(known), n=1, cutoff=0.6)
    return f"did you mean `{found[0]}`?" if found else ""


def syntax_mistake(span: Span, kind: str, text: str, expected: Iterable[str], before: str) -> CircuitError:
    """The error for a place where the grammar cannot go on. kind: the terminal found ("" for none); before: the line up to there."""
    wanted = sorted({TERMINALS[name] for name in expected if name in TERMINALS and name != "_LINE_END"})
    hint = (
        f"expected {', '.join(wanted[:-1])}{' or ' if len(wanted) > 1 else ''}{wanted[-1]}"
        if 0 < len(wanted) <= 6
        else ""
    )
    if kind == "$END":
        return CircuitError(
            "unfinished", "the file ends inside a statement", span, hint or "a bracket or brace is still open"
        )
    if kind == "_LINE_END":
        return CircuitError("unfinished", "the line ends before the statement does", span, hint)
    if (
        kind == "NAME"
        and re.search(r"[0-9]\s*$", before)
        and not re.search(r"[A-Za-z_][A-Za-z0-9_]*\s*$", before)
    ):
        return CircuitError("unknown-unit", f"`{text}` is no unit", span, _unit_hint(text))
    if text == '"':
        return CircuitError("open-text", "a text in quotes does not end on its line", span, 'close it with "')
    if kind == "" and re.search(r"[0-9]$", before) and (text in "_." or text.isdigit() or not text.isascii()):
        return CircuitError(
            "bad-number",
            f"`{text}` cannot stand in a number",
            span,
            "digits 0-9, one point, an exponent like 1e3",
        )
    if kind == "" and not text.isascii():
        return CircuitError(
            "unknown-character",
            f"the character {text!r} has no meaning here",
            span,
            hint or "names use letters, digits and _",
        )
    if kind == "":
        return CircuitError("unknown-character", f"the character `{text}` has no meaning here", span, hint)
    if not before.strip() and kind == "NAME":
        return CircuitError(
            "unexpected", f"a statement cannot begin with `{text}`", span, nearest(text, STATEMENTS) or hint
        )
    return CircuitError("unexpected", f"`{text}` does not fit here", span, hint)


def _unit_hint(text: str) -> str:
    units = [
        "V",
        "A",
        "ohm",
        "S",
        "F",
        "H",
        "Hz",
        "s",
        "K",
        "W",
        "J",
        "C",
        "degC",
        "ppm",
        "dB",
        "kohm",
        "Mohm",
        "mV",
        "uA",
        "nF",
        "pF",
        "mA",
    ]
    found = difflib.get_close_matches(text, units, n=1, cutoff=0.5)
    if not found and text.lower() in {unit.lower() for unit in units}:
        found = [unit for unit in units if unit.lower() == text.lower()][:1]
    return (
        f"did you mean `{found[0]}`?"
        if found
        else "units are V A ohm S F H Hz s K W J C degC % ppm dB with prefixes f p n u m k M G T"
    )
