"""The number that a formula without nets gives."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping

import numpy as np

from loopsim.devices.formula import constant_limit
from loopsim.errors import CircuitError
from loopsim.expressions import Expression, evaluate
from loopsim.language import tree as t
from loopsim.language.formulas import Scope


def nominal(
    tree: Expression,
    formula: t.Formula,
    scope: Scope,
    numbers: Mapping[str, float],
    apply_curve: Callable[[str, float], float] | None = None,
) -> float:
    """The value [SI] of `tree`, which `formula` is in words. numbers: of the lets; apply_curve: value of a curve by its name.

    CircuitError `formula-value` where it is no finite real number, `limit-order`.
    """
    operations: dict[str, Callable[..., float]] = {"limit": constant_limit}
    if apply_curve is not None:
        operations["curve"] = apply_curve
    try:
        with np.errstate(all="ignore"):
            value = evaluate(tree, numbers, operations=operations)
    except (ZeroDivisionError, OverflowError, ValueError):
        value = math.nan
    except CircuitError as error:
        raise scope.mistake(error.code, error.message, formula.place, error.hint) from None
    if isinstance(value, complex) or not math.isfinite(value):
        raise scope.mistake(
            "formula-value",
            "this formula has no finite value",
            formula.place,
            "a division by zero, a root of a negative number, or a number too large",
        )
    return float(value)
