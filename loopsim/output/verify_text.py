"""Outcomes of requirements for people: a table, worst first; a CSV; a page in Markdown for a CI job."""

from __future__ import annotations

import html
import math
from collections.abc import Mapping, Sequence

from loopsim.output.annotations import no_order
from loopsim.output.csv import csv_text
from loopsim.output.engineering import engineering
from loopsim.output.terminal import PLAIN, Palette
from loopsim.output.text import counted, table
from loopsim.printable import printable
from loopsim.requirements.baseline import Moved
from loopsim.requirements.outcomes import RANK, RequirementOutcome

MANY_VALUES = 3  # measured values that are shown in a row
LONG_TEXT = 52  # characters of a requirement that a row has room for
MARKDOWN_MARKS = str.maketrans({mark: f"\\{mark}" for mark in "\\`*_{}[]()<>#+-!|~$@:"})

KINDS = ("moved", "appeared", "vanished")

Units = Mapping[tuple[str | None, str], str]


def shortage(outcome: RequirementOutcome) -> tuple[int, float]:
    """Sorts violated before undecided before met, and each by its margin as a share of its largest limit,
    smallest first.

    Volts, hertz and counts have no common scale: the share has. A target met to the digit has no room to lose
    and comes last.
    """
    ends = [end for pair in outcome.limits for end in pair if end is not None]
    scale = max((abs(end) for end in ends), default=0.0)
    if outcome.margin is None or (_exact(outcome) and outcome.outcome == "met"):
        return RANK[outcome.outcome], math.inf
    return RANK[outcome.outcome], outcome.margin / scale if scale else outcome.margin


def verify_text(outcomes: Sequence[RequirementOutcome], units: Units | None = None, palette: Palette = PLAIN) -> str:
    """A row each, worst first, with a line below a row that has something to say; then the count of each.
    units: (file, label) to the unit of the measure."""
    found = units or {}
    order = sorted(outcomes, key=shortage)
    rows = [("outcome", "circuit", "requirement", "measured", "margin", "by")]
    for o in order:
        unit = found.get((o.file, o.label), "")
        text = o.text.removeprefix("expect ")
        shown = text if len(text) <= LONG_TEXT else f"{text[: LONG_TEXT - 4]} ..."
        margin = None if _exact(o) and o.outcome == "met" else o.margin
        rows.append((o.outcome, o.circuit, shown, _values(o, unit), _number(margin, unit), o.proof or "-"))
    lines: list[str] = []
    if order:
        head, *rest = table(rows)
        lines.append(palette.faint(head))
        for o, line in zip(order, rest, strict=True):
            mark = palette.alarm if o.outcome == "violated" else palette.strong if o.outcome == "undecided" else palette.calm
            lines.append(line.replace(o.outcome, mark(o.outcome), 1))
            if o.outcome != "met" and len(o.text.removeprefix("expect ")) > LONG_TEXT:
                lines.append(palette.faint(f"    all: {printable(o.text)}"))
            if o.note:
                lines.append(palette.faint(f"    why: {printable(o.note)}"))
        lines.append("")
    return "\n".join([*lines, counts_line(outcomes), ""])


def verify_html(outcomes: Sequence[RequirementOutcome]) -> str:
    """The table as a small HTML fragment for notebooks; every text escaped."""
    head, *rows = [("outcome", "circuit", "requirement", "measured", "margin", "by", "why")] + [
        (o.outcome, o.circuit, o.text, _values(o, ""), _number(o.margin, ""), o.proof or "-", o.note)
        for o in sorted(outcomes, key=shortage)
    ]

    def line(cells: Sequence[str], tag: str) -> str:
        return "<tr>" + "".join(f"<{tag}>{html.escape(printable(text))}</{tag}>" for text in cells) + "</tr>"

    body = "".join(line(cells, "td") for cells in rows)
    caption = html.escape(counts_line(outcomes))
    return f"<table><caption>{caption}</caption><thead>{line(head, 'th')}</thead><tbody>{body}</tbody></table>"


def counts_line(outcomes: Sequence[RequirementOutcome]) -> str:
    """`140 requirements of 33 circuits: 138 met, 1 violated, 1 undecided`."""
    if not outcomes:
        return "no requirements"
    circuits = len({(o.file, o.circuit) for o in outcomes})
    counts = ", ".join(f"{sum(o.outcome == word for o in outcomes)} {word}" for word in ("met", "violated", "undecided"))
    return f"{counted(len(outcomes), 'requirement')} of {counted(circuits, 'circuit')}: {counts}"


def _exact(outcome: RequirementOutcome) -> bool:
    """Whether only one value would do, as of a count: there is no room to be left."""
    return bool(outcome.limits) and all(low is not None and low == high for low, high in outcome.limits)


def _number(value: float | None, unit: str) -> str:
    """A count without decimals, anything else with four digits and its unit."""
    if value is not None and not unit and abs(value) < 1e6 and value == int(value):
        return str(int(value))
    return engineering(value, unit)


def _values(outcome: RequirementOutcome, unit: str) -> str:
    shown = [_number(value, unit) for value in outcome.measured[:MANY_VALUES]]
    more = len(outcome.measured) - len(shown)
    return ", ".join([*shown, *([f"{more} more"] if more else [])]) or "-"


def verify_csv(outcomes: Sequence[RequirementOutcome]) -> str:
    """One row a requirement, in the order of the files; numbers in SI units with all their digits."""
    header = ["file", "line", "circuit", "label", "text", "outcome", "smallest", "largest", "limits", "margin", "proof", "note"]
    rows = [
        [
            o.file,
            o.line,
            o.circuit,
            o.label,
            o.text,
            o.outcome,
            min(o.measured, default=None),
            max(o.measured, default=None),
            " ".join(f"[{_end(low)}, {_end(high)}]" for low, high in o.limits),
            o.margin,
            o.proof,
            o.note,
        ]
        for o in outcomes
    ]
    return csv_text(header, rows)


def _end(value: float | None) -> str:
    return "" if value is None else repr(value)


def listing_text(rows: Sequence[tuple[str, int | None, str, str, str]]) -> str:
    """(file, line, circuit, label, text) of requirements that nobody judged, as a table."""
    if not rows:
        return "no requirements\n"
    head = ("circuit::label", "requirement", "at")
    body = [
        (f"{circuit}::{label}", text.removeprefix("expect "), f"{file}:{line}" if line else file)
        for file, line, circuit, label, text in rows
    ]
    circuits = len({(file, circuit) for file, _, circuit, _, _ in rows})
    lines = map(no_order, table([head, *body]))
    return "\n".join([*lines, "", f"{counted(len(rows), 'requirement')} of {counted(circuits, 'circuit')}", ""])


def baseline_section(changes: Sequence[Moved], baseline: str) -> str:
    """What moved, appeared or vanished since the baseline, three lines each."""
    if not changes:
        return f"\nas the baseline {printable(baseline)} has it\n"
    kinds = ", ".join(f"{number} {kind}" for kind in KINDS if (number := sum(change.kind == kind for change in changes)))
    lines = ["", f"since the baseline {printable(baseline)}: {kinds}"]
    for change in changes:
        lines.append(printable(f"    {change.kind}  {change.file}::{change.label}"))
        lines += [printable(f"        {word} {text}") for word, text in (("was", change.was), ("now", change.now)) if text]
    return "\n".join([*lines, ""])


def verify_markdown(outcomes: Sequence[RequirementOutcome], units: Units | None = None) -> str:
    """A page for the summary of a CI job: the count, and a table of what does not hold."""
    found = units or {}
    lines = ["# Requirements", "", markdown_cell(counts_line(outcomes)), ""]
    open_ones = [o for o in sorted(outcomes, key=shortage) if o.outcome != "met"]
    if open_ones:
        lines += ["| outcome | circuit | requirement | measured | why | at |", "| --- | --- | --- | --- | --- | --- |"]
    for o in open_ones:
        cells = (o.outcome, o.circuit, o.text, _values(o, found.get((o.file, o.label), "")), o.note, f"{o.file}:{o.line}")
        lines.append("| " + " | ".join(markdown_cell(text) for text in cells) + " |")
    return "\n".join([*lines, ""]) if open_ones else "\n".join(lines)


def markdown_cell(text: str) -> str:
    """Text that Markdown shows as it is: marks escaped, one line. An ampersand is written out, so that it
    begins no entity."""
    return printable(text).replace("&", "&amp;").translate(MARKDOWN_MARKS).replace("www.", "www\\.")
