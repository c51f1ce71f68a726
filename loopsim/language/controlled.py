"""Formulas of controlled sources: whether they are a sum of terms that the equations can take, and which term is not."""

from __future__ import annotations

from loopsim.devices.formula import sum_of
from loopsim.errors import CircuitError
from loopsim.language import tree as t
from loopsim.language.draft import Draft, curves_in
from loopsim.language.formulas import Scope, typed


def check_controlled(formula: t.Formula, scope: Scope, draft: Draft) -> None:
    """CircuitError unless the formula is a sum of constants times nets, currents, saturating and curve terms."""
    for name in curves_in(typed(formula, scope).tree):
        draft.curves[name] = draft.known_curves[name]
    found = _innermost(formula, scope, draft)
    if found is not None:
        where, error = found
        raise scope.mistake(error.code, error.message, where.place, error.hint)


def _innermost(formula: t.Formula, scope: Scope, draft: Draft) -> tuple[t.Formula, CircuitError] | None:
    """The smallest part of a formula that is no such sum, and why."""
    error = _fault(formula, scope, draft)
    if error is None:
        return None
    for operand in _operands(formula):
        inner = _innermost(operand, scope, draft)
        if inner is not None:
            return inner
    return formula, error


def _fault(formula: t.Formula, scope: Scope, draft: Draft) -> CircuitError | None:
    tree = typed(formula, scope).tree
    curves = {name: draft.curve_values(name) for name in curves_in(tree)}
    try:
        sum_of(tree, draft.numbers, curves)
    except CircuitError as error:
        return error
    return None


def _operands(formula: t.Formula) -> tuple[t.Formula, ...]:
    match formula:
        case t.Chain(_, operands, _, _):
            return operands
        case t.Power(base, exponent, _, _):
            return base, exponent
        case t.Negative(operand, _, _):
            return (operand,)
        case t.Call(name, _, positional, _, _) if name.text != "current":
            return tuple(item.value for item in positional)
    return ()
