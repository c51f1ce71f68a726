"""Lines that a CI server shows beside the source: one for each requirement that does not hold and for each
file that cannot be read."""

from __future__ import annotations

import re
from collections.abc import Sequence

from loopsim.errors import CircuitError
from loopsim.printable import printable
from loopsim.requirements.outcomes import RequirementOutcome


def annotation_lines(outcomes: Sequence[RequirementOutcome], mistakes: Sequence[CircuitError] = ()) -> str:
    """`::error file=F,line=N,col=N,title=T::MESSAGE`, a line each; empty where all is well. Nothing in a name
    can end or begin a line or a field."""
    lines = [
        _line(mistake.file or "", mistake.line, mistake.column, mistake.code, _said(mistake)) for mistake in mistakes
    ]
    for outcome in outcomes:
        if outcome.outcome != "met":
            message = f"{outcome.text}: {outcome.note}" if outcome.note else outcome.text
            title = f"{outcome.outcome}: {outcome.circuit}::{outcome.label}"
            lines.append(_line(outcome.file or "", outcome.line, 1 if outcome.line else None, title, message))
    return "".join(f"{line}\n" for line in lines)


def no_order(text: str) -> str:
    """Lines of a log of which none begins as an order to a CI server does, whatever the files are called."""
    return re.sub(r"^([ \t]*)([:#])(?=\2)", lambda match: f"{match[1]}\\x{ord(match[2]):02x}", text, flags=re.MULTILINE)


def _said(mistake: CircuitError) -> str:
    return f"{mistake.message} ({mistake.hint})" if mistake.hint else mistake.message


def _line(file: str, line: int | None, column: int | None, title: str, message: str) -> str:
    fields = {"file": file, "line": line, "col": column, "title": title}
    given = ",".join(f"{name}={_field(str(value))}" for name, value in fields.items() if value not in (None, ""))
    return f"::error {given}::{_text(message)}"


def _text(text: str) -> str:
    """The message: a percent sign begins an escape there, a line end ends it."""
    return printable(text).replace("%", "%25").replace("\r", "%0D").replace("\n", "%0A")


def _field(text: str) -> str:
    """A field, which a colon or a comma would end too."""
    return _text(text).replace(":", "%3A").replace(",", "%2C")
