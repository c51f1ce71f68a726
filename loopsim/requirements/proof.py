"""What stands behind an outcome, in one label, and which labels count as proof.

The labels, strongest first, are explained in docs/explanation/verify.md. A label never says more than was done.
"""

from __future__ import annotations

PROVED = "proved"
COMPLETE_LIST = "complete list"
STATIONS = "complete at {} stations"
SIMULATED = "simulated"
CORNERS = "by corners"

ORDER = (PROVED, COMPLETE_LIST, "complete at", SIMULATED, CORNERS)
ENOUGH = (PROVED, COMPLETE_LIST)  # with proof required, a requirement is met by these alone


def strength(label: str) -> int:
    """0 for the strongest label; the more the weaker."""
    for rank, beginning in enumerate(ORDER):
        if label.startswith(beginning):
            return rank
    return len(ORDER)


def weakest(labels: list[str]) -> str:
    """The label that holds for all of them together."""
    return max(labels, key=strength, default="")
