"""Text that is safe to show: nothing from a circuit file may move a cursor, change a colour or turn the reading direction."""

from __future__ import annotations

import unicodedata

# Cc control, Cf format (bidirectional marks), Cs lone surrogate, Co private, Cn unassigned, Zl and Zp line and paragraph ends
_UNSAFE = frozenset({"Cc", "Cf", "Cs", "Co", "Cn", "Zl", "Zp"})


def is_safe(character: str) -> bool:
    """Whether one character may stand in a terminal, a table or a log as it is."""
    return " " <= character <= "~" or (character > "\x9f" and unicodedata.category(character) not in _UNSAFE)


def printable(text: str) -> str:
    """`text` with every unsafe character written as an escape (\\x1b, \\u202e): one line, inert, still readable."""
    if text.isascii() and text.isprintable():
        return text
    return "".join(c if is_safe(c) else c.encode("unicode_escape", "backslashreplace").decode("ascii") for c in text)


def one_column(text: str) -> str:
    """`text` with every unsafe character, tabs too, replaced by one blank or question mark, so that columns keep their place."""
    return "".join(c if is_safe(c) else (" " if c == "\t" else "?") for c in text)


def cell_width(text: str) -> int:
    """Columns that `text` takes in a terminal: wide East Asian characters take two, combining marks none."""
    if text.isascii():
        return len(text)
    return sum(0 if unicodedata.combining(c) else 2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)


def padded(text: str, width: int) -> str:
    """`text` with blanks behind it up to `width` columns."""
    return text + " " * (width - cell_width(text))


def printable_lines(text: str) -> str:
    """`text` with every line made printable; its line ends stay."""
    return "\n".join(printable(line) for line in text.split("\n"))
