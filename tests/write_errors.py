"""Writes docs/reference/errors.md from the table of mistakes: each code with its rule, its way out, an example and what is printed."""

import sys
import tempfile
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent / "language"))
from malformed import FILE, told

from loopsim.language.rules import GROUPS, Example, Mistake

PAGE = Path(__file__).parent.parent / "docs/reference/errors.md"
HEAD = """# Errors

A mistake that a person can mend reads `file:line:column: code: message`; below it stand the line, a caret under the place, and a way out.
The command ends with exit code 2. Codes are stable. In Python it is a `loopsim.CircuitError` with `code`, `message`, `file`, `line`,
`column` and `hint`. This page is made from the table that the tests run: every example below is tried, and printed is what came.
An analysis that cannot finish raises `loopsim.AnalysisError`, with a code and a hint of its own and the last good state it had.
"""
LONGEST = 100  # characters of a line that are shown
MOST_LINES = 14


def page() -> str:
    """The whole page."""
    sections = []
    for title, entries in GROUPS.items():
        codes = ", ".join(f"[`{entry.code}`](#{entry.code})" for entry in entries)
        sections.append(f"## {title}\n\n{codes}\n")
        sections += [_section(entry) for entry in entries]
    return "\n".join([HEAD, *sections])


def _section(entry: Mistake) -> str:
    example = next((one for one in entry.examples if not one.padding), None)
    lines = [f"### {entry.code}", "", entry.rule, "", f"Way out: {entry.way_out}.", ""]
    if example is not None:
        lines += [_fenced(_input(example)), "", _fenced(_printed(example)), ""]
    return "\n".join(lines)


def _input(example: Example) -> str:
    if example.program:
        return example.program
    words = [FILE if word == "FILE" else word for word in example.words]
    shown = "" if example.words == ("states", "FILE") else f"$ loopsim {' '.join(words)}\n"
    others = "".join(f"\n# {name}\n{text}" for name, text in list(example.files.items())[:2])
    return f"{shown}{example.text.rstrip()}\n{others}"


def _printed(example: Example) -> str:
    with tempfile.TemporaryDirectory() as folder:
        return told(example, Path(folder))[1]


def _fenced(text: str) -> str:
    lines = text.rstrip("\n").split("\n")
    if len(lines) > MOST_LINES:
        lines = [*lines[: MOST_LINES // 2], "...", *lines[-MOST_LINES // 2 :]]
    shown = [_visible(line if len(line) <= LONGEST + 40 else f"{line[:LONGEST]} ...") for line in lines]
    return "\n".join(["```text", *(line.rstrip() for line in shown), "```"])


def _visible(line: str) -> str:
    return "".join(character if character.isprintable() else f"\\x{ord(character):02x}" for character in line)


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
