"""A traced characteristic as text and as a table."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from itertools import groupby
from typing import TYPE_CHECKING, Any

from loopsim.output.csv import csv_text
from loopsim.output.engineering import engineering, shortest
from loopsim.output.terminal import PLAIN, Palette
from loopsim.output.text import counted, table, volts
from loopsim.printable import printable

if TYPE_CHECKING:
    from loopsim.analyses.trace import Crossing, Fold, Trace

SHOWN = 3  # nets in the table of folds: each takes two columns
DIGITS = 6  # of a located value: it is known to 1e-10, a trip point is compared in millivolts
GAPS = 4  # gaps named one by one


def trace_text(curve: Trace, palette: Palette = PLAIN, chosen: str = "") -> str:
    """The answer of `trace` with a line end. chosen: the settings that were asked for, as text."""
    lines = [palette.strong(_heading(curve, chosen)), f"{_counts(curve)}: {_known(curve)}"]
    for part in (_folds(curve), _crossings(curve), _thresholds(curve)):
        if part:
            lines += ["", palette.faint(part[0]), *part[1:]]
    lines += ["", *_states_along(curve)]
    notes = [*_landing_notes(curve), *_empty_notes(curve), *_gap_notes(curve), *curve.notes]
    if notes:
        lines += ["", *(palette.faint(printable(note)) for note in notes)]
    return "\n".join(lines) + "\n"


def _value(curve: Trace, value: float | None, digits: int = DIGITS) -> str:
    return engineering(value, curve.unit, digits)


def _heading(curve: Trace, chosen: str) -> str:
    reach = f"{shortest(curve.low, curve.unit)} .. {shortest(curve.high, curve.unit)}"
    return f"{printable(curve.circuit)} along {printable(curve.along)} = {reach}" + (f", {chosen}" if chosen else "")


def _counts(curve: Trace) -> str:
    hopf = len(curve.hopf)
    crossing = len(curve.crossings) - hopf
    parts = [counted(len(curve.branches), "branch", "branches"), counted(len(curve.folds), "fold")]
    if hopf:
        parts.append(counted(hopf, "Hopf point"))
    if crossing:
        parts.append(counted(crossing, "branch point"))
    return ", ".join(parts)


def _known(curve: Trace) -> str:
    cost = f"all nets within +/- {shortest(curve.box, 'V', 3)}, {shortest(curve.seconds, 's', 2)}"
    if curve.over_range:
        return f"complete over the range ({cost})"
    if curve.complete and curve.gaps:
        return f"complete at {len(curve.stations)} stations, undecided in {counted(len(curve.gaps), 'gap')} between them ({cost})"
    if curve.complete:
        return f"complete at {len(curve.stations)} stations, found between them ({cost})"
    return f"undecided: complete at {len(curve.complete_at)} of {len(curve.stations)} stations ({cost})"


def _shown(curve: Trace) -> tuple[str, ...]:
    return tuple(net for net in curve.watch if all(net in branch.nets for branch in curve.branches))[:SHOWN]


def _folds(curve: Trace) -> list[str]:
    if not curve.folds:
        return []
    nets = _shown(curve)
    head = ["fold", curve.along, *nets, *(f"{net} after the jump" for net in nets)]
    return table([head, *([_fold_kind(f), _value(curve, f.at), *_at_fold(f, nets)] for f in curve.folds)])


def _fold_kind(found: Fold) -> str:
    """Which way the let moves when the branch ends; whether a circuit can rest there."""
    return found.direction if found.from_stable else f"{found.direction}, unstable both sides"


def _at_fold(found: Fold, nets: Sequence[str]) -> list[str]:
    lands: Mapping[str, float] = found.lands or {}
    return [*(volts(found.nets[net]) for net in nets), *(volts(lands[net]) if net in lands else "-" for net in nets)]


def _crossings(curve: Trace) -> list[str]:
    if not curve.crossings:
        return []
    nets = _shown(curve)
    rows = [[_crossing_kind(c), _value(curve, c.at), *(volts(c.nets[net]) for net in nets), _frequency(c)] for c in curve.crossings]
    return table([["stability changes", curve.along, *nets, "frequency"], *rows])


def _crossing_kind(found: Crossing) -> str:
    return "Hopf point" if found.kind == "hopf" else found.kind


def _frequency(found: Crossing) -> str:
    return "-" if found.frequency is None else engineering(found.frequency, "Hz")


def _thresholds(curve: Trace) -> list[str]:
    """Where each watched net jumps; nothing where none does."""
    rows = []
    for net in curve.watch:
        known = curve.per_net.get(net)
        if known is not None and (known.all_rising or known.all_falling):
            rows.append([net, _all(curve, known.all_rising), _all(curve, known.all_falling), _value(curve, known.hysteresis)])
    return table([["net", "rising threshold", "falling threshold", "hysteresis"], *rows]) if rows else []


def _all(curve: Trace, values: Sequence[float]) -> str:
    return ", ".join(_value(curve, value) for value in values) or "-"


def _states_along(curve: Trace) -> list[str]:
    """How many states there are at the stations, runs of equal counts as one line."""
    rows = [["states", f"at {curve.along} ="]]
    for count, run in groupby(curve.counts, key=lambda entry: entry[1]):
        values = [value for value, _ in run]
        first, last = (shortest(value, curve.unit, 4) for value in (values[0], values[-1]))
        rows.append([str(count), first if len(values) == 1 else f"{first} .. {last} ({len(values)} stations)"])
    return table(rows)


def _landing_notes(curve: Trace) -> list[str]:
    """Folds that a circuit at rest leaves without finding another rest, inside the range."""
    edge = 1e-6 * (curve.high - curve.low)
    lost = [f.at for f in curve.folds if f.from_stable and f.lands is None and curve.low + edge < f.at < curve.high - edge]
    if not lost:
        return []
    return [f"no state at rest was reached beyond {', '.join(_value(curve, at) for at in lost)}: see what `transient` shows there"]


def _empty_notes(curve: Trace) -> list[str]:
    """A box that leaves out every state, at some station or at all."""
    empty = [value for value, count in curve.counts if count == 0 and value in curve.complete_at]
    if not empty:
        return []
    where = f"within +/- {shortest(curve.box, 'V', 3)}"
    return [f"{counted(len(empty), 'station')} without a state {where}: states may lie farther out (--box)"]


def _gap_notes(curve: Trace) -> list[str]:
    named = [f"{_value(curve, low)} .. {_value(curve, high)}" for low, high in curve.gaps[:GAPS]]
    if not named:
        return []
    more = f" and {len(curve.gaps) - GAPS} more" if len(curve.gaps) > GAPS else ""
    return [f"not settled by the proof over the range: {', '.join(named)}{more}"]


def trace_csv(curve: Trace) -> str:
    """One row a point: branch (from 1), arclength (scaled), the let [SI], stability, every net."""
    nets = list(curve.branches[0].nets) if curve.branches else []
    unit = f" [{curve.unit}]" if curve.unit else ""
    header = ["branch", "arclength", f"{curve.along}{unit}", "stable", *(f"{net} [V]" for net in nets)]
    return csv_text(header, _rows(curve, nets))


def _rows(curve: Trace, nets: Sequence[str]) -> Iterator[list[Any]]:
    for number, branch in enumerate(curve.branches, 1):
        columns = [branch.nets[net].tolist() for net in nets]
        for k, value in enumerate(branch.values.tolist()):
            yield [number, float(branch.lengths[k]), value, branch.stable[k], *(column[k] for column in columns)]
