"""What became of a requirement."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

RANK = {"violated": 0, "undecided": 1, "met": 2}


@dataclass(frozen=True)
class RequirementOutcome:
    """One requirement: met, violated or undecided.

    measured: values [SI], sorted; limits: (low, high) of each target [SI], None where open; margin: distance to the nearest limit [SI],
    negative where violated, None where it has none; seconds: wall time; note: where it went wrong or why it is undecided;
    file, line: of its `expect`; proof: what the numbers rest on (`loopsim.requirements.proof`), empty where nothing was
    decided.
    """

    circuit: str
    label: str
    text: str
    outcome: str
    measured: tuple[float, ...] = ()
    limits: tuple[tuple[float | None, float | None], ...] = ()
    margin: float | None = None
    seconds: float = 0.0
    note: str = ""
    file: str | None = None
    line: int | None = None
    proof: str = ""

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        return {
            "circuit": self.circuit,
            "label": self.label,
            "text": self.text,
            "outcome": self.outcome,
            "measured": list(self.measured),
            "limits": [list(pair) for pair in self.limits],
            "margin": self.margin,
            "seconds": self.seconds,
            "note": self.note,
            "proof": self.proof,
        }
