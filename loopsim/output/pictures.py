"""What all pictures share: colours, a figure without global state, files that are the same twice.

Colours are our own set, told apart by eyes of every kind and in grey: dark blue, ochre, green-blue, red-violet, grey.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

from loopsim.errors import AnalysisError, MissingExtra
from loopsim.output.engineering import PLAIN_UNITS, PREFIXES

COLOURS = ("#1b3a6b", "#b8860b", "#2a7f79", "#8e2f5c", "#5f6368")
PALE = "#9aa0a6"
GRID = "#e6e8ea"
SUFFIXES = ("svg", "png", "pdf")


def new_figure(width: float, height: float) -> Any:
    """A figure [inch] that belongs to nobody else: no pyplot, no style file. MissingExtra without matplotlib."""
    try:
        from matplotlib.backends.backend_agg import FigureCanvasAgg
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtra("plot", "a plot") from None
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def quiet(panel: Any) -> None:
    """No frame at the top and right, a pale grid, small numbers."""
    panel.spines[["top", "right"]].set_visible(False)
    panel.grid(visible=True, color=GRID, linewidth=0.6)
    panel.set_axisbelow(True)
    panel.tick_params(labelsize=8)


def save(figure: Any, path: str) -> None:
    """Write it in the form that the suffix names; equal pictures give equal files."""
    import matplotlib as mpl

    suffix = Path(path).suffix.lower().removeprefix(".")
    if suffix not in SUFFIXES:
        raise AnalysisError("plot-suffix", f"no picture is written to {path}", hint=f"use one of {', '.join('.' + s for s in SUFFIXES)}")
    # dates and random names inside the file would make equal pictures differ
    metadata = {"svg": {"Date": None}, "pdf": {"CreationDate": None}}.get(suffix, {})
    try:
        with mpl.rc_context({"svg.hashsalt": "loopsim"}):
            figure.savefig(path, format=suffix, dpi=150, metadata=metadata)
    except OSError as error:
        raise AnalysisError("cannot-write", f"cannot write {path}: {error.strerror}") from None


def axis_scale(largest: float, unit: str) -> tuple[float, str]:
    """(SI value of one step, the unit with its prefix) so that numbers on an axis run from 1 to 1,000: 0.02 in V gives (1e-3, "mV")."""
    if unit in PLAIN_UNITS or not unit.partition("/")[0].isalpha() or not largest > 0.0:
        return 1.0, unit
    exponent = next((e for e in sorted(PREFIXES, reverse=True) if largest >= 0.999 * 10.0**e), min(PREFIXES))
    return 10.0**exponent, PREFIXES[exponent] + unit
