"""Thresholds at corners: the nominal fold followed to each corner by Newton; the outermost corners are traced in full to confirm it."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from loopsim.analyses.family import Family
from loopsim.circuit import Requirement
from loopsim.equations.assemble import let_range
from loopsim.numerics.curve import fold
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.corners import Corner, over_tolerances
from loopsim.requirements.judged import Judged, number
from loopsim.requirements.jumps import JUMPS, fold_at, jumps
from loopsim.requirements.limits import limits_of
from loopsim.requirements.proof import CORNERS

if TYPE_CHECKING:
    from loopsim.analyses.trace import Fold, Trace

AGREE = 1e-6  # of the range: how near the followed and the traced threshold must be
FARTHEST = 0.25  # of the range: a fold that moved by more than this is not trusted to be the same; the corner is traced


@dataclass
class Followed:
    """Judges a threshold requirement at a corner by the folds of the nominal trace, moved there. seen: what was found where."""

    computed: Computed
    requirement: Requirement
    settings: Settings
    seen: list[tuple[Corner, float]] = field(default_factory=list)

    def __call__(self, corner: Corner) -> Judged:
        """A full trace at the nominal corner and wherever a fold cannot be followed."""
        here = {**self.settings, **corner}
        value = self._value(here) if corner else None
        if value is None:
            return jumps(self.computed, self.requirement, here)
        self.computed.left()
        self.seen.append((corner, value))
        limits = limits_of(self.requirement.relation, self.computed.values(here))
        error = AGREE * (self._nominal.high - self._nominal.low)
        net, along = self.requirement.target_text, self.requirement.along
        where = f"hysteresis {value:.6g}" if self.requirement.measure == "hysteresis" else f"{net} jumps at {along} = {value:.6g}"
        return number(value, error, limits, self.requirement.relation.form, CORNERS, where)

    @property
    def _nominal(self) -> Trace:
        assert self.requirement.along is not None
        return self.computed.trace(self.requirement.along, self.settings)

    def _value(self, here: Settings) -> float | None:
        """The threshold at other settings, None where a fold does not follow or leaves the range there."""
        curve, along = self._nominal, self.requirement.along
        assert along is not None
        ends = let_range(self.computed.circuit, along, here)
        known = curve.thresholds(self.requirement.target_text)
        ways = ("rising", "falling") if self.requirement.measure == "hysteresis" else (JUMPS[self.requirement.measure],)
        if ends is None:
            return None
        family = Family(self.computed.circuit, {k: v for k, v in here.items() if k != along}, along, *ends)
        found = []
        for way in ways:
            at = getattr(known, way)
            turn = None if at is None else fold_at(curve, at, way)
            moved = None if turn is None else _moved(family, turn, curve)
            if moved is None:
                return None
            found.append(moved)
        return found[0] - found[1] if len(found) == 2 else found[0]


def _moved(family: Family, turn: Fold, curve: Trace) -> float | None:
    """Where a fold of the nominal trace is in another family."""
    if not len(turn.direction_of_curve):
        return None
    point = fold(family, family.bend, family.slope_along, turn.x, turn.at, turn.direction_of_curve, curve.scale)
    if point is None or not family.low < point.level < family.high:
        return None
    return None if abs(point.level - turn.at) > FARTHEST * (curve.high - curve.low) else point.level


def jumps_over_tolerances(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Over tolerances, for the measures of `jumps`: the corners with the smallest and the largest value are traced, and where a trace
    tells otherwise all corners are."""
    followed = Followed(computed, requirement, settings)
    found = over_tolerances(computed, requirement, settings, followed)
    if all(_confirmed(computed, requirement, {**settings, **corner}, value) for corner, value in _outermost(followed.seen)):
        return found
    return over_tolerances(computed, requirement, settings, lambda corner: jumps(computed, requirement, {**settings, **corner}))


def _outermost(seen: list[tuple[Corner, float]]) -> list[tuple[Corner, float]]:
    if not seen:
        return []
    ends = [min(seen, key=lambda entry: entry[1]), max(seen, key=lambda entry: entry[1])]
    return ends[:1] if ends[0] is ends[1] else ends


def _confirmed(computed: Computed, requirement: Requirement, here: Settings, value: float) -> bool:
    """Whether a full trace at a corner, complete at its stations, finds the same threshold."""
    assert requirement.along is not None
    curve = computed.trace(requirement.along, here)
    traced = getattr(curve.thresholds(requirement.target_text), JUMPS[requirement.measure])
    return curve.complete and traced is not None and abs(traced - value) <= AGREE * (curve.high - curve.low)
