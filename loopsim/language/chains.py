"""Chains `net -- part: value -- net -> part: value -> net`: what the value of each part says it is."""

from __future__ import annotations

from loopsim.circuit import FieldValue, Tolerance
from loopsim.devices.catalogue import DEVICES, field_specs, is_polarised, pins
from loopsim.language import tree as t
from loopsim.language.controlled import check_controlled
from loopsim.language.definitions import Kind, kind_of
from loopsim.language.draft import Frame
from loopsim.language.fields import current_curve, fields_of, number_field
from loopsim.language.formulas import Typed, in_words, is_constant
from loopsim.language.mistakes import nearest
from loopsim.language.names import a
from loopsim.language.values import refuse_tolerance, toleranced, unit_in_words
from loopsim.language.waveforms import WAVEFORMS, read_waveform
from loopsim.units import AMPERE, FARAD, HENRY, OHM, SIEMENS, VOLT, Dimension

# what the unit of a value says, and the field that holds it
BY_UNIT: dict[Dimension, tuple[str, str]] = {
    OHM: ("resistor", "resistance"),
    SIEMENS: ("conductance", "conductance"),
    FARAD: ("capacitor", "capacitance"),
    HENRY: ("inductor", "inductance"),
    VOLT: ("voltage_source", "voltage"),
    AMPERE: ("current_source", "current"),
}
# devices that mean nothing by their name alone
NEEDS_A_VALUE = {device for device, _ in BY_UNIT.values()} | {
    "controlled_voltage_source",
    "controlled_current_source",
    "curve_conductance",
}


def add_chain(path: t.Path, frame: Frame) -> None:
    """Every part of a chain."""
    start = path.start
    for step in path.steps:
        name = frame.new_part(step.name)
        device, fields = _device(step, name, frame)
        ends = {"from": frame.net(start), "to": frame.net(step.net)}
        _check_links(step, device, frame)
        frame.add(name, device, ends, fields, step.name.place)
        start = step.net


def _check_links(step: t.Step, device: str, frame: Frame) -> None:
    """Two pins, and joined by `->` exactly where it has a direction."""
    name = step.name
    if pins(device) != ("from", "to"):
        raise frame.scope.mistake(
            "too-many-pins",
            f"`{name.text}` has the pins {', '.join(pins(device))}; it does not fit in a chain",
            name.place,
            f"write {name.text}: KIND(pin = net, ...)",
        )
    wanted, why = (
        ("->", "points the way its current (or its rise) goes") if is_polarised(device) else ("--", "has no direction")
    )
    for link, where in ((step.before, step.before_place), (step.after, step.after_place)):
        if link != wanted:
            raise frame.scope.mistake(
                "polarity",
                f"{a(device.replace('_', ' '))} {why}: write `{wanted}`",
                where,
                f"`{wanted}` on both sides of `{name.text}`",
            )


def _device(step: t.Step, name: str, frame: Frame) -> tuple[str, dict[str, FieldValue]]:
    """Device and fields that the value of a chain part stands for."""
    formula = step.value.value
    found = None
    if isinstance(formula, t.Word):
        found = _named(formula, name, frame)
    elif isinstance(formula, t.Call):
        found = _called(formula, name, frame)
    if found is None:
        return _by_unit(step.value, name, frame)
    refuse_tolerance(step.value, frame.scope, "give one to its fields, or to a let that they name")
    return found


def _named(word: t.Word, part: str, frame: Frame) -> tuple[str, dict[str, FieldValue]] | None:
    """A kind, a curve or a device by its name; None for a let or a net."""
    scope, definitions, text = frame.scope, frame.definitions, word.text
    if text in scope.values:
        return None
    if text in definitions.kinds:
        return definitions.kinds[text].device, fields_of(definitions.kinds[text], part, frame)
    if text in definitions.curves:
        return "curve_conductance", {"curve": current_curve(word, scope, frame)}
    if text in DEVICES:
        return _of_kind(Kind(text, {}), part, word, frame)
    if text == "gnd" or scope.net(text) is not None:
        return None
    known = [*definitions.kinds, *definitions.curves, *scope.values, *scope.nets]
    raise scope.mistake(
        "unknown-name", f"there is no kind, curve, let or net `{text}`", word.place, nearest(text, known)
    )


def _called(call: t.Call, part: str, frame: Frame) -> tuple[str, dict[str, FieldValue]] | None:
    """A kind or device with fields, or a waveform; None for a function of a formula."""
    scope, definitions, text = frame.scope, frame.definitions, call.name.text
    if text in definitions.kinds or text in DEVICES:
        return _of_kind(kind_of(definitions, call, scope), part, call.name, frame)
    if text in WAVEFORMS:
        wave, dimension = read_waveform(call, scope, frame.draft)
        if dimension not in (VOLT, AMPERE):
            raise scope.mistake(
                "dimension", f"a source in time is in V or A, not {in_words(dimension)}", call.place
            )
        device, field_name = BY_UNIT[dimension]
        return device, {field_name: wave}
    if call.fields and text not in definitions.curves:
        known = [*definitions.kinds, *DEVICES, *WAVEFORMS]
        raise scope.mistake(
            "unknown-device",
            f"there is no device, kind or waveform `{text}`",
            call.name.place,
            nearest(text, known),
        )
    return None


def _of_kind(kind: Kind, part: str, word: t.Word, frame: Frame) -> tuple[str, dict[str, FieldValue]]:
    if kind.device in NEEDS_A_VALUE and not kind.fields:
        raise frame.scope.mistake("value-missing", f"{a(kind.device)} needs its value", word.place)
    return kind.device, fields_of(kind, part, frame)


def _by_unit(given: t.Toleranced, part: str, frame: Frame) -> tuple[str, dict[str, FieldValue]]:
    """What the unit of a value, or of a formula of nets, says."""
    value, tolerance = toleranced(given, frame.scope, frame.draft)
    if value.scale or value.dimension not in BY_UNIT:
        raise frame.scope.mistake(
            "value-unit",
            f"{unit_in_words(value)} is the value of no part",
            given.value.place,
            "ohm, S, F, H, V or A",
        )
    device, field_name = BY_UNIT[value.dimension]
    if not is_constant(value.tree):
        return _controlled(value, tolerance, given.value, frame)
    spec = field_specs(device)[field_name]
    number = number_field(spec, part, value, tolerance, given.value, frame.scope, frame)
    return device, {field_name: number}


def _controlled(
    value: Typed, tolerance: Tolerance | None, formula: t.Formula, frame: Frame
) -> tuple[str, dict[str, FieldValue]]:
    device, _ = BY_UNIT[value.dimension]
    if tolerance is not None:
        raise frame.scope.mistake(
            "tolerance", "a controlled source has no tolerance", formula.place, "give one to a let in its formula"
        )
    if value.dimension not in (VOLT, AMPERE):
        raise frame.scope.mistake(
            "not-constant", f"the value of {a(device)} cannot depend on a net or a current", formula.place
        )
    check_controlled(formula, frame.scope, frame.draft)
    return f"controlled_{device}", {"formula": value.tree}
