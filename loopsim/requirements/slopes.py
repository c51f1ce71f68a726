"""Small-signal gain from a let to a net or formula, at each operating point: dx/dlet = -J^-1 dF/dlet."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.family import Family
from loopsim.analyses.results import State
from loopsim.circuit import Requirement
from loopsim.equations.assemble import pin_currents
from loopsim.errors import AnalysisError
from loopsim.expressions import CurrentRef, NetRef, references
from loopsim.requirements.computed import Computed, Settings
from loopsim.requirements.judged import Judged
from loopsim.requirements.proof import COMPLETE_LIST
from loopsim.requirements.targets import value_of
from loopsim.requirements.values import of_states

Array: TypeAlias = NDArray[np.float64]

REACH = 0.05  # of the let's size (of 1 where that is 0): the range its difference quotient is scaled by
STEP = 1e-6  # of the same: half the way over which a formula of nets is differentiated
FLAT = 1e-14  # a scaled Jacobian's smallest over largest singular value below which the point is as good as a fold


def slope(computed: Computed, requirement: Requirement, settings: Settings) -> Judged:
    """Server of `slope`."""
    let, target = requirement.along, requirement.target
    assert let is not None
    assert target is not None
    value = float(computed.values(settings)[let])
    size = abs(value) or 1.0
    others = {name: v for name, v in settings.items() if name != let}
    family = Family(computed.circuit, others, let, value - REACH * size, value + REACH * size)

    def read(state: State) -> tuple[float, float] | None:
        moved = _moved(family, state, value)
        if isinstance(target, NetRef):
            index = family.system(value).index
            return (float(moved[index["net", target.name]]) if target.name != "gnd" else 0.0), 0.0
        h = STEP * size
        ends = [_target_at(computed, requirement, settings, state.x + way * moved, value + way) for way in (-h, h)]
        if ends[0] is None or ends[1] is None:
            return None
        return (ends[1] - ends[0]) / (2.0 * h), 0.0

    return of_states(computed, requirement, settings, read, COMPLETE_LIST)


def _moved(family: Family, state: State, value: float) -> Array:
    """dx/dlet (n,); AnalysisError `singular` at a fold."""
    matrix = family.jacobian(state.x, value)
    rows = np.maximum(np.max(np.abs(matrix), axis=1), 1e-300)
    scaled = matrix / rows[:, None]
    scaled = scaled / np.maximum(np.max(np.abs(scaled), axis=0), 1e-300)
    if not np.linalg.cond(scaled) < 1.0 / FLAT:
        raise AnalysisError("singular", f"state {state.name} stands at a fold, where there is no slope")
    return np.asarray(np.linalg.solve(matrix / rows[:, None], -family.slope(state.x, value) / rows))


def _target_at(computed: Computed, requirement: Requirement, settings: Settings, x: Array, value: float) -> float | None:
    """The net or formula after `of` with the let at `value` and the unknowns at x."""
    assert requirement.target is not None
    assert requirement.along is not None
    chosen = {**settings, requirement.along: value}
    lets = computed.values(chosen)
    needs_currents = any(isinstance(reference, CurrentRef) for reference in references(requirement.target))
    currents: Mapping[str, float] = pin_currents(computed.circuit, x, chosen) if needs_currents else {}
    return value_of(computed.circuit, requirement, lets, computed.nets(x), currents)
