"""Tables for other programs: numbers in SI units with all their digits, text that no spreadsheet takes for a formula."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any

from loopsim.printable import printable

if TYPE_CHECKING:
    from loopsim.analyses.results import States

FORMULA_MARKS = ("=", "+", "-", "@", "\t", "\r")


def cell(value: Any) -> str:
    """One cell. Text that would start a formula gets an apostrophe before it; floats keep every digit; None is empty."""
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if hasattr(value, "item"):
        value = value.item()
    if isinstance(value, float):
        return repr(value)
    text = printable(str(value))
    return "'" + text if isinstance(value, str) and text.startswith(FORMULA_MARKS) else text


def csv_text(header: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """A table as comma-separated text (RFC 4180 quoting, plain line ends)."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow([cell(name) for name in header])
    writer.writerows([cell(value) for value in row] for row in rows)
    return stream.getvalue()


def states_csv(points: States) -> str:
    """One row a state: its letter, verdict, growth rate and every net voltage."""
    nets = list(points[0].nets) if len(points) else []
    header = ["state", "verdict", "stable", "growth_rate [1/s]", "damping", "certified_radius", *(f"{net} [V]" for net in nets)]
    rows = [
        [
            state.name,
            state.verdict,
            state.stable,
            state.growth_rate,
            state.damping,
            state.certified_radius,
            *(state.nets[net] for net in nets),
        ]
        for state in points
    ]
    return csv_text(header, rows)
