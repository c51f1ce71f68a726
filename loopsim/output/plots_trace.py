"""The picture of a traced characteristic: nets over the let (or over another net), solid where stable, dashed where not.

Folds and points of changing stability are marked, jumps are thin arrows, a strip below counts the stable states at each value of the let.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from loopsim.errors import AnalysisError
from loopsim.output.pictures import COLOURS, PALE, axis_scale, new_figure, quiet, save

if TYPE_CHECKING:
    from loopsim.analyses.trace import Branch, Trace
    from loopsim.output.overlay import Overlay

PANELS = 6  # nets in one picture; more would be too low to read
STABLE, UNSTABLE, OPEN, JUMP, MEASURED = COLOURS[0], COLOURS[1], PALE, COLOURS[2], COLOURS[3]
STYLES: dict[bool | None, dict[str, Any]] = {
    True: {"color": STABLE, "linewidth": 2.0, "linestyle": "-", "zorder": 3},
    False: {"color": UNSTABLE, "linewidth": 1.2, "linestyle": (0, (4, 2.2)), "zorder": 2},
    None: {"color": OPEN, "linewidth": 1.2, "linestyle": (0, (1, 1.6)), "zorder": 2},
}
NAMES = {True: "stable", False: "unstable", None: "stability undecided"}
ORDER = (True, False, None)


@dataclass(frozen=True, eq=False)
class Piece:
    """A stretch of one branch with one verdict. x, y: (k,) [SI]."""

    stable: bool | None
    x: NDArray[np.float64]
    y: NDArray[np.float64]


def plot_trace(curve: Trace, path: str, nets: Sequence[str] = (), versus: str | None = None, overlay: Overlay | None = None) -> None:
    """Draw nets (the watched ones unless given) over the let, or over the net `versus`, into `path`. MissingExtra without matplotlib."""
    shown = _known(curve, nets or curve.watch)[:PANELS]
    across = _known(curve, [versus])[0] if versus is not None else None
    strip = across is None
    figure = new_figure(7.2, (2.0 if len(shown) > 1 else 3.6) * len(shown) + 0.7 + 0.7 * strip)
    heights = [3.0] * len(shown) + [0.55] * strip
    panels = list(figure.subplots(len(heights), 1, sharex=True, squeeze=False, height_ratios=heights)[:, 0])
    scale, unit = _abscissa(curve, across)
    for net, panel in zip(shown, panels, strict=False):
        quiet(panel)
        _draw_net(panel, curve, net, across, scale)
        if overlay is not None and strip and overlay.net == net:
            panel.plot(overlay.values / scale, overlay.volts / _net_scale(curve, net)[0], "x", color=MEASURED, markersize=4, zorder=5)
    if strip:
        _draw_strip(panels[-1], curve, scale)
        panels[-1].set_xlim(curve.low / scale, curve.high / scale)
    name = across if across is not None else curve.along
    panels[-1].set_xlabel(f"{name} in {unit}" if unit else name, fontsize=9)
    title = f"{curve.circuit} along {curve.along}"
    panels[0].set_title(title, loc="left", fontsize=10)
    _legend(figure, curve, overlay is not None and strip)
    save(figure, path)


def _known(curve: Trace, nets: Sequence[str]) -> list[str]:
    known = list(curve.branches[0].nets) if curve.branches else []
    for net in nets:
        if net not in known:
            raise AnalysisError("not-traced", f"no net {net} was traced", hint=f"traced: {', '.join(known)}")
    return list(nets)


def _abscissa(curve: Trace, across: str | None) -> tuple[float, str]:
    if across is not None:
        return _net_scale(curve, across)
    return axis_scale(max(abs(curve.low), abs(curve.high)), curve.unit)


def _net_scale(curve: Trace, net: str) -> tuple[float, str]:
    return axis_scale(max(float(np.max(np.abs(branch.nets[net]))) for branch in curve.branches), "V")


def pieces(curve: Trace, net: str, across: str | None = None) -> Iterator[Piece]:
    """Stretches of equal stability; neighbours share the fold or crossing between them, where one was located."""
    for number, branch in enumerate(curve.branches):
        x = branch.values if across is None else branch.nets[across]
        y = branch.nets[net]
        begin, lead = 0, None
        for i in range(1, len(x) + 1):
            if i < len(x) and branch.stable[i] == branch.stable[begin]:
                continue
            shared = _between(curve, number, branch, i, net, across) if i < len(x) else None
            xs, ys = x[begin:i].tolist(), y[begin:i].tolist()
            if lead is not None:
                xs, ys = [lead[0], *xs], [lead[1], *ys]
            if shared is not None:
                xs, ys = [*xs, shared[0]], [*ys, shared[1]]
            yield Piece(branch.stable[begin], np.array(xs), np.array(ys))
            begin, lead = i, shared


def _between(curve: Trace, number: int, branch: Branch, i: int, net: str, across: str | None) -> tuple[float, float]:
    """The located point between points i - 1 and i of a branch, else the middle."""
    low, high = sorted((float(branch.values[i - 1]), float(branch.values[i])))
    room = 0.02 * (curve.high - curve.low)
    candidates = [(f.at, f.nets) for f in curve.folds if f.branch == number] + [(c.at, c.nets) for c in curve.crossings]
    near = [(at, nets) for at, nets in candidates if low - room <= at <= high + room]
    middle = 0.5 * float(branch.nets[net][i - 1] + branch.nets[net][i])
    if near:
        at, nets = min(near, key=lambda entry: abs(entry[1][net] - middle))
        return (at if across is None else nets[across]), nets[net]
    x = branch.values if across is None else branch.nets[across]
    return 0.5 * float(x[i - 1] + x[i]), middle


def _draw_net(panel: Any, curve: Trace, net: str, across: str | None, scale: float) -> None:
    rise, unit = _net_scale(curve, net)
    for piece in pieces(curve, net, across):
        panel.plot(piece.x / scale, piece.y / rise, **STYLES[piece.stable])
    for found in curve.folds:
        here = (found.at if across is None else found.nets[across]) / scale, found.nets[net] / rise
        panel.plot(*here, "o", color=STABLE, markersize=4.5, zorder=4)
        if found.lands is not None and net in found.lands:
            there = (found.at if across is None else found.lands[across]) / scale, found.lands[net] / rise
            _arrow(panel, here, there)
    for crossing in curve.crossings:
        mark = "D" if crossing.kind == "hopf" else "s"
        place = (crossing.at if across is None else crossing.nets[across]) / scale, crossing.nets[net] / rise
        panel.plot(*place, mark, color=STABLE, markerfacecolor="white", markersize=5.0, zorder=4)
    panel.margins(x=0.02, y=0.06)
    panel.set_ylabel(f"{net} in {unit}", fontsize=9)
    panel.ticklabel_format(axis="y", useOffset=False, style="plain")


def _arrow(panel: Any, start: tuple[float, float], end: tuple[float, float]) -> None:
    style = {"arrowstyle": "-|>", "color": JUMP, "linewidth": 0.8, "shrinkA": 3, "shrinkB": 1, "mutation_scale": 8}
    panel.annotate("", xy=end, xytext=start, arrowprops=style, zorder=3)


def stable_counts(curve: Trace) -> tuple[NDArray[np.float64], list[int]]:
    """(edges, counts): the number of stable states in each interval of the let between places where it changes."""
    places = {curve.low, curve.high, *(f.at for f in curve.folds), *(c.at for c in curve.crossings)}
    edges = np.array(sorted(place for place in places if curve.low <= place <= curve.high))
    counts = []
    for middle in 0.5 * (edges[:-1] + edges[1:]):
        number = 0
        for branch in curve.branches:
            d = branch.values - middle
            for i in np.flatnonzero(d[:-1] * d[1:] < 0.0):
                nearer = i if abs(d[i]) <= abs(d[i + 1]) else i + 1
                number += branch.stable[nearer] is True
        counts.append(number)
    return edges, counts


def _draw_strip(panel: Any, curve: Trace, scale: float) -> None:
    edges, counts = stable_counts(curve)
    most = max(counts, default=0)
    for left, right, count in zip(edges[:-1], edges[1:], counts, strict=True):
        shade = 0.12 + 0.5 * count / max(most, 1) if count else 0.0
        panel.axvspan(left / scale, right / scale, color=STABLE, alpha=shade, linewidth=0)
        if right - left > 0.025 * (curve.high - curve.low):
            panel.text(0.5 * (left + right) / scale, 0.5, str(count), ha="center", va="center", fontsize=8, color="#202124")
    panel.set_ylim(0.0, 1.0)
    panel.set_yticks([])
    panel.set_ylabel("stable\nstates", fontsize=7, rotation=0, ha="right", va="center")
    panel.tick_params(labelsize=8)
    panel.spines[["top", "right", "left"]].set_visible(False)


def _legend(figure: Any, curve: Trace, measured: bool) -> None:
    from matplotlib.lines import Line2D

    seen = {stable for branch in curve.branches for stable in branch.stable}
    # one undecided point beside a fold draws nothing that a reader could see
    handles = [Line2D([], [], label=NAMES[stable], **STYLES[stable]) for stable in ORDER if stable in seen]
    if curve.folds:
        handles.append(Line2D([], [], marker="o", linestyle="", color=STABLE, markersize=4.5, label="fold"))
    kinds = {c.kind for c in curve.crossings}
    for kind, mark, name in (("hopf", "D", "Hopf point"), ("branch point", "s", "branch point")):
        if kind in kinds:
            handles.append(Line2D([], [], marker=mark, linestyle="", color=STABLE, markerfacecolor="white", markersize=5.0, label=name))
    if any(f.lands is not None for f in curve.folds):
        handles.append(Line2D([], [], color=JUMP, linewidth=0.8, marker=">", markersize=4, label="jump"))
    if measured:
        handles.append(Line2D([], [], marker="x", linestyle="", color=MEASURED, markersize=4, label="measured"))
    figure.legend(handles=handles, loc="outside upper right", ncols=len(handles), frameon=False, fontsize=8, handlelength=2.2)
