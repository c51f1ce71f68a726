"""What stands after `of`: a net, or a formula of nets, lets and currents."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from loopsim.circuit import Circuit, Requirement
from loopsim.equations.parameters import formula_operations
from loopsim.expressions import NetRef, evaluate


def net_of(requirement: Requirement) -> str:
    """The net after `of`; of a formula, or of nothing, the empty name."""
    return requirement.target.name if isinstance(requirement.target, NetRef) else ""


def value_of(
    circuit: Circuit,
    requirement: Requirement,
    lets: Mapping[str, Any],
    nets: Mapping[str, float],
    currents: Mapping[str, Any],
) -> float | None:
    """The target [SI] at these voltages and currents, None where it is no finite number (a division by 0 V, a root below zero)."""
    assert requirement.target is not None
    try:
        with np.errstate(all="ignore"):
            found = evaluate(requirement.target, lets, nets, currents, formula_operations(lets, circuit.curves))
        value = math.nan if isinstance(found, complex) else float(found)
    except (ZeroDivisionError, OverflowError, ValueError):
        return None
    return value if math.isfinite(value) else None
