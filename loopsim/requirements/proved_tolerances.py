"""Over tolerances, proved: how many states there are, where a single source is all that varies.

The trace along that source over its tolerance proves every state for every value at once; without a fold or a gap in it their number is the
same throughout, as long as every branch stays within the box. Anything else over tolerances rests on corners.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from loopsim.circuit import Requirement
from loopsim.equations.assemble import is_affine
from loopsim.expressions import LetRef, references
from loopsim.requirements.computed import RANGE_SHARE, Computed, Settings
from loopsim.requirements.corners import loose

if TYPE_CHECKING:
    from loopsim.analyses.trace import Branch, Trace


WELL_WITHIN = 0.9  # of the box: between two points of a branch a net moves by a few hundredths of its travel


def count_is_proved(computed: Computed, requirement: Requirement, settings: Settings, count: float) -> bool:
    """Whether the circuit is proved to have `count` states at every value of the one quantity that has a tolerance."""
    varying = loose(computed.circuit, requirement, settings)
    if requirement.measure != "states" or len(varying) != 1 or _moving_limits(requirement):
        return False
    ((let, ends),) = varying.items()
    if not is_affine(computed.circuit, let):
        return False
    from loopsim.analyses.trace import trace

    left = computed.left()
    curve = trace(
        computed.circuit, let, over=ends, box=computed.box, budget=left, range_budget=RANGE_SHARE * left, settings=settings
    )  # fmt: skip
    whole = curve.complete and curve.over_range and not curve.gaps and not curve.notes and not curve.folds and not curve.crossings
    return whole and len(curve.branches) == int(count) and all(_runs_through(branch, curve) for branch in curve.branches)


def _runs_through(branch: Branch, curve: Trace) -> bool:
    """Whether a branch goes from one end of the range to the other well within the box, so that it counts as one state everywhere."""
    ends = sorted((float(branch.values[0]), float(branch.values[-1])))
    highest = max((float(np.max(np.abs(volts))) for volts in branch.nets.values()), default=0.0)
    return ends == [curve.low, curve.high] and not branch.closed and highest < WELL_WITHIN * curve.box


def _moving_limits(requirement: Requirement) -> bool:
    """Whether what the count is held to depends on a let."""
    formulas = [formula for target in requirement.relation.targets for formula in target if formula is not None]
    return any(isinstance(reference, LetRef) for formula in formulas for reference in references(formula))
