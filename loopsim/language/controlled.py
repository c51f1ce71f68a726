"""Formulas of controlled sources: which curves they use, and whether they are a sum of terms that the equations can take."""

from __future__ import annotations

from loopsim.circuit import Curve
from loopsim.devices.curves import CurveValues, points_curve, polynomial_curve
from loopsim.devices.formula import sum_of
from loopsim.errors import CircuitError
from loopsim.expressions import Expression, Operation, evaluate
from loopsim.language import tree as t
from loopsim.language.draft import Draft, Frame


def check_controlled(tree: Expression, formula: t.Formula, frame: Frame) -> None:
    """CircuitError unless the formula is a sum of constants times nets, currents, saturating and curve terms."""
    draft, definitions = frame.draft, frame.definitions
    for name in _curves_in(tree):
        draft.curves[name] = definitions.curves[name]
    curves = {name: _numbers(curve, draft) for name, curve in definitions.curves.items()}
    try:
        sum_of(tree, draft.numbers, curves)
    except CircuitError as error:
        raise frame.scope.mistake(error.code, error.message, formula.place, error.hint) from None


def _numbers(curve: Curve, draft: Draft) -> CurveValues:
    values = [float(evaluate(value, draft.numbers)) for value in curve.values]
    return polynomial_curve(values) if curve.form == "polynomial" else points_curve(values)


def _curves_in(tree: Expression) -> list[str]:
    """Names of the curves that a formula applies."""
    found = []
    stack = [tree]
    while stack:
        node = stack.pop()
        if isinstance(node, Operation):
            if node.name == "curve":
                found.append(node.curve)
            stack.extend(node.arguments)
    return found
