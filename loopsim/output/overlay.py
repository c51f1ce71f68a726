"""Measured points to lay over a traced characteristic: two columns, the let and a net, and how far they lie from it."""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from loopsim.errors import CircuitError, Span
from loopsim.output.engineering import engineering
from loopsim.output.text import counted
from loopsim.output.text import volts as volts_text
from loopsim.printable import printable
from loopsim.units import dimension_of, name_of, quantity

if TYPE_CHECKING:
    from loopsim.analyses.trace import Trace

LARGEST = 16 << 20  # bytes; a table of measured points is far smaller
EXAMPLE = "for example: 4.5, 0.02"
_CELL = re.compile(r"([+-]?)\s*([0-9]+\.?[0-9]*(?:[eE][+-]?[0-9]+)?|\.[0-9]+(?:[eE][+-]?[0-9]+)?)\s*(\S*)")
_NAME = re.compile(r"([^\[(]+?)\s*(?:[\[(].*)?")


@dataclass(frozen=True, eq=False)
class Overlay:
    """Measured points. values: (k,) of the let [SI]; volts: (k,) of the net."""

    file: str
    net: str
    values: NDArray[np.float64]
    volts: NDArray[np.float64]


@dataclass(frozen=True)
class Distance:
    """The point farthest from the nearest stable branch at its value of the let. largest [V]; at [SI]; beyond: points where no stable
    branch is to compare with."""

    net: str
    points: int
    largest: float | None
    at: float | None
    measured: float | None
    beyond: int

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {
            "net": self.net, "points": self.points, "largest_distance": self.largest, "at": self.at, "measured": self.measured,
            "beyond": self.beyond,
        }  # fmt: skip


def read_overlay(path: str, curve_unit: str, nets: tuple[str, ...], watched: str, let: str = "") -> Overlay:
    """Read a table with the let in the first column and a net in the second; a first row without numbers names the columns.

    Commas, semicolons or tabs part the cells; blank lines and lines that begin with # are passed over; a number may carry its unit.
    curve_unit: of the let; watched: the net meant where no header names one; let: its name, to tell columns that are the wrong way
    round. CircuitError with file and line for what cannot be read.
    """
    lines = _lines(path)
    mark = next((m for m in (";", "\t") if any(m in text for _, text in lines)), ",")
    net, values, measured = watched, [], []
    for position, (number, text) in enumerate(lines):
        place = Span(path, number, 1, max(1, len(text)))
        cells = [cell.strip() for cell in next(csv.reader([text], delimiter=mark))]
        if len(cells) != 2:
            # more than two may be a decimal comma: 4,5,0,02 read as 4 and 5 would compare with the wrong place
            raise CircuitError("wrong-table", f"two columns are needed, the let and a net, not {len(cells)}", place, EXAMPLE)
        if position == 0 and _is_header(cells):
            if let and _named(cells[1]) == let and _named(cells[0]) in nets:
                raise CircuitError("wrong-table", f"the let `{let}` has to stand in the first column", place, EXAMPLE)
            net = _net_named(cells[1], nets, watched)
            continue
        values.append(_number(cells[0], curve_unit, place))
        measured.append(_number(cells[1], "V", place))
    if not values:
        raise CircuitError("wrong-table", f"`{path}` holds no measured points")
    return Overlay(path, net, np.array(values), np.array(measured))


def _lines(path: str) -> list[tuple[int, str]]:
    try:
        with open(path, "rb") as stream:
            raw = stream.read(LARGEST + 1)
    except OSError as error:
        raise CircuitError("cannot-read", f"`{path}` cannot be read: {error.strerror}") from None
    if len(raw) > LARGEST:
        raise CircuitError("wrong-table", f"`{path}` is larger than {LARGEST >> 20} MiB")
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError:
        raise CircuitError("not-text", f"`{path}` is not UTF-8 text") from None
    numbered = enumerate(text.splitlines(), 1)
    return [(number, line) for number, line in numbered if line.strip() and not line.lstrip().startswith("#")]


def _is_header(cells: list[str]) -> bool:
    """Whether neither cell begins like a number: a first row with a slip in it is no header."""
    return not any(cell.lstrip("+-. ")[:1].isdigit() for cell in cells)


def _named(cell: str) -> str:
    """What a header calls a column, without its unit."""
    match = _NAME.fullmatch(cell)
    return match[1] if match is not None else ""


def _net_named(cell: str, nets: tuple[str, ...], watched: str) -> str:
    return name if (name := _named(cell)) in nets else watched


def _number(cell: str, unit: str, place: Span) -> float:
    """SI value of a cell in `unit`; a bare number is in that unit."""
    match = _CELL.fullmatch(cell)
    if match is None:
        raise CircuitError("wrong-table", f"`{cell}` is not a number", place)
    sign, number, mark = match.groups()
    try:
        found = quantity(number, mark)
    except ValueError as reason:
        raise CircuitError("wrong-table", f"`{cell}`: {reason}", place) from None
    if mark and found.dimension != dimension_of(unit):
        raise CircuitError("wrong-table", f"`{cell}` is not in {name_of(dimension_of(unit)) or 'a pure number'}", place)
    return -found.value if sign == "-" else found.value


def distance(curve: Trace, overlay: Overlay) -> Distance:
    """How far each measured point lies from the nearest stable branch at the same value of the let [V]."""
    best: tuple[float, float, float] | None = None
    beyond = 0
    for value, measured in zip(overlay.values.tolist(), overlay.volts.tolist(), strict=True):
        known = _stable_volts(curve, overlay.net, value)
        if not known:
            beyond += 1
            continue
        away = min(abs(volts - measured) for volts in known)
        if best is None or away > best[0]:
            best = (away, value, measured)
    largest, at, there = best if best is not None else (None, None, None)
    return Distance(overlay.net, len(overlay.values), largest, at, there, beyond)


def _stable_volts(curve: Trace, net: str, value: float) -> list[float]:
    """Volts of the net on every stable branch at a value of the let, straight between the traced points."""
    found = []
    for branch in curve.branches:
        d, y = branch.values - value, branch.nets[net]
        for i in np.flatnonzero(d[:-1] * d[1:] <= 0.0):
            nearer = i if abs(d[i]) <= abs(d[i + 1]) else i + 1
            if branch.stable[nearer] is True:
                share = 0.0 if d[i] == d[i + 1] else d[i] / (d[i] - d[i + 1])
                found.append(float(y[i] + share * (y[i + 1] - y[i])))
    return found


def overlay_text(curve: Trace, overlay: Overlay) -> str:
    """One or two lines on how well the measured points fit."""
    found = distance(curve, overlay)
    what = f"measured {printable(overlay.net)}, {counted(len(overlay.values), 'point')}"
    lines = []
    if found.largest is not None:
        where = f"at {printable(curve.along)} = {engineering(found.at, curve.unit, 6)}"
        lines.append(f"{what}: largest distance to the nearest stable branch {volts_text(found.largest)} {where}")
    if found.beyond:
        lines.append(f"{what}: {found.beyond} {'lies' if found.beyond == 1 else 'lie'} where no stable branch was traced")
    return "\n".join(lines)
