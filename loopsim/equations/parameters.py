"""Values of a circuit's named quantities, in dependency order, with some of them set from outside."""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from loopsim.circuit import Circuit, Curve, Parameter
from loopsim.devices.curves import CurveValues, everywhere, points_curve, polynomial_curve
from loopsim.devices.fields import Scalar
from loopsim.devices.formula import constant_limit
from loopsim.devices.phi import VALUE
from loopsim.devices.thermal import AMBIENT_HIGH, AMBIENT_LOW, REFERENCE
from loopsim.errors import CircuitError, Span
from loopsim.expressions import Expression, LetRef, Number, Operation, evaluate, references

AMBIENT = "ambient"
_AMBIENT = Parameter(AMBIENT, Number(REFERENCE), "degC")


@dataclass(frozen=True, eq=False)
class ParameterPlan:
    """order: every parameter after those it needs; roots: per parameter, itself and all that its value depends on; curves: as
    written, by name; nominal: every value with nothing set from outside."""

    order: tuple[str, ...]
    formulas: Mapping[str, Parameter]
    roots: Mapping[str, frozenset[str]]
    curves: Mapping[str, Curve]
    nominal: Mapping[str, Scalar]


def names_in(tree: Expression, curves: Mapping[str, Curve]) -> frozenset[str]:
    """Every let that `tree` reads, also through the curves it applies."""
    found = {reference.name for reference in references(tree) if isinstance(reference, LetRef)}
    for name in _curves_in(tree):
        if name in curves:
            found |= names_in_curve(curves[name], curves)
    return frozenset(found)


def names_in_curve(curve: Curve, curves: Mapping[str, Curve]) -> frozenset[str]:
    """Every let that the numbers of a curve read."""
    return (
        frozenset().union(*(names_in(value, curves) for value in curve.values))
        if curve.values
        else frozenset()
    )


def _curves_in(tree: Expression) -> frozenset[str]:
    if not isinstance(tree, Operation):
        return frozenset()
    found = frozenset((tree.curve,)) if tree.name == "curve" else frozenset()
    return found.union(*(_curves_in(argument) for argument in tree.arguments))


def parameter_plan(circuit: Circuit) -> ParameterPlan:
    """CircuitError `unknown-let` or `let-cycle` where a formula reads what is not there, or itself."""
    formulas = dict(circuit.parameters)
    formulas.setdefault(AMBIENT, _AMBIENT)
    needs = {name: names_in(parameter.value, circuit.curves) for name, parameter in formulas.items()}
    for name, wanted in needs.items():
        for other in sorted(wanted - formulas.keys()):
            raise unknown_let(other, formulas, formulas[name].span)
    order = _ordered(needs, formulas)
    roots: dict[str, frozenset[str]] = {}
    for name in order:
        roots[name] = frozenset((name,)).union(*(roots[other] for other in needs[name]))
    unset = ParameterPlan(order, formulas, roots, circuit.curves, {})
    return ParameterPlan(order, formulas, roots, circuit.curves, evaluated(unset, order, {}, {}))


def _ordered(needs: Mapping[str, frozenset[str]], formulas: Mapping[str, Parameter]) -> tuple[str, ...]:
    """Names with every name after those it needs; a loop over names left, because chains of lets may be long."""
    order: list[str] = []
    done: set[str] = set()
    left = list(needs)
    while left:
        ready = [name for name in left if needs[name] <= done]
        if not ready:
            raise CircuitError(
                "let-cycle",
                f"these quantities are defined by each other: {', '.join(sorted(left))}",
                formulas[left[0]].span,
                "give one of them a value of its own",
            )
        order += ready
        done.update(ready)
        left = [name for name in left if name not in done]
    return tuple(order)


def unknown_let(name: str, known: Iterable[str], span: Span | None = None) -> CircuitError:
    """The error for a quantity that is not there, with the nearest name."""
    near = difflib.get_close_matches(name, list(known), 1)
    names = "the names are those of `let` statements, and `part.field` of toleranced values"
    hint = f"did you mean `{near[0]}`?" if near else names
    return CircuitError("unknown-let", f"there is no quantity `{name}`", span, hint)


def evaluated(
    plan: ParameterPlan, names: Iterable[str], known: Mapping[str, Scalar], settings: Mapping[str, Scalar]
) -> dict[str, Scalar]:
    """`known` with the parameters `names` (in order) worked out anew, or taken from `settings` where they are set."""
    values = dict(known)
    for name in names:
        values[name] = (
            settings[name] if name in settings else formula_value(plan.formulas[name], values, plan.curves)
        )
    _check_ambient(values[AMBIENT], plan.formulas[AMBIENT].span)
    return values


def formula_value(parameter: Parameter, values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> Scalar:
    """The number a parameter's formula gives; CircuitError `formula-value` where it is no finite real number."""
    return number(parameter.value, values, curves, f"`{parameter.name}`", parameter.span)


def number(
    tree: Expression, values: Mapping[str, Scalar], curves: Mapping[str, Curve], what: str, span: Span | None
) -> Scalar:
    """The value of a formula of lets; `what` names it in a message."""
    if isinstance(tree, Number):
        return tree.value
    if isinstance(tree, LetRef) and tree.name in values:
        return values[tree.name]
    try:
        with np.errstate(all="ignore"):
            value = evaluate(tree, values, operations=formula_operations(values, curves))
    except (ZeroDivisionError, OverflowError, ValueError):
        value = math.nan
    except KeyError as missing:
        raise CircuitError(
            "formula-value", f"{what} reads {missing}, which has no value here", span
        ) from None
    if not is_finite(value):
        hint = "a division by zero, or a root of a negative number?"
        raise CircuitError("formula-value", f"{what} has no finite value", span, hint)
    return value


def is_finite(value: Any) -> bool:
    """Whether a float or an array is finite and real throughout; what only stands for a number counts as such."""
    if isinstance(value, float | int):
        return math.isfinite(value)
    if isinstance(value, complex):
        return False
    return not isinstance(value, np.ndarray | np.generic) or bool(np.all(np.isfinite(value)))


def formula_operations(values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> Mapping[str, Any]:
    """What `evaluate` needs beside the values: `limit`, and every curve with its numbers put in."""
    def apply_curve(name: str, x: Scalar) -> Scalar:
        found = curve_values(curves[name], values, curves)
        return VALUE[found.kind](x, found.parameters)

    return {"limit": constant_limit, "curve": apply_curve}


def curve_values(curve: Curve, values: Mapping[str, Scalar], curves: Mapping[str, Curve]) -> CurveValues:
    """A curve with its numbers put in."""
    numbers = [number(tree, values, curves, f"curve `{curve.name}`", curve.span) for tree in curve.values]
    try:
        return polynomial_curve(numbers) if curve.form == "polynomial" else points_curve(numbers)
    except CircuitError as fault:
        raise CircuitError(
            fault.code, f"curve `{curve.name}`: {fault.message}", curve.span, fault.hint
        ) from None


def checked_settings(plan: ParameterPlan, settings: Mapping[str, Any]) -> dict[str, Scalar]:
    """Floats, or arrays of one common length; CircuitError `unknown-let`, `setting-value` or `setting-shape` otherwise."""
    found: dict[str, Scalar] = {}
    length: int | None = None
    for name, given in settings.items():
        if name not in plan.formulas:
            raise unknown_let(name, plan.formulas)
        try:
            value = np.asarray(given, dtype=float)
        except (TypeError, ValueError):
            raise CircuitError("setting-value", f"`{name}` is set to {given!r}, which is no number") from None
        if not np.all(np.isfinite(value)):
            raise CircuitError("setting-value", f"`{name}` is set to what is no finite number")
        if value.ndim == 0:
            found[name] = float(value)
            continue
        if value.ndim != 1 or (length is not None and len(value) != length):
            text = f"`{name}` is set to an array of shape {value.shape}"
            raise CircuitError("setting-shape", text, hint="all arrays of a batch have one length")
        length = len(value)
        found[name] = value
    return found


def _check_ambient(value: Scalar, span: Span | None) -> None:
    if not everywhere((value >= AMBIENT_LOW) & (value <= AMBIENT_HIGH)):
        raise CircuitError(
            "field-range",
            f"`ambient` must lie within {AMBIENT_LOW:g} degC .. {AMBIENT_HIGH:g} degC",
            span,
            "it is in degC",
        )
