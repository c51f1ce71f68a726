"""The fields of a part: each checked for its form, dimension and range."""

from __future__ import annotations

from loopsim.circuit import Curve, FieldValue, Tolerance, Waveform
from loopsim.devices.catalogue import field_specs
from loopsim.devices.fields import FieldSpec
from loopsim.expressions import Expression
from loopsim.language import tree as t
from loopsim.language.controlled import check_controlled
from loopsim.language.definitions import Kind
from loopsim.language.draft import Frame
from loopsim.language.formulas import Scope, Typed, in_words, require, typed
from loopsim.language.mistakes import nearest
from loopsim.language.values import refuse_nets, refuse_tolerance, toleranced, unit_in_words
from loopsim.language.waveforms import WAVEFORMS, read_waveform
from loopsim.units import AMPERE, KELVIN, dimension_of


def fields_of(kind: Kind, part: str, frame: Frame) -> dict[str, FieldValue]:
    """Checked values of everything a kind gives. part: full name, for the parameters that tolerances make."""
    specs = field_specs(kind.device)
    return {
        name: _field(specs[name], part, given, scope, frame) for name, (given, scope) in kind.fields.items()
    }


def _field(spec: FieldSpec, part: str, given: t.Toleranced, scope: Scope, frame: Frame) -> FieldValue:
    formula = given.value
    if spec.form in ("word", "net", "curve", "formula"):
        refuse_tolerance(given, scope, "only a number has one")
    if spec.words:
        return _word(spec, formula, scope)
    if spec.form == "net":
        if not isinstance(formula, t.Word):
            raise scope.mistake("unknown-net", f"`{spec.name}` is the name of a net", formula.place)
        return frame.net(formula)
    if spec.form == "curve":
        if not isinstance(formula, t.Word) or formula.text not in frame.definitions.curves:
            raise scope.mistake("unknown-curve", f"`{spec.name}` is the name of a curve", formula.place)
        return current_curve(formula, scope, frame)
    if spec.form == "formula":
        value = typed(formula, scope)
        require(value, dimension_of(spec.unit), formula, scope, f"`{spec.name}` is in")
        check_controlled(formula, scope, frame.draft)
        return value.tree
    if spec.form == "source" and isinstance(formula, t.Call) and formula.name.text in WAVEFORMS:
        return _waveform(spec, given, formula, scope, frame)
    return _number(spec, part, given, scope, frame)


def _waveform(
    spec: FieldSpec, given: t.Toleranced, call: t.Call, scope: Scope, frame: Frame
) -> Waveform:
    refuse_tolerance(given, scope, "give one to a let that its fields name")
    wave, dimension = read_waveform(call, scope, frame.draft)
    if dimension != dimension_of(spec.unit):
        raise scope.mistake("dimension", f"`{spec.name}` is in {spec.unit}, not {in_words(dimension)}", call.place)
    return wave


def _word(spec: FieldSpec, formula: t.Formula, scope: Scope) -> str:
    if isinstance(formula, t.Word) and formula.text in spec.words:
        return formula.text
    text = formula.text if isinstance(formula, t.Word) else ""
    instead = f"`{text}`" if text else "this"
    raise scope.mistake(
        "unknown-word",
        f"`{spec.name}` is {' or '.join(spec.words)}, not {instead}",
        formula.place,
        nearest(text, spec.words),
    )


def _number(spec: FieldSpec, part: str, given: t.Toleranced, scope: Scope, frame: Frame) -> Expression:
    formula = given.value
    value, tolerance = toleranced(given, scope, frame.draft)
    wanted = dimension_of(spec.unit)
    if wanted == KELVIN and value.scale == "degC" and spec.unit != "degC":
        raise scope.mistake("degrees", f"`{spec.name}` is a difference in K", formula.place)
    if value.dimension != wanted:
        raise scope.mistake(
            "dimension",
            f"`{spec.name}` is in {spec.unit or 'a pure number'}, not {unit_in_words(value)}",
            formula.place,
        )
    refuse_nets(value, formula, scope, f"`{spec.name}`")
    return number_field(spec, part, value, tolerance, formula, scope, frame)


def number_field(
    spec: FieldSpec, part: str, value: Typed, tolerance: Tolerance | None, formula: t.Formula, scope: Scope, frame: Frame
) -> Expression:
    """A number within the range of its field; one with a tolerance becomes the parameter `part.field`."""
    number = frame.draft.number(value.tree, formula, scope)
    if spec.low is not None and spec.high is not None and not spec.low <= number <= spec.high:
        unit = f" {spec.unit}" if spec.unit else ""
        raise scope.mistake(
            "field-range",
            f"`{spec.name}` of {number:g}{unit} is outside {spec.low:g} .. {spec.high:g}{unit}",
            formula.place,
        )
    if tolerance is None:
        return value.tree
    return frame.draft.name_value(f"{part}.{spec.name}", value, tolerance, formula, scope).tree


def current_curve(word: t.Word, scope: Scope, frame: Frame) -> Curve:
    """The curve of that name, which has to give amperes; the circuit gets it."""
    definitions = frame.definitions
    if definitions.curve_forms[word.text][1] != AMPERE:
        raise scope.mistake(
            "dimension",
            f"`{word.text}` gives volts; a part between two nets needs a curve of amperes",
            word.place,
        )
    curve = definitions.curves[word.text]
    frame.draft.curves[word.text] = curve
    return curve
