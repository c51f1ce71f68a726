"""`sine(...)`, `square(...)`, `ramp(...)`, `points(...)` as the value of a source."""

from __future__ import annotations

import math

from loopsim.circuit import Waveform
from loopsim.devices.catalogue import waveform_specs
from loopsim.expressions import Expression
from loopsim.language import tree as t
from loopsim.language.definitions import refuse_positional
from loopsim.language.draft import Draft
from loopsim.language.formulas import Scope, Typed, require, typed
from loopsim.language.mistakes import nearest
from loopsim.language.values import constant
from loopsim.units import SECOND, Dimension, dimension_of

WAVEFORMS = ("sine", "square", "ramp", "points")


def read_waveform(call: t.Call, scope: Scope, draft: Draft) -> tuple[Waveform, Dimension]:
    """The waveform and the dimension of its signal, whatever that is."""
    if call.name.text == "points":
        return _points(call, scope, draft)
    form = call.name.text
    specs = waveform_specs(form)
    refuse_positional(call, scope, "the fields of a waveform are")
    fields: dict[str, Expression] = {}
    signal: Dimension | None = None
    for given in call.fields:
        name, formula = given.name.text, given.value.value
        if name in fields:
            raise scope.mistake("duplicate-field", f"`{name}` is given twice", given.name.place)
        value = _field(given, form, scope, draft)
        if specs[name].unit == "signal":
            signal = signal or value.dimension
            require(value, signal, formula, scope, f"`{name}` is in")
        else:
            require(value, dimension_of(specs[name].unit), formula, scope, f"`{name}` is in")
        fields[name] = value.tree
    for name, spec in specs.items():
        if spec.required and name not in fields:
            raise scope.mistake("field-missing", f"`{form}` needs `{name}`", call.place)
    if signal is None:
        raise scope.mistake("field-missing", f"nothing says whether `{form}` is in V or A", call.place)
    return Waveform(form, fields), signal


def _field(given: t.Field, form: str, scope: Scope, draft: Draft) -> Typed:
    name, formula, tolerance = given.name.text, given.value.value, given.value.tolerance
    specs = waveform_specs(form)
    if name not in specs:
        raise scope.mistake(
            "unknown-field", f"`{form}` has no field `{name}`", given.name.place, nearest(name, specs)
        )
    if tolerance is not None:
        raise scope.mistake(
            "tolerance", "a waveform's field has no tolerance; give one to a let", tolerance.place
        )
    value = constant(formula, scope, "a waveform")
    draft.number(value.tree, formula, scope)
    return value


def _points(call: t.Call, scope: Scope, draft: Draft) -> tuple[Waveform, Dimension]:
    pairs: list[tuple[Expression, Expression]] = []
    signal: Dimension | None = None
    last = -math.inf
    for item in call.positional:
        if item.pair is None:
            raise scope.mistake(
                "call",
                "`points` takes pairs time: value",
                item.value.place,
                "for example points(0 s: 0 V, 1 ms: 5 V)",
            )
        x, y = typed(item.value, scope), typed(item.pair, scope)
        require(x, SECOND, item.value, scope, "a time is in")
        signal = signal or y.dimension
        require(y, signal, item.pair, scope, "the values are in")
        here = draft.number(x.tree, item.value, scope)
        draft.number(y.tree, item.pair, scope)
        if here <= last:
            raise scope.mistake("waveform-times", "times have to rise from pair to pair", item.value.place)
        last = here
        pairs.append((x.tree, y.tree))
    if signal is None or call.fields:
        raise scope.mistake("call", "`points` takes pairs time: value", call.place)
    return Waveform("points", {}, tuple(pairs)), signal
