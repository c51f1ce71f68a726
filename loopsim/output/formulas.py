"""Formulas back to text, with their numbers in the unit of the field they stand in."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from loopsim.circuit import Curve, FieldValue, Tolerance, Waveform
from loopsim.expressions import CurrentRef, Expression, LetRef, NetRef, Number, Operation
from loopsim.output.engineering import shortest

DIGITS = 6  # what an author writes has fewer; a constant worked out from decibels has more than anyone reads

STRENGTH = {"+": 1, "-": 1, "*": 2, "/": 2, "negative": 3, "^": 4}


def formula_text(tree: Expression, unit: str = "") -> str:
    """`tree` as a person would write it; unit: of a number that stands alone."""
    if isinstance(tree, Number):
        return shortest(tree.value, unit, DIGITS)
    return _inside(tree, 0)


def _inside(tree: Expression, strength: int) -> str:
    match tree:
        case Number(value):
            text = shortest(value, "", DIGITS)
            return f"({text})" if value < 0.0 and strength > STRENGTH["negative"] else text
        case LetRef(name) | NetRef(name):
            return name
        case CurrentRef(part):
            return f"current({part})"
        case Operation("negative", (argument,)):
            text = f"-{_inside(argument, STRENGTH['negative'])}"
            return f"({text})" if strength > STRENGTH["negative"] else text
        case Operation(name, (left, right)) if name in STRENGTH:
            own = STRENGTH[name]
            # a - (b - c), a / (b / c) and (a ^ b) ^ c keep their brackets
            text = f"{_inside(left, own + (name == '^'))} {name} {_inside(right, own + (name in '-/'))}"
            return f"({text})" if strength > own else text
        case Operation(name, arguments, curve):
            inner = ", ".join(_inside(argument, 0) for argument in arguments)
            return f"{curve or name}({inner})"
    raise TypeError(f"not a formula: {tree!r}")


def field_text(value: FieldValue, unit: str = "") -> str:
    """The value of a field: a word, a formula, a curve's name, a waveform with its fields."""
    match value:
        case str():
            return value
        case Curve():
            return value.name
        case Waveform():
            inner = [f"{name} = {formula_text(tree)}" for name, tree in value.fields.items()]
            inner += [f"{formula_text(time)}: {formula_text(level)}" for time, level in value.points]
            return f"{value.form}({', '.join(inner)})"
        case _:
            return formula_text(value, unit)


def tolerance_text(tolerance: Tolerance | None, unit: str = "") -> str:
    """`+/- 1 %`, `+/- 5 mV`, `+ 10 % - 20 %`, or nothing."""
    if tolerance is None:
        return ""

    def share(size: float) -> str:
        return shortest(100.0 * size, "%", DIGITS) if tolerance.relative else shortest(size, unit, DIGITS)

    if tolerance.low == -tolerance.high:
        return f"+/- {share(tolerance.high)}"
    return f"+ {share(tolerance.high)} - {share(-tolerance.low)}"


def value_text(value: Any, unit: str) -> str:
    """A value of a let as set [SI]."""
    return shortest(float(value), unit, DIGITS)


def units_of(specs: Mapping[str, Any]) -> dict[str, str]:
    """Unit of every field of a device, from its descriptions."""
    return {name: spec.unit if spec.unit != "signal" else "" for name, spec in specs.items()}
