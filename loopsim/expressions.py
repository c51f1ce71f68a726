"""Formulas as small trees of SI numbers, evaluated over NumPy arrays.

The language layer checks names and dimensions and then builds these; nothing here knows text or units. Every node is frozen and
hashable. `evaluate` works for floats and for arrays alike, so that a thousand tolerance samples are one call.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

Scalar: TypeAlias = Any  # a float, or an array of shape (batch,)


@dataclass(frozen=True, slots=True)
class Number:
    """A constant [SI base units]."""

    value: float


@dataclass(frozen=True, slots=True)
class LetRef:
    """The value of a named quantity (a `let`, or a toleranced literal `part.field`)."""

    name: str


@dataclass(frozen=True, slots=True)
class NetRef:
    """The voltage of a net to gnd [V]."""

    name: str


@dataclass(frozen=True, slots=True)
class CurrentRef:
    """The current through a part, along its chain [A]."""

    part: str


@dataclass(frozen=True, slots=True)
class Operation:
    """An operator or function applied to trees.

    name: one of + - * / ^ negative sqrt ln exp abs min max tanh atan limit curve. `limit` has three arguments x, lo, hi;
    `curve` has one argument and names its curve in `curve`.
    """

    name: str
    arguments: tuple[Expression, ...]
    curve: str = ""


Expression: TypeAlias = Number | LetRef | NetRef | CurrentRef | Operation

_FUNCTIONS: dict[str, Callable[..., Scalar]] = {
    "+": lambda a, b: a + b,
    "-": lambda a, b: a - b,
    "*": lambda a, b: a * b,
    "/": lambda a, b: a / b,
    "^": lambda a, b: a**b,
    "negative": lambda a: -a,
    "sqrt": np.sqrt,
    "ln": np.log,
    "exp": np.exp,
    "abs": np.abs,
    "min": np.minimum,
    "max": np.maximum,
    "tanh": np.tanh,
    "atan": np.arctan,
}


def evaluate(
    tree: Expression,
    lets: Mapping[str, Scalar],
    nets: Mapping[str, Scalar] | None = None,
    currents: Mapping[str, Scalar] | None = None,
    operations: Mapping[str, Callable[..., Scalar]] | None = None,
) -> Scalar:
    """Value of `tree` [SI]; lets, nets, currents: name to float or (batch,) array; operations: extra or overriding functions
    (`limit` and `curve` come this way: `curve` is called with the curve's name first). KeyError for an unknown name."""
    match tree:
        case Number(value):
            return value
        case LetRef(name):
            return lets[name]
        case NetRef(name):
            return 0.0 if name == "gnd" else (nets or {})[name]
        case CurrentRef(part):
            return (currents or {})[part]
        case Operation(name, arguments, curve):
            values = [evaluate(a, lets, nets, currents, operations) for a in arguments]
            if operations and name in operations:
                return operations[name](curve, *values) if name == "curve" else operations[name](*values)
            return _FUNCTIONS[name](*values)
    raise TypeError(f"not an expression: {tree!r}")


def references(tree: Expression) -> frozenset[Expression]:
    """Every LetRef, NetRef and CurrentRef in `tree`."""
    if isinstance(tree, Operation):
        found: frozenset[Expression] = frozenset()
        for argument in tree.arguments:
            found |= references(argument)
        return found
    return frozenset() if isinstance(tree, Number) else frozenset((tree,))
