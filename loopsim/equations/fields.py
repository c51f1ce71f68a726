"""The fields of parts: what their formulas read, and their numbers, with ranges checked."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from loopsim.circuit import Curve, FieldValue, Part, Waveform
from loopsim.devices.curves import everywhere
from loopsim.devices.fields import FieldSpec, Scalar
from loopsim.devices.formula import sum_of
from loopsim.devices.waveforms import WAVEFORMS, waveform, waveform_specs
from loopsim.equations.parameters import curve_values, is_finite, names_in, names_in_curve, number
from loopsim.equations.traced import Traced
from loopsim.errors import CircuitError, Span
from loopsim.expressions import Expression, Operation


def trees(value: FieldValue) -> tuple[Expression, ...]:
    """Every formula inside a field."""
    if isinstance(value, str):
        return ()
    if isinstance(value, Curve):
        return value.values
    if isinstance(value, Waveform):
        return (*value.fields.values(), *(tree for pair in value.points for tree in pair))
    return (value,)


def names_in_field(value: FieldValue, curves: Mapping[str, Curve]) -> frozenset[str]:
    if isinstance(value, str):
        return names_in_curve(curves[value], curves) if value in curves else frozenset()
    return frozenset().union(*(names_in(tree, curves) for tree in trees(value)))


def curve_names(tree: Expression) -> set[str]:
    if not isinstance(tree, Operation):
        return set()
    found = {tree.curve} if tree.name == "curve" else set()
    return found.union(*(curve_names(argument) for argument in tree.arguments))


def field_value(
    part: Part, spec: FieldSpec, value: FieldValue, values: Mapping[str, Scalar], curves: Mapping[str, Curve]
) -> Any:
    what = f"`{part.name}.{spec.name}`"
    if spec.form == "curve":
        found = curves[value] if isinstance(value, str) and value in curves else value
        if not isinstance(found, Curve):
            raise CircuitError("field-kind", f"{what} must be a curve", part.span)
        return curve_values(found, values, curves)
    if spec.form in ("word", "net"):
        if not isinstance(value, str) or (spec.words and value not in spec.words):
            words = " or ".join(spec.words) or "the name of a net"
            raise CircuitError("field-kind", f"{what} must be {words}", part.span)
        return value
    if isinstance(value, Waveform) and spec.form == "source":
        return _waveform(part, spec, value, values, curves)
    if isinstance(value, str | Curve | Waveform):
        raise CircuitError("field-kind", f"{what} must be a number", part.span)
    if spec.form == "formula":
        known = {name: curve_values(curves[name], values, curves) for name in curve_names(value)}
        with np.errstate(all="ignore"):
            return sum_of(value, values, known)
    return in_range(number(value, values, curves, what, part.span), spec, what, part.span)


def _waveform(
    part: Part, spec: FieldSpec, value: Waveform, values: Mapping[str, Scalar], curves: Mapping[str, Curve]
) -> Any:
    if value.form not in WAVEFORMS:
        hint = f"there are {', '.join(WAVEFORMS)}"
        raise CircuitError("unknown-waveform", f"there is no waveform `{value.form}`", part.span, hint)
    specs = waveform_specs(value.form)
    given = {}
    for name, tree in value.fields.items():
        what = f"`{part.name}`: {value.form} `{name}`"
        if name not in specs:
            raise CircuitError(
                "unknown-field", f"{what} is no field of it", part.span, f"its fields are {', '.join(specs)}"
            )
        given[name] = in_range(number(tree, values, curves, what, part.span), specs[name], what, part.span)
    for name, entry in specs.items():
        if entry.required and name not in given:
            raise CircuitError(
                "field-missing", f"`{part.name}`: {value.form} needs `{name}`", part.span, entry.help
            )
    what = f"a point of `{part.name}`"
    points = [
        (number(t, values, curves, what, part.span), number(v, values, curves, what, part.span))
        for t, v in value.points
    ]
    return waveform(value.form, given, points)


def in_range(value: Scalar, spec: FieldSpec, what: str, span: Span | None) -> Scalar:
    """The value, if it lies within the field's range; CircuitError `field-range` otherwise."""
    low, high = spec.low, spec.high
    if low is None or high is None or isinstance(value, Traced):
        return value
    if not is_finite(value) or not everywhere((low <= value) & (value <= high)):
        unit = "" if spec.unit == "signal" else spec.unit
        worst = value if np.ndim(value) == 0 else value[np.argmax(~((low <= value) & (value <= high)))]
        hint = f"it must lie within {low:g} .. {high:g} {unit}"
        raise CircuitError("field-range", f"{what} is {worst:g} {unit}".rstrip(), span, hint.rstrip())
    return value
