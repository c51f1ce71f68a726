"""Results as pandas data frames, where pandas is installed."""

from __future__ import annotations

import importlib
from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from loopsim.errors import LoopsimError

if TYPE_CHECKING:
    from loopsim.analyses.results import States
    from loopsim.analyses.trace import Trace
    from loopsim.requirements.outcomes import RequirementOutcome


def _pandas() -> Any:
    try:
        return importlib.import_module("pandas")
    except ImportError as missing:
        raise LoopsimError("to_dataframe needs pandas, which is not installed: pip install pandas") from missing


def states_frame(points: States) -> Any:
    """One row a state, indexed by its letter: verdict, stable, growth_rate [1/s], damping, then every net [V]."""
    rows = [
        {
            "verdict": state.verdict,
            "stable": state.stable,
            "growth_rate": state.growth_rate,
            "damping": state.damping,
            **state.nets,
        }
        for state in points
    ]
    return _pandas().DataFrame(rows, index=[state.name for state in points])


def trace_frame(curve: Trace) -> Any:
    """One row a point of the curve: branch (from 1), arclength, the let, stable (True, False or None), then every net [V]."""
    pandas = _pandas()
    parts = [
        pandas.DataFrame(
            {
                "branch": number,
                "arclength": branch.lengths,
                curve.along: branch.values,
                "stable": pandas.array(branch.stable, dtype=object),
                **branch.nets,
            }
        )
        for number, branch in enumerate(curve.branches, 1)
    ]
    return pandas.concat(parts, ignore_index=True) if parts else pandas.DataFrame()


def requirements_frame(outcomes: Sequence[RequirementOutcome]) -> Any:
    """One row a requirement, in the order of the files: its JSON keys, `file` and `line`."""
    return _pandas().DataFrame([{**o.to_dict(), "file": o.file, "line": o.line} for o in outcomes])
