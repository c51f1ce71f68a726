"""Thresholds at corners: the nominal folds are moved to all corners together by Newton; the outermost corners are traced in full."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.trip_points import TripPoints, trip_points
from loopsim.circuit import Requirement
from loopsim.equations.assemble import is_affine
from loopsim.errors import AnalysisError
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.corners import ALL_CORNERS_OF_FOLDS, Corner, over_tolerances
from loopsim.requirements.judged import Judged, number
from loopsim.requirements.jumps import JUMPS, jumps, ways_of
from loopsim.requirements.limits import limits_of
from loopsim.requirements.proof import CORNERS
from loopsim.requirements.targets import net_of

if TYPE_CHECKING:
    from loopsim.analyses.trace import Trace

Array: TypeAlias = NDArray[np.float64]

AGREE = 1e-6  # of the range: how near the followed and the traced threshold must be
CURVED = 0.5  # of what the sensitivities add up to: a fold further from where they put it may be another one, and the corner is traced
NEAR = 1e-3  # of the range, more


@dataclass
class Followed:
    """Judges a threshold requirement at a corner by the folds of the nominal trace, moved there. moved: what `prepare` found; seen: what
    was judged by it."""

    computed: Computed
    requirement: Requirement
    settings: Settings
    moved: dict[tuple[tuple[str, float], ...], float] = field(default_factory=dict)
    seen: list[tuple[Corner, float]] = field(default_factory=list)

    @property
    def nominal(self) -> Trace:
        """The trace with nothing moved."""
        assert self.requirement.along is not None
        return self.computed.trace(self.requirement.along, self.settings)

    def prepare(self, corners: Sequence[Corner]) -> None:
        """Solve the folds of many corners together; those that Newton loses, or finds elsewhere, are left to full traces."""
        assert self.requirement.along is not None
        curve, along = self.nominal, self.requirement.along
        if not corners or not is_affine(self.computed.circuit, along):
            return
        names = list(dict.fromkeys(name for corner in corners for name in corner))
        plain = self.computed.values(self.settings)
        samples = {name: [corner.get(name, float(plain[name])) for corner in corners] for name in names}
        try:
            points = trip_points(self.computed.circuit, along, samples=samples, nominal=curve, settings=self.settings)
        except AnalysisError:
            return
        values, expected, slack = self._solved(points)
        for corner, value, guess, room in zip(corners, values, expected, slack, strict=True):
            if abs(value - guess) < room:
                self.moved[_key(corner)] = float(value)

    def _solved(self, points: TripPoints) -> tuple[Array, Array, Array]:
        """(k,) each: the measure at the samples, what the sensitivities let expect, and how far from that it may be to be the same fold."""
        net, curve = net_of(self.requirement), self.nominal
        values, expected, reach = np.zeros(len(points.samples)), np.zeros(len(points.samples)), np.zeros(len(points.samples))
        plain = self.computed.values(self.settings)
        steps = points.samples - np.array([float(plain[name]) for name in points.parameters])
        for sign, way in zip((1.0, -1.0), ways_of(self.requirement), strict=False):
            slopes = points.sensitivity(net, way)
            moves = steps * np.array([slopes[name] for name in points.parameters])
            values += sign * points.threshold(net, way)
            expected += sign * (getattr(curve.thresholds(net), way) + moves.sum(axis=1))
            reach += np.abs(moves).sum(axis=1)
        return values, expected, CURVED * reach + NEAR * (curve.high - curve.low)

    def __call__(self, corner: Corner) -> Judged:
        """A full trace at the nominal corner and wherever the folds could not be moved."""
        here = {**self.settings, **corner}
        value = self.moved.get(_key(corner)) if corner else None
        if value is None:
            return jumps(self.computed, self.requirement, here)
        self.computed.left()
        self.seen.append((corner, value))
        limits = limits_of(self.requirement.relation, self.computed.values(here))
        error = AGREE * (self.nominal.high - self.nominal.low)
        net, along = net_of(self.requirement), self.requirement.along
        where = f"hysteresis {value:.6g}" if self.requirement.measure == "hysteresis" else f"{net} jumps at {along} = {value:.6g}"
        return number(value, error, limits, self.requirement.relation.form, CORNERS, where)


def _key(corner: Corner) -> tuple[tuple[str, float], ...]:
    return tuple(sorted(corner.items()))


def jumps_over_tolerances(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Over tolerances, for the measures of `jumps`: the corners with the smallest and the largest value are traced, and where a trace
    tells otherwise all corners are."""
    followed = Followed(computed, requirement, settings)
    most = ALL_CORNERS_OF_FOLDS if is_affine(computed.circuit, requirement.along or "") else None
    found = over_tolerances(computed, requirement, settings, followed, most=most, prepare=followed.prepare)
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
    traced = getattr(curve.thresholds(net_of(requirement)), JUMPS[requirement.measure])
    return curve.complete and traced is not None and abs(traced - value) <= AGREE * (curve.high - curve.low)
