"""loopsim: every DC operating point of circuits with feedback, proved, judged and traced. See docs/tutorial.md."""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from loopsim._version import __version__
from loopsim.errors import AnalysisError, CircuitError, InternalError, LoopsimError, MissingExtra

if TYPE_CHECKING:
    from loopsim.analyses.results import State, States, Verdict
    from loopsim.circuit import Circuit
    from loopsim.language.load import load, parse
    from loopsim.requirements.library import verify_library

__all__ = [
    "AnalysisError",
    "Circuit",
    "CircuitError",
    "InternalError",
    "LoopsimError",
    "MissingExtra",
    "State",
    "States",
    "Verdict",
    "__version__",
    "load",
    "parse",
    "verify_library",
]

_LAZY = {
    "Circuit": "loopsim.circuit",
    "State": "loopsim.analyses.results",
    "States": "loopsim.analyses.results",
    "Verdict": "loopsim.analyses.results",
    "load": "loopsim.language.load",
    "parse": "loopsim.language.load",
    "verify_library": "loopsim.requirements.library",
}


def __getattr__(name: str) -> Any:
    # NumPy, SciPy and lark take longer to import than a shell should wait for `loopsim --help`
    if name in _LAZY:
        return getattr(importlib.import_module(_LAZY[name]), name)
    raise AttributeError(f"module 'loopsim' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
