"""The picture of a traced characteristic: nets over the let (or over another net), solid where stable, dashed where not.

Folds and points of changing stability are marked, jumps are thin arrows, a strip below counts the stable states at each value of the let.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from loopsim.errors import AnalysisError
from loopsim.output.pictures import COLOURS, PALE, axis_scale, new_figure, quiet, save

if TYPE_CHECKING:
    from loopsim.analyses.trace import Branch, Trace
    from loopsim.output.overlay import Overlay

PANELS = 6  # nets in one picture; more would be too low to read
LEAST_JUMP = 0.02  # of a panel's height: a shorter arrow is a blot on its fold
ALIKE = 5e-3  # of a panel's height: curves nearer than this are one line to the eye
BETWEEN = 24  # points drawn between two traced ones on an axis of decades
DECADES = 2.0  # a let above zero over a wider range than this gets a logarithmic axis
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
    if overlay is not None and overlay.net not in shown and versus is None:
        shown = [*shown[: PANELS - 1], *_known(curve, [overlay.net])]
    across = _known(curve, [versus])[0] if versus is not None else None
    strip = across is None
    figure = new_figure(7.2, (2.0 if len(shown) > 1 else 3.6) * len(shown) + 0.7 + 0.7 * strip)
    heights = [3.0] * len(shown) + [0.55] * strip
    panels = list(figure.subplots(len(heights), 1, sharex=True, squeeze=False, height_ratios=heights)[:, 0])
    scale, unit = _abscissa(curve, across)
    if across is None and _logarithmic(curve):
        _use_decades(panels)
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
    if _logarithmic(curve):
        return axis_scale(float(np.sqrt(curve.low * curve.high)), curve.unit)
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


def _logarithmic(curve: Trace) -> bool:
    """Whether the let, such as a resistance, runs over so many decades that a straight axis would hide all but the last."""
    return curve.low > 0.0 and curve.high >= 10.0**DECADES * curve.low and curve.unit != "degC"


def _use_decades(panels: Sequence[Any]) -> None:
    from matplotlib.ticker import FuncFormatter, NullFormatter

    for panel in panels:
        panel.set_xscale("log")
        panel.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
        panel.xaxis.set_minor_formatter(NullFormatter())


def _seen_apart(found: list[Piece], over_let: bool) -> list[Piece]:
    """The pieces, cut where the let turns, without those that lie on a longer one of the same verdict.

    The dashes of one would fill the gaps of the other, and what is not stable would look solid.
    """
    if not over_let:
        return found
    found = [run for piece in found for run in _runs(piece)]
    height = float(np.ptp(np.concatenate([piece.y for piece in found])))
    kept: list[Piece] = []
    for piece in sorted(found, key=lambda one: -float(np.ptp(one.x))):
        if not any(_covers(other, piece, ALIKE * height) for other in kept if other.stable == piece.stable):
            kept.append(piece)
    return kept


def _runs(piece: Piece) -> Iterator[Piece]:
    """A piece cut at the points where the let turns."""
    way = np.sign(np.diff(piece.x))
    turns = [0, *(int(i) + 1 for i in np.flatnonzero(way[:-1] * way[1:] < 0.0)), len(piece.x) - 1]
    for begin, end in pairwise(turns):
        yield Piece(piece.stable, piece.x[begin : end + 1], piece.y[begin : end + 1])


def _covers(one: Piece, other: Piece, room: float) -> bool:
    """Whether `other` lies on `one` within `room`; both run one way along the let."""
    x, y = (one.x, one.y) if one.x[0] <= one.x[-1] else (one.x[::-1], one.y[::-1])
    slack = 1e-6 * float(x[-1] - x[0])
    if np.min(other.x) < x[0] - slack or np.max(other.x) > x[-1] + slack or np.any(np.diff(x) < 0.0):
        return False
    return bool(np.all(np.abs(np.interp(other.x, x, y) - other.y) <= room))


def _path(piece: Piece, decades: bool) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """The points to draw a piece by: from left to right, so that dashes of curves that coincide fall on each other; on an axis of decades
    with points between, because a curve is straight between its points on the straight axis."""
    x, y = (piece.x, piece.y) if piece.x[0] <= piece.x[-1] else (piece.x[::-1], piece.y[::-1])
    if not decades:
        return x, y
    share = np.linspace(0.0, 1.0, BETWEEN, endpoint=False)
    logs = np.log(np.maximum(x, np.finfo(float).tiny))
    low, high = logs[:-1, None], logs[1:, None]
    between = np.exp(low + share * (high - low))
    run = x[1:, None] - x[:-1, None]
    part = np.where(run != 0.0, (between - x[:-1, None]) / np.where(run != 0.0, run, 1.0), share)
    rising = y[:-1, None] + part * (y[1:, None] - y[:-1, None])
    return np.append(between.ravel(), x[-1]), np.append(rising.ravel(), y[-1])


def _draw_net(panel: Any, curve: Trace, net: str, across: str | None, scale: float) -> None:
    rise, unit = _net_scale(curve, net)
    for piece in _seen_apart(list(pieces(curve, net, across)), across is None):
        x, y = _path(piece, across is None and _logarithmic(curve))
        panel.plot(x / scale, y / rise, **STYLES[piece.stable])
    # an arrow is left out by the height of the panel, which the lines alone decide
    panel.margins(x=0.02, y=0.06)
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
    panel.set_ylabel(f"{net} in {unit}", fontsize=9)
    panel.ticklabel_format(axis="y", useOffset=False, style="plain")


def _arrow(panel: Any, start: tuple[float, float], end: tuple[float, float]) -> None:
    style = {"arrowstyle": "-|>", "color": JUMP, "linewidth": 0.8, "shrinkA": 3, "shrinkB": 1, "mutation_scale": 8}
    wide, high = (abs(np.subtract(*limits)) for limits in (panel.get_xlim(), panel.get_ylim()))
    if max(abs(end[0] - start[0]) / wide, abs(end[1] - start[1]) / high) < LEAST_JUMP:
        return
    panel.annotate("", xy=end, xytext=start, arrowprops=style, zorder=3)


def stable_counts(curve: Trace) -> tuple[NDArray[np.float64], list[int]]:
    """(edges, counts): the number of stable states in each interval of the let between the places where it changes."""
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
    kept = [0, *(i for i in range(1, len(counts)) if counts[i] != counts[i - 1])]
    return np.append(edges[kept], edges[-1]), [counts[i] for i in kept]


def _within(curve: Trace, left: float, right: float) -> tuple[float, float]:
    """Middle of a stretch as drawn, and its share of the axis."""
    if _logarithmic(curve):
        return float(np.sqrt(left * right)), float(np.log(right / left) / np.log(curve.high / curve.low))
    return 0.5 * (left + right), (right - left) / (curve.high - curve.low)


def _draw_strip(panel: Any, curve: Trace, scale: float) -> None:
    edges, counts = stable_counts(curve)
    most = max(counts, default=0)
    for left, right, count in zip(edges[:-1], edges[1:], counts, strict=True):
        shade = 0.12 + 0.5 * count / max(most, 1) if count else 0.0
        panel.axvspan(left / scale, right / scale, color=STABLE, alpha=shade, linewidth=0)
        middle, share = _within(curve, left, right)
        if share > 0.025:
            panel.text(middle / scale, 0.5, str(count), ha="center", va="center", fontsize=8, color="#202124")
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
