"""Transient and cycle as text and tables."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopsim.output.csv import csv_text
from loopsim.output.engineering import engineering
from loopsim.output.text import volts

if TYPE_CHECKING:
    from loopsim.analyses.cycle import Cycle
    from loopsim.analyses.transient import Transient

SHOWN = 12  # nets in a summary
MULTIPLIERS = 4  # multipliers in a summary


def transient_text(run: Transient) -> str:
    """What happened, in a few lines: the end, and start, extremes and end of each watched net."""
    nets = (run.watch or run.nets)[:SHOWN]
    values = run.at(run.fine_times())
    lines = [
        f"{run.circuit}, {engineering(run.times[-1], 's')} from {run.start}",
        f"{run.end}; {run.steps} steps, {run.rejected} taken back, {engineering(run.seconds, 's', 2)}",
        "",
        f"{'net':<16}{'start':>12}{'lowest':>12}{'highest':>12}{'end':>12}",
    ]
    for net in nets:
        course = values[net]
        shown = (float(course[0]), float(course.min()), float(course.max()), run.final(net))
        lines.append(f"{net:<16}" + "".join(f"{volts(v):>12}" for v in shown))
    lines += _more(len(run.watch or run.nets) - len(nets), run.notes)
    return "\n".join(lines)


def cycle_text(found: Cycle) -> str:
    """Period, verdict, multipliers, and the shape of each watched net."""
    nets = (found.watch or found.nets)[:SHOWN]
    lines = [
        f"{found.circuit}, cycle reached from {found.start}",
        f"period {engineering(found.period, 's', 7)}, frequency {engineering(found.frequency, 'Hz', 7)}; {found.verdict}",
    ]
    if found.exact:
        lines.append(_multipliers(found))
    lines += ["", f"{'net':<16}{'lowest':>12}{'highest':>12}{'swing':>12}{'duty':>9}"]
    for net in nets:
        low, high = found.extremes(net)
        columns = "".join(f"{volts(v):>12}" for v in (low, high, high - low))
        lines.append(f"{net:<16}{columns}{100.0 * found.duty(net):>7.2f} %")
    lines += _more(len(found.watch or found.nets) - len(nets), found.notes)
    return "\n".join(lines)


def _multipliers(found: Cycle) -> str:
    """The largest ones; what is smaller than the error of the one that is known to be 1 is not told from nothing."""
    clear = [_multiplier(m) for m in found.multipliers[:MULTIPLIERS] if abs(m) > found.shift_error]
    small = "" if len(clear) == MULTIPLIERS or len(clear) == len(found.multipliers) else f"below {found.shift_error:.1e}"
    shown = ", ".join([*clear, *([f"the others {small}" if clear else f"all {small}"] if small else [])])
    return f"multipliers: {shown or 'none'}; the one of a shift in time is 1 within {found.shift_error:.1e}"


def _multiplier(value: complex) -> str:
    return f"{value.real:.4g}" if abs(value.imag) <= 1e-9 * abs(value) else f"{value.real:.4g} {value.imag:+.4g}i"


def _more(left: int, notes: tuple[str, ...]) -> list[str]:
    lines = [f"and {left} more nets"] if left > 0 else []
    return [*lines, *([""] if notes else []), *notes]


def transient_csv(run: Transient, samples: int = 0) -> str:
    """One row a time: where the steps end, or `samples` equally spaced times."""
    if samples:
        times, values = run.table(samples)
    else:
        times, values = run.times, {net: run[net] for net in run.nets}
    header = ["time [s]", *(f"{net} [V]" for net in values)]
    columns = [times, *values.values()]
    return csv_text(header, zip(*(column.tolist() for column in columns), strict=True))


def cycle_csv(found: Cycle) -> str:
    """One period, one row a time."""
    columns = [found.times, *(found[net] for net in found.nets)]
    header = ["time [s]", *(f"{net} [V]" for net in found.nets)]
    return csv_text(header, zip(*(column.tolist() for column in columns), strict=True))
