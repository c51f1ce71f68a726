"""Formulas of net voltages and part currents as sums: a constant, coefficients of unknowns, and saturating or curve terms of
such sums."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from loopsim.devices.curves import CurveValues, everywhere
from loopsim.devices.fields import Scalar
from loopsim.devices.phi import Kind
from loopsim.errors import CircuitError
from loopsim.expressions import CurrentRef, Expression, LetRef, NetRef, Number, Operation, evaluate

LIMIT_KNEE = 1e-3  # of hi - lo: how soft the corners of `limit` are; at a corner it is off by 0.7 of that


@dataclass(frozen=True, eq=False)
class Sum:
    """constant + sum coefficients[u] * u + sum terms. Keys of coefficients: ("net", name) or ("current", part)."""

    constant: Scalar
    coefficients: Mapping[tuple[str, str], Scalar]
    terms: tuple[Saturating, ...] = ()

    @property
    def is_constant(self) -> bool:
        return not self.coefficients and not self.terms


@dataclass(frozen=True, eq=False)
class Saturating:
    """scale * phi_kind(control)."""

    scale: Scalar
    kind: Kind
    control: Sum
    parameters: tuple[Scalar, ...] = ()


def constant_limit(x: Scalar, low: Scalar, high: Scalar) -> Scalar:
    """`limit` of a number: the same smooth law as that of a net voltage. CircuitError `limit-order` for ends that do not rise."""
    if not everywhere(low < high):
        raise CircuitError(
            "limit-order", "the lower end of `limit` must lie below the upper one", hint="limit(x, low, high)"
        )
    knee = LIMIT_KNEE * (high - low)
    return low + knee * (np.logaddexp(0.0, (x - low) / knee) - np.logaddexp(0.0, (x - high) / knee))


def sum_of(tree: Expression, lets: Mapping[str, Scalar], curves: Mapping[str, CurveValues]) -> Sum:
    """`tree` as a sum; lets: name to value; curves: name to its numbers.

    CircuitError `formula-term` for what is no such sum (a product of two voltages, the exponential of one, ...), `division`,
    `limit-order`, and `formula-value` where a constant in it is no finite number.
    """
    with np.errstate(all="ignore"):
        found = _sum_of(tree, lets, curves)
    if not _is_finite(found):
        raise CircuitError("formula-value", "a constant of this formula has no finite value")
    return found


def _is_finite(found: Sum) -> bool:
    """Whether every number of a sum is finite and real."""
    constants = (found.constant, *found.coefficients.values(), *(term.scale for term in found.terms))
    return all(map(_is_number, constants)) and all(_is_finite(term.control) for term in found.terms)


def _is_number(value: Scalar) -> bool:
    """Finite and real throughout; what is neither a number nor an array of them is not judged."""
    if isinstance(value, float | int | complex | np.ndarray | np.generic):
        return bool(np.isrealobj(value) and np.all(np.isfinite(value)))
    return True


def _sum_of(tree: Expression, lets: Mapping[str, Scalar], curves: Mapping[str, CurveValues]) -> Sum:
    match tree:
        case Number(value):
            return Sum(value, {})
        case LetRef(name):
            return Sum(lets[name], {})
        case NetRef(name):
            return Sum(0.0, {} if name == "gnd" else {("net", name): 1.0})
        case CurrentRef(part):
            return Sum(0.0, {("current", part): 1.0})
        case Operation(name, arguments, curve):
            parts = [_sum_of(argument, lets, curves) for argument in arguments]
            if name in _RULES:
                return _RULES[name](*parts)
            if name == "curve":
                return _term(1.0, curves[curve].kind, parts[0], curves[curve].parameters)
            if all(part.is_constant for part in parts):
                return Sum(_constant(name, [part.constant for part in parts]), {})
            raise CircuitError(
                "formula-term",
                f"`{name}` of a net voltage or a current is no term of a controlled source",
                hint="allowed are sums of constants times voltages, currents, and limit, tanh, atan or a curve of such sums",
            )
    raise TypeError(f"not an expression: {tree!r}")


def _constant(name: str, arguments: list[Scalar]) -> Scalar:
    """The value of an operation on numbers; nan where it has none."""
    try:
        value = evaluate(Operation(name, tuple(Number(argument) for argument in arguments)), {})
    except (ZeroDivisionError, OverflowError, ValueError):
        return math.nan
    return math.nan if isinstance(value, complex) else value


def _add(a: Sum, b: Sum) -> Sum:
    merged = dict(a.coefficients)
    for key, value in b.coefficients.items():
        merged[key] = merged[key] + value if key in merged else value
    return Sum(a.constant + b.constant, merged, a.terms + b.terms)


def _product(a: Scalar, b: Scalar) -> Scalar:
    """a * b, where a plain zero stays one: what is not there does not move with a let either."""
    return 0.0 if isinstance(a, float) and a == 0.0 else a * b


def _scale(a: Sum, factor: Scalar) -> Sum:
    coefficients = {key: value * factor for key, value in a.coefficients.items()}
    terms = tuple(Saturating(t.scale * factor, t.kind, t.control, t.parameters) for t in a.terms)
    return Sum(_product(a.constant, factor), coefficients, terms)


def _multiply(a: Sum, b: Sum) -> Sum:
    if b.is_constant:
        return _scale(a, b.constant)
    if a.is_constant:
        return _scale(b, a.constant)
    raise CircuitError(
        "formula-term",
        "a product of two voltages or currents is no term of a controlled source",
        hint="one factor of a product must be a constant",
    )


def _divide(a: Sum, b: Sum) -> Sum:
    if not b.is_constant:
        raise CircuitError(
            "formula-term",
            "division by a voltage or current is no term of a controlled source",
            hint="divide by a constant",
        )
    if not everywhere(b.constant != 0.0):
        raise CircuitError("division", "division by zero")
    return _scale(a, 1.0 / b.constant)


def _term(scale: Scalar, kind: Kind, control: Sum, parameters: tuple[Scalar, ...] = ()) -> Sum:
    return Sum(0.0, {}, (Saturating(scale, kind, control, parameters),))


def _tanh(a: Sum) -> Sum:
    return Sum(np.tanh(a.constant), {}) if a.is_constant else _term(1.0, Kind.SATURATION, a)


def _atan(a: Sum) -> Sum:
    return Sum(np.arctan(a.constant), {}) if a.is_constant else _term(1.0, Kind.ARCTANGENT, a)


def _limit(x: Sum, low: Sum, high: Sum) -> Sum:
    """low + k (softplus((x - low) / k) - softplus((x - high) / k)), k = LIMIT_KNEE (high - low)."""
    if not (low.is_constant and high.is_constant):
        raise CircuitError(
            "formula-term", "the ends of `limit` must be constants", hint="give them as numbers or lets"
        )
    # the ends are checked there, too
    constant = constant_limit(x.constant, low.constant, high.constant)
    if x.is_constant:
        return Sum(constant, {})
    knee = LIMIT_KNEE * (high.constant - low.constant)
    inner = _scale(x, 1.0 / knee)
    lower = _add(inner, Sum(-low.constant / knee, {}))
    upper = _add(inner, Sum(-high.constant / knee, {}))
    terms = (Saturating(knee, Kind.SOFTPLUS, lower), Saturating(-knee, Kind.SOFTPLUS, upper))
    return Sum(low.constant, {}, terms)


_RULES: dict[str, Callable[..., Sum]] = {
    "+": _add,
    "-": lambda a, b: _add(a, _scale(b, -1.0)),
    "negative": lambda a: _scale(a, -1.0),
    "*": _multiply,
    "/": _divide,
    "tanh": _tanh,
    "atan": _atan,
    "limit": _limit,
}
