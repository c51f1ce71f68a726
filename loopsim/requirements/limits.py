"""What a measured number is compared with: pairs of limits, and how far inside them it lies."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TypeAlias

from loopsim.circuit import Relation
from loopsim.equations.parameters import number
from loopsim.expressions import Expression

Pair: TypeAlias = tuple[float | None, float | None]
Limits: TypeAlias = tuple[Pair, ...]

STRICT = ("below", "above")  # relations that a number on the limit does not keep


def limits_of(relation: Relation, values: Mapping[str, object]) -> Limits:
    """(low, high) of each target [SI], None where open. values: of the lets."""
    found: list[Pair] = []
    for value, low, high in relation.targets:
        if relation.form == "below":
            found.append((None, _number(value, values)))
        elif relation.form == "above":
            found.append((_number(value, values), None))
        else:
            found.append((_number(low, values), _number(high, values)))
    return tuple(found)


def _number(formula: Expression | None, values: Mapping[str, object]) -> float | None:
    """CircuitError `formula-value` where the formula gives no finite number here."""
    return None if formula is None else float(number(formula, values, {}, "a limit", None))


def room(value: float, limits: Pair) -> float:
    """Distance of a value to the nearer limit, negative outside."""
    low, high = limits
    return min(float("inf") if low is None else value - low, float("inf") if high is None else high - value)


def within(value: float, limits: Pair, form: str) -> bool:
    """Whether a value keeps its limits; below and above are strict."""
    left = room(value, limits)
    return left > 0.0 if form in STRICT else left >= 0.0


def best_room(value: float, limits: Limits) -> float:
    """Distance to the nearer limit of the pair that suits the value best."""
    return max(room(value, pair) for pair in limits)


def keeps_one(value: float, limits: Limits, form: str) -> bool:
    """Whether a value keeps one of the pairs."""
    return any(within(value, pair, form) for pair in limits)


def pair_text(pair: Pair, unit: str = "") -> str:
    """`3 .. 5 V`, `below 5 V`, `above 3 V`."""
    low, high = pair
    after = f" {unit}" if unit else ""
    if low is None:
        return f"below {high:.6g}{after}"
    if high is None:
        return f"above {low:.6g}{after}"
    return f"{low:.6g} .. {high:.6g}{after}"


def unmet(numbers: Sequence[float], limits: Limits, form: str) -> list[Pair]:
    """Pairs that no number keeps."""
    return [pair for pair in limits if not any(within(v, pair, form) for v in numbers)]
