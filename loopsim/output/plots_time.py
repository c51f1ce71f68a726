"""Pictures of what moves in time: one panel a net, one time axis for all, crossings and states marked."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from loopsim.errors import AnalysisError
from loopsim.output.engineering import engineering
from loopsim.output.pictures import COLOURS, PALE, axis_scale, new_figure, quiet, save

if TYPE_CHECKING:
    from loopsim.analyses.cycle import Cycle
    from loopsim.analyses.transient import Transient

PANELS = 8  # nets in one picture; more would be too low to read
NEAR = 0.04  # of a curve's extent: levels this close share one line of names


def plot_transient(run: Transient, path: str, nets: Sequence[str] = (), levels: Sequence[tuple[str, float, str]] = ()) -> None:
    """Draw nets (the watched ones unless given) over time into `path`. levels: (net, volts, name) lines to mark, as of states;
    crossings of a level are dots on the curve. MissingExtra without matplotlib."""
    shown = _chosen(nets or run.watch or run.nets, run.nets)
    times = run.fine_times()
    values = run.at(times)
    figure, panels = _panels(len(shown), f"{run.circuit}: {run.end}")
    scale, unit = _time_scale(float(times[-1]))
    for i, (net, panel) in enumerate(zip(shown, panels, strict=True)):
        panel.plot(times / scale, values[net], color=COLOURS[i % len(COLOURS)], linewidth=1.4)
        course = values[net]
        extent = float(np.ptp(course))
        for volts, names in _told_apart([(v, name) for other, v, name in levels if other == net], NEAR * extent):
            panel.axhline(volts, color=PALE, linewidth=0.8, linestyle=(0, (4, 3)), zorder=1)
            panel.annotate(
                names, (1.0, volts), xycoords=("axes fraction", "data"), xytext=(4, -3), textcoords="offset points", fontsize=8
            )  # fmt: skip
            if min(abs(course[0] - volts), abs(course[-1] - volts)) <= NEAR * extent:
                continue  # where it starts or comes to rest, crossings are ripple
            dots = [crossing.time for crossing in run.crossings(net, volts)]
            panel.plot(np.array(dots) / scale, [volts] * len(dots), "o", color=COLOURS[i % len(COLOURS)], markersize=3.5)
        _label(panel, net, np.append(course, [v for other, v, _ in levels if other == net]))
    if not run.completed:
        for panel in panels:
            panel.axvline(float(times[-1]) / scale, color=COLOURS[3], linewidth=1.0, linestyle=(0, (1, 2)))
    panels[-1].set_xlabel(f"time in {unit}")
    panels[-1].set_xlim(float(times[0]) / scale, (float(times[-1]) if not run.completed else run.duration) / scale)
    save(figure, path)


def plot_cycle(found: Cycle, path: str, nets: Sequence[str] = ()) -> None:
    """Draw two periods of nets (the watched ones unless given), the end of the first one marked, into `path`."""
    shown = _chosen(nets or found.watch or found.nets, found.nets)
    inner = _refined(found.times)
    times = np.concatenate([inner, inner[1:] + found.period])
    values = found.at(inner[:-1])
    title = f"{found.circuit}: {found.verdict}, period {engineering(found.period, 's')}"
    figure, panels = _panels(len(shown), title)
    scale, unit = _time_scale(float(times[-1]))
    for i, (net, panel) in enumerate(zip(shown, panels, strict=True)):
        once = np.append(values[net], values[net][0])
        twice = np.concatenate([once, once[1:]])
        panel.plot(times / scale, twice, color=COLOURS[i % len(COLOURS)], linewidth=1.4)
        panel.axvline(found.period / scale, color=PALE, linewidth=0.8, linestyle=(0, (4, 3)))
        _label(panel, net, twice)
    panels[-1].set_xlabel(f"time in {unit}")
    panels[-1].set_xlim(0.0, 2.0 * found.period / scale)
    save(figure, path)


def _refined(times: NDArray[np.float64], parts: int = 6) -> NDArray[np.float64]:
    """Each gap in `parts` equal ones."""
    inner = times[:-1, None] + np.diff(times)[:, None] * np.arange(parts) / parts
    return np.append(inner.ravel(), times[-1])


def _told_apart(levels: Sequence[tuple[float, str]], room: float) -> list[tuple[float, str]]:
    """Levels with their names; those within `room` of the one below have their names on its line."""
    found: list[tuple[float, str]] = []
    for volts, name in sorted(levels):
        if found and volts - found[-1][0] <= room:
            found[-1] = (found[-1][0], f"{found[-1][1]}, {name}")
        else:
            found.append((volts, name))
    return found


def _chosen(wanted: Sequence[str], known: Sequence[str]) -> list[str]:
    for net in wanted:
        if net not in known:
            raise AnalysisError("not-recorded", f"no net {net} was recorded", hint=f"recorded: {', '.join(known)}")
    return list(wanted)[:PANELS]


def _time_scale(longest: float) -> tuple[float, str]:
    return axis_scale(min(longest, 999.0), "s")  # thousands of seconds are still seconds


def _panels(count: int, title: str) -> tuple[Any, list[Any]]:
    """A figure with `count` panels over one time axis."""
    figure = new_figure(8.0, 1.2 + 1.5 * max(count, 1))
    panels = list(figure.subplots(count, 1, sharex=True, squeeze=False)[:, 0])
    panels[0].set_title(title, loc="left", fontsize=10)
    for panel in panels:
        quiet(panel)
    return figure, panels


def _label(panel: Any, net: str, values: NDArray[np.float64]) -> None:
    """Name and unit beside the panel, and room above and below the curve."""
    low, high = float(values.min()), float(values.max())
    room = 0.08 * (high - low) or max(1e-3, 0.05 * abs(high))
    panel.set_ylim(low - room, high + room)
    panel.set_ylabel(f"{net}\nin V", fontsize=9)
    panel.ticklabel_format(axis="y", useOffset=False)
