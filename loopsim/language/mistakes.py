"""What the grammar cannot read, in words: the mistake behind the place where it stops."""

from __future__ import annotations

import difflib
import re
from collections.abc import Collection, Iterable

from loopsim.errors import CircuitError, Span
from loopsim.units import CODE_PATTERN, PREFIXES, UNIT_PATTERN, UNITS

STATEMENTS = ("circuit", "use", "let", "kind", "curve", "block", "couple", "expect")

# how a terminal is called in a message
TERMINALS = {
    "NAME": "a name", "NUMBER": "a number", "UNIT": "a unit", "PERCENT": "`%`", "CODE": "a value code", "STRING": "a text in quotes",
    "PLAIN_LINK": "`--`", "ARROW": "`->`", "PLUS_MINUS": "`+/-`", "RANGE": "`..`", "EQUALS": "`=`", "COLON": "`:`", "SEMICOLON": "`;`",
    "COMMA": "`,`", "OPEN": "`(`", "CLOSE": "`)`", "BRACE_OPEN": "`{`", "BRACE_CLOSE": "`}`", "LESS": "`<`", "GREATER": "`>`",
    "PLUS": "`+`", "MINUS": "`-`", "STAR": "`*`", "SLASH": "`/`", "CARET": "`^`",
    "IN": "`in`", "OF": "`of`", "ALONG": "`along`", "AT": "`at`", "FROM": "`from`", "IN_STABLE_STATES": "`in stable states`",
    "OVER_TOLERANCES": "`over tolerances`", **{word.upper(): f"`{word}`" for word in STATEMENTS},
}  # fmt: skip
MOST_EXPECTED = 6  # a longer list of what could stand here helps nobody
ORDER = "the order is MEASURE of NET along LET in stable states RELATION at LET = value from START over tolerances"
CLAUSES = ("OF", "ALONG", "AT", "FROM", "IN_STABLE_STATES", "OVER_TOLERANCES")

# characters that look like one of the language, and what is written instead
LOOKALIKES = {
    "\u2014": "`--`", "\u2013": "`-` or `--`", "\u2212": "`-`", "\u2192": "`->`", "\u00d7": "`*`", "\u00b7": "`*`", "\u00f7": "`/`",
    "\u201c": 'a plain "', "\u201d": 'a plain "', "'": 'a plain "', "\u03a9": "`ohm`", "\u2126": "`ohm`", "\u00b0": "`degC`",
    "\u00b2": "`^2`", "\u00b3": "`^3`", "\u2264": "`<`", "\u2265": "`>`", "\u2026": "`..`", "\u00a0": "a plain blank",
    "\ufeff": "nothing: it marks the start of a file", "\r": "a line feed at the end of a line", "!": "`<` or `>`",
}  # fmt: skip
UNIT_WORDS = ("V", "A", "ohm", "S", "F", "H", "Hz", "s", "K", "W", "J", "C", "degC", "ppm", "dB",
              "kohm", "Mohm", "mV", "uA", "nF", "pF", "mA", "kHz", "ms", "us")  # fmt: skip
UNIT_LIST = "units are V A ohm S F H Hz s K W J C degC % ppm dB with prefixes f p n u m k M G T"
DIGITS = "digits 0-9, one point, an exponent like 1e3"


def nearest(word: str, known: Iterable[str], likeness: float = 0.6) -> str:
    """A hint with the nearest known name, or nothing."""
    names = list(known)
    found = difflib.get_close_matches(word, names, n=1, cutoff=likeness)
    if not found:
        found = [name for name in names if name.lower() == word.lower()]
    return f"did you mean `{found[0]}`?" if found else ""


def syntax_mistake(
    span: Span, kind: str, text: str, expected: Iterable[str], before: str, after: str
) -> CircuitError:
    """The error for a place where the grammar cannot go on.

    kind: the terminal found, "" for none; text: what stands there; before, after: the line up to there, and from there.
    """
    expected = frozenset(expected)
    hint = _expected(expected) or _missing(kind, expected, before)
    if kind == "$END":
        return CircuitError(
            "unfinished", "the file ends inside a statement", span, hint or "a bracket or brace is still open"
        )
    if kind == "_LINE_END":
        return CircuitError("unfinished", "the line ends before the statement does", span, hint)
    if text == '"':
        return CircuitError("open-text", "a text in quotes does not end on its line", span, 'close it with "')
    return (
        _number_mistake(span, kind, text, before, after)
        or _unit_mistake(span, kind, text, before, after)
        or _character_mistake(span, kind, text, hint)
        or _word_mistake(span, kind, text, hint, before)
    )


def _expected(terminals: Iterable[str]) -> str:
    wanted = sorted({TERMINALS[name] for name in terminals if name in TERMINALS})
    if not 0 < len(wanted) <= MOST_EXPECTED:
        return ""
    return "expected " + (f"{', '.join(wanted[:-1])} or {wanted[-1]}" if len(wanted) > 1 else wanted[0])


def _missing(kind: str, expected: Collection[str], before: str) -> str:
    """The mark that is missing where a name or a value follows another."""
    if kind not in ("NAME", "NUMBER", "CODE"):
        return ""
    after_name = re.search(r"(?<![A-Za-z0-9_])[A-Za-z_][A-Za-z0-9_.]*[ \t]*$", before) is not None
    if after_name and kind != "NAME" and "EQUALS" in expected:
        return "is `=` missing?"
    return "is `,` missing?" if "COMMA" in expected else ""


def _number_mistake(span: Span, kind: str, text: str, before: str, after: str) -> CircuitError | None:
    """Digits that are no number of the language: 4,7 and .5 and 1_000 and digits of other scripts."""
    behind_digit = re.search(r"(?<![A-Za-z_])[0-9]$", before) is not None
    if text == "," and behind_digit and re.match(r",[0-9]", after):
        return CircuitError("bad-number", "the decimal sign is a point", span, "write 4.7")
    if text == "." and re.match(r"\.[0-9]", after) and not behind_digit:
        return CircuitError("bad-number", "a number begins with a digit", span, "write 0.5")
    if behind_digit and text.startswith("_"):
        return CircuitError("bad-number", f"`{text}` cannot stand in a number", span, DIGITS)
    if kind == "" and ((behind_digit and text in "_.") or (text.isdigit() and not text.isascii())):
        return CircuitError("bad-number", f"`{text}` cannot stand in a number", span, DIGITS)
    return None


def _unit_mistake(span: Span, kind: str, text: str, before: str, after: str) -> CircuitError | None:
    """A word behind a number that is no unit."""
    number = re.search(r"(?<![A-Za-z0-9_])[0-9][0-9.]*(?:[eE][+-]?[0-9]+)?[ \t]*$", before)
    if number is None or not (kind == "NAME" or LOOKALIKES.get(text) in ("`ohm`", "`degC`")):
        return None
    if text == "over":
        return CircuitError("unexpected", "`over` does not fit here", span, "did you mean `over tolerances`?")
    if kind != "NAME":
        return CircuitError("unknown-unit", f"`{text}` is no unit", span, f"write {LOOKALIKES[text]}")
    if after[len(text) : len(text) + 1] in ("\u03a9", "\u2126") and text in PREFIXES:
        return CircuitError("unknown-unit", f"`{after[: len(text) + 1]}` is no unit", span, f"write `{text}ohm`")
    return CircuitError("unknown-unit", f"`{text}` is no unit", span, _unit_hint(text, number.group().strip()))


def _unit_hint(text: str, number: str) -> str:
    if text in PREFIXES:
        unit = "ohm" if text in "kMGT" else "F"
        code = f"{number.replace('.', text)}{'' if '.' in number else text}"
        return f"write `{code}` or `{number} {text}{unit}`"
    if text == "deg":
        return "an angle is a pure number of degrees; a temperature is in degC"
    found = difflib.get_close_matches(text, UNIT_WORDS, n=1, cutoff=0.5)
    if not found:
        found = [unit for unit in (*UNITS, *UNIT_WORDS) if unit.lower() == text.lower()]
    return f"did you mean `{found[0]}`?" if found else UNIT_LIST


def _character_mistake(span: Span, kind: str, text: str, hint: str) -> CircuitError | None:
    """A character that no word of the language has."""
    if kind != "":
        return None
    shown = f"`{text}`" if text.isascii() else repr(text)
    way = f"write {LOOKALIKES[text]}" if text in LOOKALIKES else hint
    if not text.isascii():
        way = way or "names use letters, digits and _"
    return CircuitError("unknown-character", f"the character {shown} has no meaning here", span, way)


def _word_mistake(span: Span, kind: str, text: str, hint: str, before: str) -> CircuitError:
    """A word or mark of the language in the wrong place."""
    if not before.strip() and kind == "NAME":
        hint = nearest(text, STATEMENTS) or hint
        return CircuitError("unexpected", f"a statement cannot begin with `{text}`", span, hint)
    if text == "=" and before[-1:] in ("=", "<", ">"):
        hint = "write one `=`" if before[-1] == "=" else f"write `{before[-1]}`, or in LO .. HI"
    elif re.search(rf"(?<![A-Za-z0-9_]){CODE_PATTERN}[ \t]*$", before) and re.fullmatch(UNIT_PATTERN, text):
        hint = "a value code has its unit in it: 4R7, or 4.7 ohm"
    elif text == "}" and before.strip():
        hint = "each statement of a block has a line of its own, and so has the closing brace"
    elif kind in CLAUSES and before.lstrip().startswith("expect"):
        hint = ORDER
    elif re.fullmatch(r"\s*[A-Za-z_]+\s+", before):
        # a statement's word misspelt reads like the net at the start of a chain
        hint = nearest(before.strip(), STATEMENTS, 0.75) or hint
    return CircuitError("unexpected", f"`{text}` does not fit here", span, hint)
