"""Answers as calm text: a heading, the count and what is known about it, a table, then one line a note."""

from __future__ import annotations

import html
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from loopsim.output.engineering import engineering, shortest, signed
from loopsim.output.terminal import PLAIN, Palette
from loopsim.printable import cell_width, padded, printable

if TYPE_CHECKING:
    from loopsim.analyses.results import State, States

GAP = "   "
VOLTAGE_FLOOR = 1e-12  # volts below this are rounding of the arithmetic, not of the circuit: shown as 0 V
MANY_NETS = 6  # columns of nets that still fit on a line of 100 characters


def counted(number: int, word: str, plural: str = "") -> str:
    """`1 point`, `3 points`, `no points`."""
    return f"{number or 'no'} {word if number == 1 else plural or word + 's'}"


def table(rows: Sequence[Sequence[str]]) -> list[str]:
    """Lines with aligned columns. Every cell is made safe to print; the first row is the head."""
    safe = [[printable(text) for text in row] for row in rows]
    widths = [max(map(cell_width, column)) for column in zip(*safe, strict=True)]
    return [
        GAP.join(padded(text, width) for text, width in zip(row, widths, strict=True)).rstrip() for row in safe
    ]


def volts(value: float) -> str:
    """A net voltage."""
    return engineering(0.0 if abs(value) < VOLTAGE_FLOOR else value, "V")


def settings_text(settings: Mapping[str, float], units: Mapping[str, str]) -> str:
    """`level = 4.5 V, ambient = 25 degC`."""
    return ", ".join(f"{printable(name)} = {shortest(float(value), units.get(name, ''))}" for name, value in settings.items())


def heading(points: States) -> str:
    """The circuit and the settings worth printing."""
    chosen = settings_text({name: points.settings[name] for name in points.chosen}, points.units)
    return printable(points.circuit) + (f", {chosen}" if chosen else "")


def _known(points: States) -> str:
    where = f"all nets within +/- {shortest(points.box, 'V', 3)}"
    cost = f"{counted(points.boxes, 'box', 'boxes')}, {shortest(points.seconds, 's', 2)}"
    if points.word == "undecided":
        return f"({counted(points.undecided, 'place')} left, {where}, {cost})"
    if points.word == "found":
        return f"(by search; that there are no others is not proved, {cost})"
    return f"({where}, {cost})"


def _state_notes(points: States) -> list[str]:
    """What the table has no column for: oscillation, and points that nothing proves; states that share a note named together."""
    sharing: dict[str, list[str]] = {}
    for state in points:
        full = state.verdict_full
        if full.frequency is not None:
            swings = f", swinging most at {', '.join(full.swings)}" if full.swings else ""
            sharing.setdefault(f"oscillation near {engineering(full.frequency, 'Hz')}{swings}", []).append(state.name)
    lines = []
    for note, names in sharing.items():
        owner = "all states" if len(names) == len(points) > 1 else ", ".join(names)
        lines.append(f"{owner}: {note}")
    unproved = [state.name for state in points if state.certified_radius <= 0.0]
    if unproved:
        lines.append(f"{', '.join(unproved)}: found by search, not proved to be the only one in its place")
    return lines


def _mark(state: State, text: str, palette: Palette) -> str:
    return palette.calm(text) if state.stable else palette.alarm(text)


def states_text(points: States, palette: Palette = PLAIN) -> str:
    """The answer of `states` with a line end."""
    lines = [
        palette.strong(heading(points)),
        f"{counted(len(points), 'operating point')}: {points.word} {_known(points)}",
    ]
    shown: tuple[str, ...] = ()
    if len(points):
        every = tuple(points[0].nets)
        shown = (points.watch or every)[:MANY_NETS]
        lines += ["", *_states_table(points, shown, palette)]
    notes = [*_state_notes(points), *points.notes, *points.remainder]
    hidden = len(points.watch or (points[0].nets if len(points) else ())) - len(shown)
    if hidden > 0:
        notes.append(f"{counted(hidden, 'more watched net')} in --json and --csv")
    if notes:
        lines += ["", *(palette.faint(printable(note)) for note in notes)]
    return "\n".join(lines) + "\n"


def _states_table(points: States, nets: Sequence[str], palette: Palette) -> list[str]:
    damped = any(state.damping is not None for state in points)
    head = ["state", "verdict", *nets, "fastest growth", *(["damping"] if damped else [])]
    rows = [
        [
            state.name,
            state.verdict,
            *(volts(state[net]) for net in nets),
            signed(state.growth_rate, "1/s", 2),
            *([engineering(state.damping, "", 2)] if damped else []),
        ]
        for state in points
    ]
    first, *rest = table([head, *rows])
    # the palette comes last: its codes take no column
    marked = [
        line.replace(printable(state.verdict), _mark(state, printable(state.verdict), palette), 1)
        for state, line in zip(points, rest, strict=True)
    ]
    return [palette.faint(first), *marked]


def states_html(points: States) -> str:
    """The answer as a small HTML fragment for notebooks; every text escaped."""

    def safe(text: str) -> str:
        return html.escape(printable(text))

    nets = (points.watch or tuple(points[0].nets) if len(points) else ())[:MANY_NETS]
    head = "".join(f"<th>{safe(word)}</th>" for word in ("state", "verdict", *nets, "fastest growth"))
    body = "".join(
        "<tr>"
        + "".join(
            f"<td>{safe(text)}</td>"
            for text in (
                state.name,
                state.verdict,
                *(volts(state[net]) for net in nets),
                signed(state.growth_rate, "1/s", 2),
            )
        )
        + "</tr>"
        for state in points
    )
    title = html.escape(heading(points))
    count = safe(f"{counted(len(points), 'operating point')}: {points.word} {_known(points)}")
    notes = "".join(f"<br>{safe(note)}" for note in (*_state_notes(points), *points.notes, *points.remainder))
    return f"<table><caption>{title}<br>{count}{notes}</caption><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
