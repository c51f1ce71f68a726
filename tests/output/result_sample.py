"""Results built by hand, so that printing is tested apart from solving."""

from typing import Any

import numpy as np

from loopsim.analyses.results import State, States, Verdict


def state(name: str, out: float, plus: float, growth: float | None, text: str = "stable", **more: Any) -> State:
    """One operating point of a comparator with hysteresis."""
    eigenvalues = np.array([] if growth is None else [growth + 0j])
    verdict = Verdict(text, text.startswith("stable") if text else None, False, eigenvalues, growth, **more)
    nets = {"vcc": 9.0, "mid": 4.5, "out": out, "plus": plus}
    return State(name, nets, {"r_in": 1e-6}, verdict, 1e-9, np.array([9.0, 4.5, out, plus]))


THREE = (
    state("A", 0.02, 3.714, -310e3),
    state("B", 4.5, 4.5, 1.2e6, "unstable, whatever the strays"),
    state("C", 8.98, 5.286, -310e3),
)


def points(states: tuple[State, ...] = THREE, **changes: Any) -> States:
    """The result of `states` on it."""
    given: dict[str, Any] = {
        "circuit": "cistern_pump",
        "file": "cistern_pump.loop",
        "settings": {"level": 4.5, "supply": 9.0, "r_in.resistance": 1e4},
        "states": states,
        "complete": True,
        "undecided": 0,
        "box": 1e3,
        "boxes": 11,
        "seconds": 0.009,
        "watch": ("out", "plus"),
        "chosen": ("level",),
        "units": {"level": "V", "supply": "V", "r_in.resistance": "ohm"},
    }
    return States(**{**given, **changes})
