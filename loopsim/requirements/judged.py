"""One requirement at one choice of its lets: what was measured and what became of it."""

from __future__ import annotations

from dataclasses import dataclass, replace

from loopsim.requirements.limits import Limits, best_room, keeps_one
from loopsim.requirements.outcomes import RANK


@dataclass(frozen=True)
class Judged:
    """outcome: met, violated or undecided; measured [SI]; limits [SI]; margin: room to the nearest limit, negative outside; note: where,
    or why not; proof: what stands behind it (`loopsim.requirements.proof`), empty where undecided."""

    outcome: str
    measured: tuple[float, ...] = ()
    limits: Limits = ()
    margin: float | None = None
    note: str = ""
    proof: str = ""

    @property
    def badness(self) -> tuple[int, float]:
        """Sorts violated before undecided before met, then by margin."""
        return RANK[self.outcome], float("inf") if self.margin is None else self.margin

    def at(self, place: str) -> Judged:
        """The same with its place before the note."""
        if not place or (self.outcome == "met" and not self.note):
            return self
        return replace(self, note=f"at {place}: {self.note}" if self.note else f"at {place}")


def open_question(note: str, limits: Limits = (), measured: tuple[float, ...] = ()) -> Judged:
    """Undecided, and why."""
    return Judged("undecided", measured, limits, None, note)


def number(value: float, error: float, limits: Limits, form: str, proof: str, where: str) -> Judged:
    """One measured number, known to within `error` [its unit]; where: what the note says of it when it is outside its limits."""
    left = best_room(value, limits)
    if abs(left) < error:
        return open_question(f"{where}: closer to its limit than the {error:.2g} to which it is known", limits, (value,))
    if keeps_one(value, limits, form):
        return Judged("met", (value,), limits, left, "", proof)
    return Judged("violated", (value,), limits, left, where, proof)
