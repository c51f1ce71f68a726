"""Statements to a Circuit: names looked up, kinds resolved, blocks expanded, every field and dimension checked."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any

from loopsim.circuit import (
    Circuit,
    Coupling,
    Curve,
    FieldValue,
    Parameter,
    Part,
    Relation,
    Requirement,
    Tolerance,
    Waveform,
)
from loopsim.devices.catalogue import DEVICES, field_specs, is_polarised, waveform_specs
from loopsim.devices.catalogue import pins as device_pins
from loopsim.devices.fields import FieldSpec
from loopsim.errors import CircuitError, Span
from loopsim.expressions import (
    CurrentRef,
    Expression,
    LetRef,
    NetRef,
    Number,
    Operation,
    evaluate,
    references,
)
from loopsim.language import tree as t
from loopsim.language.formulas import Scope, Typed, in_words, is_constant, lets_in, require, typed
from loopsim.language.measures import MEASURES
from loopsim.language.mistakes import nearest
from loopsim.language.parser import Source
from loopsim.units import (
    AMPERE,
    FARAD,
    HENRY,
    KELVIN,
    NUMBER,
    OHM,
    SIEMENS,
    VOLT,
    Dimension,
    dimension_of,
    name_of,
)

MAX_PARTS = 50_000  # parts after expansion; a file that names more is a mistake or an attack
MAX_DEPTH = 32  # blocks within blocks
BY_UNIT: dict[Dimension, tuple[str, str]] = {
    OHM: ("resistor", "resistance"), SIEMENS: ("conductance", "conductance"), FARAD: ("capacitor", "capacitance"),
    HENRY: ("inductor", "inductance"), VOLT: ("voltage_source", "voltage"), AMPERE: ("current_source", "current"),
}  # fmt: skip
WAVEFORMS = ("sine", "square", "ramp", "points")
CHAIN_WORDS = {"resistor", "conductance", "capacitor", "inductor", "voltage_source", "current_source",
               "controlled_voltage_source", "controlled_current_source", "curve_conductance"}  # fmt: skip


@dataclass(frozen=True)
class Kind:
    """A named description: the built-in device and what was given, each with the scope it was written in."""

    device: str
    fields: Mapping[str, tuple[t.Toleranced, Scope]]


@dataclass(frozen=True)
class BlockKind:
    """A reusable sub-circuit and the definitions that it sees."""

    statement: t.Block
    definitions: Definitions


@dataclass
class Definitions:
    """Kinds, curves and blocks visible in one file."""

    source: Source
    kinds: dict[str, Kind] = field(default_factory=dict)
    curves: dict[str, Curve] = field(default_factory=dict)
    curve_forms: dict[str, tuple[Dimension, Dimension]] = field(default_factory=dict)
    blocks: dict[str, BlockKind] = field(default_factory=dict)
    places: dict[str, Span] = field(default_factory=dict)
    # what kinds see: the lets of a circuit file come in when it is built, a parts file has none
    scope: Scope = field(init=False)

    def __post_init__(self) -> None:
        self.scope = Scope(self.source, curves=self.curve_forms)

    def claim(self, word: t.Word) -> None:
        """Error for a name that stands for something already."""
        where = self.source.span(word.place)
        if word.text in DEVICES:
            raise CircuitError(
                "duplicate-name", f"`{word.text}` is a built-in device", where, "choose another name"
            )
        if word.text in self.places:
            raise CircuitError(
                "duplicate-name",
                f"`{word.text}` is already defined at {self.places[word.text]}",
                where,
                "choose another name",
            )
        self.places[word.text] = where


def define(
    source: Source, statements: tuple[t.Statement, ...], used: Callable[[t.Use], Definitions]
) -> Definitions:
    """The kinds, curves and blocks of a file and of the parts files it uses."""
    found = Definitions(source)
    for statement in statements:
        match statement:
            case t.Use():
                _take(found, used(statement), statement)
            case t.CurveOf(name, call):
                found.claim(name)
                _curve(found, name, call)
            case t.KindOf(name, call):
                found.claim(name)
                found.kinds[name.text] = _kind(found, call, found.scope)
            case t.Block(name, pins, _, _):
                found.claim(name)
                _block_pins(source, pins)
                found.blocks[name.text] = BlockKind(statement, found)
            case _:
                continue
    return found


def _take(found: Definitions, other: Definitions, statement: t.Use) -> None:
    for name, span in other.places.items():
        if name in found.places and found.places[name] != span:
            raise CircuitError(
                "duplicate-name",
                f"`{name}` of this file is already defined at {found.places[name]}",
                found.source.span(statement.place),
            )
        found.places[name] = span
    found.kinds.update(other.kinds)
    found.curves.update(other.curves)
    found.curve_forms.update(other.curve_forms)
    found.blocks.update(other.blocks)


def _block_pins(source: Source, pins: tuple[t.Word, ...]) -> None:
    seen: set[str] = set()
    for pin in pins:
        if pin.text == "gnd":
            raise CircuitError(
                "reserved-name", "`gnd` is the reference everywhere; it is no pin", source.span(pin.place)
            )
        if pin.text in seen:
            raise CircuitError("duplicate-name", f"the pin `{pin.text}` stands twice", source.span(pin.place))
        seen.add(pin.text)


def _curve(found: Definitions, name: t.Word, call: t.Call) -> None:
    scope = Scope(found.source)
    if call.name.text not in ("polynomial", "points"):
        raise scope.mistake(
            "curve-form",
            f"a curve is `polynomial(...)` or `points(...)`, not `{call.name.text}`",
            call.name.place,
        )
    if call.fields or not call.positional:
        raise scope.mistake(
            "curve-form",
            f"`{call.name.text}` takes values",
            call.place,
            "for example polynomial(2 mA/V, 1 mA/V^3)",
        )
    values: list[Typed] = []
    if call.name.text == "polynomial":
        values, needs, gives = _polynomial(call, scope)
    else:
        values, needs, gives = _points(call, scope)
    found.curves[name.text] = Curve(
        name.text,
        call.name.text,
        tuple(v.tree for v in values),
        name_of(needs),
        name_of(gives),
        found.source.span(name.place),
    )
    found.curve_forms[name.text] = (needs, gives)


def _polynomial(call: t.Call, scope: Scope) -> tuple[list[Typed], Dimension, Dimension]:
    values = []
    for item in call.positional:
        if item.pair is not None:
            raise scope.mistake("curve-form", "`polynomial` takes coefficients, not pairs", item.value.place)
        values.append(typed(item.value, scope))
    first = values[0].dimension
    gives = (first[0] + 1, first[1], first[2], first[3])
    if gives not in (AMPERE, VOLT):
        raise scope.mistake(
            "dimension",
            f"the first coefficient is in A/V or V/V, not {in_words(first)}",
            call.positional[0].value.place,
        )
    for k, (value, item) in enumerate(zip(values, call.positional, strict=True), start=1):
        wanted = (gives[0] - k, gives[1], gives[2], gives[3])
        require(value, wanted, item.value, scope, f"coefficient {k} is in")
    return values, VOLT, gives


def _points(call: t.Call, scope: Scope) -> tuple[list[Typed], Dimension, Dimension]:
    values: list[Typed] = []
    needs = gives = NUMBER
    last = -math.inf
    for k, item in enumerate(call.positional):
        if item.pair is None:
            raise scope.mistake(
                "curve-form",
                "`points` takes pairs x: y",
                item.value.place,
                "for example points(0 V: 0 A, 1 V: 2 mA)",
            )
        x, y = typed(item.value, scope), typed(item.pair, scope)
        if k == 0:
            needs, gives = x.dimension, y.dimension
            if needs != VOLT or gives not in (AMPERE, VOLT):
                raise scope.mistake("dimension", "the pairs of a curve are V: A or V: V", item.value.place)
        require(x, needs, item.value, scope, "x is in")
        require(y, gives, item.pair, scope, "y is in")
        here = float(evaluate(x.tree, {}))
        if here <= last:
            raise scope.mistake("curve-points", "x has to rise from pair to pair", item.value.place)
        last = here
        values += [x, y]
    if len(call.positional) < 2:
        raise scope.mistake("curve-points", "a curve has at least two points", call.place)
    return values, needs, gives


def _kind(found: Definitions, call: t.Call, scope: Scope) -> Kind:
    base = call.name.text
    if base in found.kinds:
        kind = found.kinds[base]
        device, fields = kind.device, dict(kind.fields)
    elif base in DEVICES:
        device, fields = base, {}
    else:
        known = [*DEVICES, *found.kinds]
        raise scope.mistake(
            "unknown-device", f"there is no device or kind `{base}`", call.name.place, nearest(base, known)
        )
    for item in call.positional:
        raise scope.mistake("call", "fields are written name = value", item.value.place)
    _known_fields(device, call, scope)
    fields.update({f.name.text: (f.value, scope) for f in call.fields})
    return Kind(device, fields)


def _known_fields(device: str, call: t.Call, scope: Scope, besides: tuple[str, ...] = ()) -> None:
    specs = field_specs(device)
    seen: set[str] = set()
    article = "an" if device[0] in "aeiou" else "a"
    for given in call.fields:
        name = given.name.text
        if name not in specs and name not in besides:
            raise scope.mistake(
                "unknown-field",
                f"{article} {device} has no field `{name}`",
                given.name.place,
                nearest(name, [*specs, *besides]),
            )
        if name in seen:
            raise scope.mistake("duplicate-field", f"`{name}` is given twice", given.name.place)
        seen.add(name)


@dataclass
class _Frame:
    """One level of expansion: the file's text and definitions, the prefix of names, what names mean."""

    definitions: Definitions
    prefix: str
    scope: Scope
    pins: Mapping[str, str]
    depth: int
    trail: tuple[str, ...] = ()


class Builder:
    """Collects one circuit. `build` is the way in."""

    def __init__(self, source: Source, definitions: Definitions) -> None:
        self.source = source
        self.definitions = definitions
        self.parameters: dict[str, Parameter] = {}
        self.nets: dict[str, None] = {}
        self.parts: dict[str, Part] = {}
        self.couplings: list[Coupling] = []
        self.requirements: list[Requirement] = []
        self.curves: dict[str, Curve] = {}
        self.numbers: dict[str, float] = {}

    # --- names -----------------------------------------------------------------------------------------------------

    def net(self, word: t.Word, frame: _Frame) -> str:
        """Full name of a net as written in a frame."""
        name = word.text
        if name == "gnd":
            return "gnd"
        if name in frame.scope.values:
            raise frame.scope.mistake(
                "name-clash", f"`{name}` is a let; nets and lets share one name space", word.place
            )
        full = frame.pins.get(name, frame.prefix + name)
        if full != "gnd":
            self.nets.setdefault(full)
        return full

    # --- definitions of values -------------------------------------------------------------------------------------

    def lets(self, statements: tuple[t.Statement, ...], frame: _Frame) -> None:
        """Every let of a frame, in whatever order they refer to each other."""
        waiting: dict[str, t.Let] = {}
        for statement in statements:
            if isinstance(statement, t.Let):
                name = statement.name.text
                if name in waiting or (frame.prefix and name in frame.scope.values):
                    raise frame.scope.mistake(
                        "duplicate-name", f"the let `{name}` is given twice", statement.name.place
                    )
                if name == "gnd" or "." in name:
                    raise frame.scope.mistake(
                        "reserved-name", f"`{name}` cannot be a let", statement.name.place
                    )
                if name == "ambient" and frame.prefix:
                    raise frame.scope.mistake(
                        "reserved-name", "`ambient` belongs to the whole circuit", statement.name.place
                    )
                waiting[name] = statement
        order = list(waiting)
        while order:
            later: list[str] = []
            for name in order:
                if all(
                    word not in waiting or word not in order or word == name
                    for word in _words(waiting[name].value.value)
                ):
                    self._let(waiting[name], frame)
                else:
                    later.append(name)
            if len(later) == len(order):
                first = waiting[later[0]]
                raise frame.scope.mistake(
                    "let-cycle", f"the value of `{first.name.text}` leads back to itself", first.name.place
                )
            order = later

    def _let(self, statement: t.Let, frame: _Frame) -> None:
        scope, name = frame.scope, statement.name.text
        if name in _words(statement.value.value):
            raise scope.mistake(
                "let-cycle", f"the value of `{name}` leads back to itself", statement.name.place
            )
        value, tolerance = self._toleranced(statement.value, scope)
        self._constant(value, statement.value.value, scope, "a let")
        if name == "ambient" and value.scale != "degC":
            raise scope.mistake(
                "dimension",
                "`ambient` is a temperature in degC",
                statement.value.value.place,
                "let ambient = 25 degC",
            )
        ends: list[Expression | None] = []
        for end in (statement.low, statement.high):
            if end is None:
                ends.append(None)
                continue
            found = typed(end, scope)
            self._constant(found, end, scope, "a range")
            if found.dimension != value.dimension or found.scale != value.scale:
                raise scope.mistake(
                    "dimension", f"the range of `{name}` is in {_unit(value)}, not {_unit(found)}", end.place
                )
            ends.append(found.tree)
        full = frame.prefix + name
        unit = value.scale or name_of(value.dimension)
        self.parameters[full] = Parameter(
            full, value.tree, unit, ends[0], ends[1], tolerance, scope.source.span(statement.name.place)
        )
        self.numbers[full] = self._number(value.tree, statement.value.value, scope)
        if ends[0] is not None and ends[1] is not None and statement.low is not None:
            low, high = (
                self._number(ends[0], statement.low, scope),
                self._number(ends[1], statement.low, scope),
            )
            if not low < high:
                raise scope.mistake("let-range", f"the range of `{name}` has to rise", statement.low.place)
        scope.values[name] = Typed(LetRef(full), value.dimension, value.scale)

    def _number(self, tree: Expression, formula: t.Formula, scope: Scope) -> float:
        try:
            value = float(
                evaluate(
                    tree,
                    self.numbers,
                    operations={"limit": lambda x, lo, hi: min(max(x, lo), hi), "curve": lambda *a: 0.0},
                )
            )
        except (ZeroDivisionError, OverflowError, ValueError, FloatingPointError):
            value = math.nan
        if not math.isfinite(value) or isinstance(value, complex):
            raise scope.mistake("formula-value", "this formula has no finite value", formula.place)
        return value

    def _constant(self, found: Typed, formula: t.Formula, scope: Scope, what: str) -> None:
        if not is_constant(found.tree):
            raise scope.mistake("not-constant", f"{what} cannot depend on a net or a current", formula.place)

    def _toleranced(self, given: t.Toleranced, scope: Scope) -> tuple[Typed, Tolerance | None]:
        """Value and tolerance; `+ 10 % - 20 %` behind a value with a unit is a tolerance too."""
        formula = given.value
        if given.tolerance is None and isinstance(formula, t.Chain) and formula.operators[-2:] == ("+", "-"):
            up, down = formula.operands[-2:]
            if isinstance(up, t.Num) and isinstance(down, t.Num) and up.percent and down.percent:
                rest = (
                    formula.operands[0]
                    if len(formula.operands) == 3
                    else t.Chain(formula.operators[:-2], formula.operands[:-2], formula.place)
                )
                value = typed(rest, scope)
                if value.dimension != NUMBER:
                    return value, Tolerance(-down.quantity.value, up.quantity.value, True)
        value = typed(formula, scope)
        if given.tolerance is None:
            return value, None
        spread = typed(given.tolerance, scope)
        self._constant(spread, given.tolerance, scope, "a tolerance")
        size = abs(self._number(spread.tree, given.tolerance, scope))
        if _is_share(given.tolerance):
            if size >= 1.0 and value.dimension != NUMBER:
                raise scope.mistake(
                    "tolerance",
                    "a tolerance of 100 % or more would let the value vanish",
                    given.tolerance.place,
                )
            return value, Tolerance(-size, size, True)
        if spread.dimension != value.dimension or spread.scale:
            if spread.scale and value.scale:
                return value, Tolerance(-size, size, False)
            raise scope.mistake(
                "dimension",
                f"the tolerance of {_unit(value)} is in %, ppm or {_unit(value)}, not {_unit(spread)}",
                given.tolerance.place,
            )
        return value, Tolerance(-size, size, False)

    # --- parts -----------------------------------------------------------------------------------------------------

    def expand(self, statements: tuple[t.Statement, ...], frame: _Frame) -> None:
        """Every part of a frame."""
        for statement in statements:
            match statement:
                case t.Path():
                    self._path(statement, frame)
                case t.PartOf():
                    self._part(statement, frame)
                case t.Couple():
                    self._couple(statement, frame)
                case _:
                    continue

    def _add(
        self,
        name: str,
        device: str,
        pins: Mapping[str, str],
        fields: Mapping[str, FieldValue],
        where: t.Place,
        scope: Scope,
    ) -> None:
        if len(self.parts) >= MAX_PARTS:
            raise scope.mistake(
                "too-many-parts", f"more than {MAX_PARTS:,} parts after the blocks are expanded", where
            )
        self.parts[name] = Part(name, device, dict(pins), dict(fields), scope.source.span(where))

    def _new_name(self, word: t.Word, frame: _Frame) -> str:
        if "." in word.text:
            raise frame.scope.mistake("reserved-name", "a part's own name has no point in it", word.place)
        full = frame.prefix + word.text
        if full in self.parts:
            raise frame.scope.mistake(
                "duplicate-part",
                f"the part `{full}` is already there",
                word.place,
                f"first at {self.parts[full].span}",
            )
        return full

    def _path(self, path: t.Path, frame: _Frame) -> None:
        start = path.start
        for step in path.steps:
            name = self._new_name(step.name, frame)
            device, fields = self._chain_part(step, name, frame)
            pins = {"from": self.net(start, frame), "to": self.net(step.net, frame)}
            if device_pins(device) != ("from", "to"):
                raise frame.scope.mistake(
                    "too-many-pins", f"`{step.name.text}` has the pins {', '.join(device_pins(device))}; it does not fit in a chain",
                    step.name.place, f"write {step.name.text}: KIND(pin = net, ...)",
                )  # fmt: skip
            self._polarity(step, device, frame.scope)
            self._add(name, device, pins, fields, step.name.place, frame.scope)
            start = step.net

    def _polarity(self, step: t.Step, device: str, scope: Scope) -> None:
        wanted = "->" if is_polarised(device) else "--"
        for link, where in ((step.before, step.before_place), (step.after, step.after_place)):
            if link != wanted:
                what = device.replace("_", " ")
                why = (
                    "points the way its current (or its rise) goes" if wanted == "->" else "has no direction"
                )
                raise scope.mistake(
                    "polarity",
                    f"{'an' if what[0] in 'aeiou' else 'a'} {what} {why}: write `{wanted}`",
                    where,
                    f"`{wanted}` on both sides of `{step.name.text}`",
                )

    def _chain_part(self, step: t.Step, name: str, frame: _Frame) -> tuple[str, dict[str, FieldValue]]:
        """Device and fields that the value of a chain part stands for."""
        scope, formula = frame.scope, step.value.value
        definitions = frame.definitions
        if isinstance(formula, t.Word) and formula.text not in scope.values:
            if formula.text in definitions.kinds:
                return self._of_kind(definitions.kinds[formula.text], name, frame)
            if formula.text in definitions.curves:
                return "curve_conductance", {
                    "curve": self._use_curve(formula.text, definitions, formula, scope)
                }
            if formula.text in DEVICES:
                return self._of_kind(Kind(formula.text, {}), name, frame, formula)
            if formula.text not in scope.nets and formula.text != "gnd":
                known = [*definitions.kinds, *definitions.curves, *scope.values, *scope.nets]
                raise scope.mistake(
                    "unknown-name",
                    f"there is no kind, curve, let or net `{formula.text}`",
                    formula.place,
                    nearest(formula.text, known),
                )
        if isinstance(formula, t.Call):
            called = formula.name.text
            if called in definitions.kinds or (called in DEVICES and called not in WAVEFORMS):
                return self._of_kind(_kind(definitions, formula, scope), name, frame, formula.name)
            if called in WAVEFORMS:
                wave, dimension = self._waveform(formula, scope)
                if dimension not in (VOLT, AMPERE):
                    raise scope.mistake(
                        "dimension",
                        f"a source in time is in V or A, not {in_words(dimension)}",
                        formula.place,
                    )
                device, field_name = BY_UNIT[dimension]
                return device, {field_name: wave}
            if formula.fields and called not in definitions.curves:
                known = [*definitions.kinds, *DEVICES, *WAVEFORMS]
                raise scope.mistake(
                    "unknown-device",
                    f"there is no device, kind or waveform `{called}`",
                    formula.name.place,
                    nearest(called, known),
                )
        value, tolerance = self._toleranced(step.value, scope)
        if value.scale or value.dimension not in BY_UNIT:
            raise scope.mistake(
                "value-unit", f"{_unit(value)} is the value of no part", formula.place, "ohm, S, F, H, V or A"
            )
        device, field_name = BY_UNIT[value.dimension]
        if not is_constant(value.tree):
            if tolerance is not None:
                raise scope.mistake(
                    "tolerance",
                    "a controlled source has no tolerance; give one to a let in its formula",
                    formula.place,
                )
            if value.dimension not in (VOLT, AMPERE):
                raise scope.mistake(
                    "not-constant",
                    f"the value of a {device} cannot depend on a net or a current",
                    formula.place,
                )
            self._use_formula_curves(value.tree, definitions)
            self._check_sum(value.tree, definitions, formula, scope)
            return f"controlled_{device}", {"formula": value.tree}
        return device, {
            field_name: self._field_number(name, field_name, device, value, tolerance, formula, scope)
        }

    def _check_sum(
        self, tree: Expression, definitions: Definitions, formula: t.Formula, scope: Scope
    ) -> None:
        from loopsim.devices.curves import CurveValues, points_curve, polynomial_curve
        from loopsim.devices.formula import sum_of

        def numbers(curve: Curve) -> CurveValues:
            values = [float(evaluate(v, self.numbers)) for v in curve.values]
            return polynomial_curve(values) if curve.form == "polynomial" else points_curve(values)

        try:
            sum_of(
                tree,
                self.numbers,
                {name: numbers(curve) for name, curve in definitions.curves.items()},
            )
        except CircuitError as error:
            raise scope.mistake(error.code, error.message, formula.place, error.hint) from None

    def _use_formula_curves(self, tree: Expression, definitions: Definitions) -> None:
        stack = [tree]
        while stack:
            node = stack.pop()
            if isinstance(node, Operation):
                if node.name == "curve":
                    self.curves[node.curve] = definitions.curves[node.curve]
                stack.extend(node.arguments)

    def _use_curve(self, name: str, definitions: Definitions, word: t.Word, scope: Scope) -> Curve:
        curve = definitions.curves[name]
        if definitions.curve_forms[name][1] != AMPERE:
            raise scope.mistake(
                "dimension",
                f"`{name}` gives volts; a part between two nets needs a curve of amperes",
                word.place,
            )
        self.curves[name] = curve
        return curve

    def _of_kind(
        self, kind: Kind, name: str, frame: _Frame, word: t.Word | None = None
    ) -> tuple[str, dict[str, FieldValue]]:
        if kind.device in CHAIN_WORDS and word is not None and not kind.fields:
            raise frame.scope.mistake("value-missing", f"a {kind.device} needs its value", word.place)
        return kind.device, self._fields(kind, name, frame)

    def _fields(self, kind: Kind, name: str, frame: _Frame) -> dict[str, FieldValue]:
        """Checked values of everything a kind gives."""
        specs = field_specs(kind.device)
        return {
            key: self._field(specs[key], name, kind.device, value, scope, frame)
            for key, (value, scope) in kind.fields.items()
        }

    def _field(
        self, spec: FieldSpec, part: str, device: str, given: t.Toleranced, scope: Scope, frame: _Frame
    ) -> FieldValue:
        formula = given.value
        if spec.words:
            if not isinstance(formula, t.Word) or formula.text not in spec.words:
                text = formula.text if isinstance(formula, t.Word) else "this"
                raise scope.mistake(
                    "unknown-word",
                    f"`{spec.name}` is {' or '.join(spec.words)}, not `{text}`",
                    formula.place,
                    nearest(text, spec.words),
                )
            return formula.text
        if spec.form == "net":
            if not isinstance(formula, t.Word):
                raise scope.mistake("unknown-net", f"`{spec.name}` is the name of a net", formula.place)
            return self.net(formula, frame)
        if spec.form == "curve":
            if not isinstance(formula, t.Word) or formula.text not in frame.definitions.curves:
                raise scope.mistake("unknown-curve", f"`{spec.name}` is the name of a curve", formula.place)
            return self._use_curve(formula.text, frame.definitions, formula, scope)
        if spec.form == "formula":
            return typed(formula, scope).tree
        if spec.form == "source" and isinstance(formula, t.Call) and formula.name.text in WAVEFORMS:
            return self._waveform(formula, scope)[0]
        value, tolerance = self._toleranced(given, scope)
        wanted = dimension_of(spec.unit)
        if wanted == KELVIN and value.scale == "degC" and spec.unit != "degC":
            raise scope.mistake("degrees", f"`{spec.name}` is a difference in K", formula.place)
        if value.dimension != wanted:
            raise scope.mistake(
                "dimension",
                f"`{spec.name}` is in {spec.unit or 'a pure number'}, not {_unit(value)}",
                formula.place,
            )
        self._constant(value, formula, scope, f"`{spec.name}`")
        return self._field_number(part, spec.name, device, value, tolerance, formula, scope)

    def _field_number(
        self,
        part: str,
        field_name: str,
        device: str,
        value: Typed,
        tolerance: Tolerance | None,
        formula: t.Formula,
        scope: Scope,
    ) -> Expression:
        number = self._number(value.tree, formula, scope)
        spec = field_specs(device).get(field_name)
        if (
            spec is not None
            and spec.low is not None
            and spec.high is not None
            and not spec.low <= number <= spec.high
        ):
            unit = f" {spec.unit}" if spec.unit else ""
            raise scope.mistake(
                "field-range",
                f"`{field_name}` of {number:g}{unit} is outside {spec.low:g} .. {spec.high:g}{unit}",
                formula.place,
            )
        if tolerance is None:
            return value.tree
        full = f"{part}.{field_name}"
        unit = value.scale or name_of(value.dimension)
        self.parameters[full] = Parameter(
            full, value.tree, unit, None, None, tolerance, scope.source.span(formula.place)
        )
        self.numbers[full] = number
        return LetRef(full)

    def _waveform(self, call: t.Call, scope: Scope) -> tuple[Waveform, Dimension]:
        form = call.name.text
        if form == "points":
            return self._wave_points(call, scope)
        specs = waveform_specs(form)
        fields: dict[str, Expression] = {}
        signal: Dimension | None = None
        for item in call.positional:
            raise scope.mistake("call", "the fields of a waveform are written name = value", item.value.place)
        for given in call.fields:
            name = given.name.text
            if name not in specs:
                raise scope.mistake(
                    "unknown-field", f"`{form}` has no field `{name}`", given.name.place, nearest(name, specs)
                )
            if name in fields:
                raise scope.mistake("duplicate-field", f"`{name}` is given twice", given.name.place)
            if given.value.tolerance is not None:
                raise scope.mistake(
                    "tolerance",
                    "a waveform's field has no tolerance; give one to a let",
                    given.value.tolerance.place,
                )
            value = typed(given.value.value, scope)
            self._constant(value, given.value.value, scope, "a waveform")
            self._number(value.tree, given.value.value, scope)
            if specs[name].unit == "signal":
                signal = signal or value.dimension
                require(value, signal, given.value.value, scope, f"`{name}` is in")
            else:
                require(value, dimension_of(specs[name].unit), given.value.value, scope, f"`{name}` is in")
            fields[name] = value.tree
        for name, spec in specs.items():
            if spec.required and name not in fields:
                raise scope.mistake("field-missing", f"`{form}` needs `{name}`", call.place)
        if signal is None:
            raise scope.mistake("field-missing", f"nothing says whether `{form}` is in V or A", call.place)
        return Waveform(form, fields), signal

    def _wave_points(self, call: t.Call, scope: Scope) -> tuple[Waveform, Dimension]:
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
            require(x, (0, 0, 1, 0), item.value, scope, "a time is in")
            signal = signal or y.dimension
            require(y, signal, item.pair, scope, "the values are in")
            here = self._number(x.tree, item.value, scope)
            self._number(y.tree, item.pair, scope)
            if here <= last:
                raise scope.mistake(
                    "waveform-times", "times have to rise from pair to pair", item.value.place
                )
            last = here
            pairs.append((x.tree, y.tree))
        if signal is None or call.fields:
            raise scope.mistake("call", "`points` takes pairs time: value", call.place)
        return Waveform("points", {}, tuple(pairs)), signal

    def _part(self, statement: t.PartOf, frame: _Frame) -> None:
        scope, call = frame.scope, statement.call
        base = call.name.text
        if base in frame.definitions.blocks:
            self._instance(statement, frame.definitions.blocks[base], frame)
            return
        if base in frame.definitions.kinds:
            kind = frame.definitions.kinds[base]
        elif base in DEVICES:
            kind = Kind(base, {})
        else:
            known = [*DEVICES, *frame.definitions.kinds, *frame.definitions.blocks]
            raise scope.mistake(
                "unknown-device",
                f"there is no device, kind or block `{base}`",
                call.name.place,
                nearest(base, known),
            )
        for item in call.positional:
            raise scope.mistake("call", "pins and fields are written name = value", item.value.place)
        wanted = device_pins(kind.device)
        _known_fields(kind.device, call, scope, wanted)
        name = self._new_name(statement.name, frame)
        pins: dict[str, str] = {}
        fields = dict(kind.fields)
        for given in call.fields:
            if given.name.text in wanted:
                pins[given.name.text] = self._pin(given, frame)
            else:
                fields[given.name.text] = (given.value, scope)
        missing = [pin for pin in wanted if pin not in pins]
        if missing:
            raise scope.mistake(
                "pin-missing",
                f"`{statement.name.text}` leaves {', '.join(missing)} open",
                statement.name.place,
                "connect every pin",
            )
        ordered = {pin: pins[pin] for pin in wanted}
        self._add(
            name,
            kind.device,
            ordered,
            self._fields(Kind(kind.device, fields), name, frame),
            statement.name.place,
            scope,
        )

    def _pin(self, given: t.Field, frame: _Frame) -> str:
        if not isinstance(given.value.value, t.Word) or given.value.tolerance is not None:
            raise frame.scope.mistake(
                "unknown-net", f"the pin `{given.name.text}` takes the name of a net", given.value.value.place
            )
        return self.net(given.value.value, frame)

    def _instance(self, statement: t.PartOf, block: BlockKind, frame: _Frame) -> None:
        scope, call, inner = frame.scope, statement.call, block.statement
        if frame.depth >= MAX_DEPTH or inner.name.text in frame.trail:
            raise scope.mistake(
                "block-depth",
                f"the block `{inner.name.text}` holds itself"
                if inner.name.text in frame.trail
                else f"blocks nest deeper than {MAX_DEPTH}",
                statement.name.place,
            )
        prefix = self._new_name(statement.name, frame) + "."
        wanted = [pin.text for pin in inner.pins]
        defaults = {given.name.text: given for given in inner.defaults}
        pins: dict[str, str] = {}
        inner_scope = Scope(block.definitions.source, curves=block.definitions.curve_forms)
        given_values: dict[str, tuple[t.Toleranced, Scope]] = {
            name: (d.value, Scope(block.definitions.source)) for name, d in defaults.items()
        }
        seen: set[str] = set()
        for item in call.positional:
            raise scope.mistake("call", "pins and parameters are written name = value", item.value.place)
        for given in call.fields:
            name = given.name.text
            if name in seen:
                raise scope.mistake("duplicate-field", f"`{name}` is given twice", given.name.place)
            seen.add(name)
            if name in wanted:
                pins[name] = self._pin(given, frame)
            elif name in defaults:
                given_values[name] = (given.value, scope)
            else:
                raise scope.mistake(
                    "unknown-pin",
                    f"the block `{inner.name.text}` has no pin or parameter `{name}`",
                    given.name.place,
                    nearest(name, [*wanted, *defaults]),
                )
        missing = [pin for pin in wanted if pin not in pins]
        if missing:
            raise scope.mistake(
                "pin-missing",
                f"`{statement.name.text}` leaves {', '.join(missing)} open",
                statement.name.place,
                "connect every pin",
            )
        for name, (value, value_scope) in given_values.items():
            found, tolerance = self._toleranced(value, value_scope)
            self._constant(found, value.value, value_scope, "a parameter")
            expected = typed(defaults[name].value.value, Scope(block.definitions.source))
            if found.dimension != expected.dimension:
                raise value_scope.mistake(
                    "dimension", f"`{name}` is in {_unit(expected)}, not {_unit(found)}", value.value.place
                )
            if tolerance is not None:
                full = prefix + name
                self.parameters[full] = Parameter(
                    full,
                    found.tree,
                    name_of(found.dimension),
                    None,
                    None,
                    tolerance,
                    value_scope.source.span(value.value.place),
                )
                self.numbers[full] = self._number(found.tree, value.value, value_scope)
                found = replace(found, tree=LetRef(full))
            inner_scope.values[name] = found
        body = inner.body
        for piece in body:
            if isinstance(piece, t.Head | t.Use | t.Block | t.Expect | t.KindOf | t.CurveOf):
                word = {
                    t.Head: "circuit",
                    t.Use: "use",
                    t.Block: "block",
                    t.Expect: "expect",
                    t.KindOf: "kind",
                    t.CurveOf: "curve",
                }[type(piece)]
                where = piece.place if isinstance(piece, t.Use | t.Expect) else piece.name.place
                raise inner_scope.mistake(
                    "misplaced", f"`{word}` does not stand inside a block", where, "put it beside the block"
                )
        inner_frame = _Frame(
            block.definitions, prefix, inner_scope, pins, frame.depth + 1, (*frame.trail, inner.name.text)
        )
        inner_scope.nets = {**{name: prefix + name for name in _nets_of(body)}, **pins}
        inner_scope.parts = {name: prefix + name for name in _parts_of(body)}
        self.lets(body, inner_frame)
        self.expand(body, inner_frame)

    def _couple(self, statement: t.Couple, frame: _Frame) -> None:
        scope = frame.scope
        names = []
        for word in (statement.first, statement.second):
            if word.text not in scope.parts:
                raise scope.mistake(
                    "unknown-part",
                    f"there is no part `{word.text}`",
                    word.place,
                    nearest(word.text, scope.parts),
                )
            names.append(scope.parts[word.text])
        value = typed(statement.coefficient, scope)
        require(value, NUMBER, statement.coefficient, scope, "a coupling coefficient is")
        self._constant(value, statement.coefficient, scope, "a coupling coefficient")
        if abs(self._number(value.tree, statement.coefficient, scope)) > 1.0:
            raise scope.mistake(
                "field-range", "a coupling coefficient lies within -1 .. 1", statement.coefficient.place
            )
        if names[0] == names[1]:
            raise scope.mistake("coupling", "an inductor cannot couple to itself", statement.second.place)
        self.couplings.append(
            Coupling(names[0], names[1], value.tree, scope.source.span(statement.first.place))
        )

    # --- requirements ----------------------------------------------------------------------------------------------

    def expect(self, statement: t.Expect, frame: _Frame) -> None:
        """One requirement, checked."""
        scope = frame.scope
        words = " ".join(word.text for word in statement.words)
        if words not in MEASURES:
            where = statement.words[0].place.to(statement.words[-1].place)
            raise scope.mistake(
                "unknown-measure", f"there is no measure `{words}`", where, nearest(words, MEASURES)
            )
        form = MEASURES[words]
        target = typed(statement.target, scope) if statement.target is not None else None
        if form.target == "needed" and target is None:
            raise scope.mistake("measure-target", f"`{words}` needs `of NET`", statement.words[-1].place)
        if form.target == "refused" and statement.target is not None:
            raise scope.mistake("measure-target", f"`{words}` takes no `of`", statement.target.place)
        if form.along == "needed" and statement.along is None:
            raise scope.mistake("measure-along", f"`{words}` needs `along LET`", statement.words[-1].place)
        if form.along == "refused" and statement.along is not None:
            raise scope.mistake("measure-along", f"`{words}` takes no `along`", statement.along.place)
        along = self._let_of(statement.along, scope) if statement.along is not None else None
        dimension, scale = self._measured(form.dimension, target, along)
        relation = self._relation(statement.relation, dimension, scale, words, scope)
        line = scope.source.lines[statement.place.line - 1]
        text = _without_comment(line).strip()
        label = statement.label.text if statement.label is not None else self._made_label(words, statement)
        if any(label == r.label for r in self.requirements):
            if statement.label is not None:
                raise scope.mistake(
                    "duplicate-label", f"the label `{label}` stands twice", statement.label.place
                )
            k = 2
            while any(f"{label}_{k}" == r.label for r in self.requirements):
                k += 1
            label = f"{label}_{k}"
        unit = scale or (name_of(dimension) if dimension is not None else "")
        self.requirements.append(
            Requirement(
                label, words, relation, text, target.tree if target else None,
                _written(scope.source, statement.target) if statement.target is not None else "", unit,
                statement.along.text if statement.along else None, statement.stable, self._bindings(statement, scope),
                statement.start.text if statement.start else None, statement.over, scope.source.span(statement.place),
            )
        )  # fmt: skip

    def _let_of(self, word: t.Word, scope: Scope) -> Typed:
        if word.text not in self.parameters:
            raise scope.mistake(
                "unknown-let",
                f"there is no let `{word.text}`",
                word.place,
                nearest(word.text, self.parameters),
            )
        return scope.values[word.text]

    def _measured(
        self, form: Dimension | str, target: Typed | None, along: Typed | None
    ) -> tuple[Dimension, str]:
        if form == "target" and target is not None:
            return target.dimension, ""
        if form == "along" and along is not None:
            return along.dimension, along.scale
        if form == "ratio" and target is not None and along is not None:
            a, b = target.dimension, along.dimension
            return (a[0] - b[0], a[1] - b[1], a[2] - b[2], a[3] - b[3]), ""
        assert not isinstance(form, str)
        return form, ""

    def _relation(
        self, relation: t.Relation, dimension: Dimension, scale: str, words: str, scope: Scope
    ) -> Relation:
        if relation.form == "set" and words != "values":
            raise scope.mistake("relation", "a set in braces goes with `values` only", relation.place)
        targets: list[tuple[Expression | None, Expression | None, Expression | None]] = []
        for item in relation.items:
            value, tolerance = self._toleranced(item, scope)
            self._constant(value, item.value, scope, "a requirement")
            if value.dimension != dimension or (value.scale and value.scale != scale):
                wanted = scale or (name_of(dimension) or "a pure number")
                raise scope.mistake(
                    "dimension", f"`{words}` is measured in {wanted}, not in {_unit(value)}", item.value.place
                )
            low: Expression = value.tree
            high: Expression = value.tree
            if tolerance is not None:
                low, high = _limits(value.tree, tolerance)
            targets.append((value.tree, low, high))
        if relation.form == "range":
            low_end, high_end = targets[0][0], targets[1][0]
            assert low_end is not None
            assert high_end is not None
            if self._number(low_end, relation.items[0].value, scope) > self._number(
                high_end, relation.items[1].value, scope
            ):
                raise scope.mistake("relation", "the range has to rise", relation.items[0].value.place)
            return Relation("range", ((None, low_end, high_end),))
        if relation.form in ("below", "above"):
            return Relation(relation.form, ((targets[0][0], None, None),))
        return Relation(relation.form, tuple(targets))

    def _bindings(self, statement: t.Expect, scope: Scope) -> tuple[tuple[str, tuple[Expression, ...]], ...]:
        found: dict[str, list[Expression]] = {}
        current: t.Word | None = None
        for first, values in statement.at:
            if values is not None:
                if not isinstance(first, t.Word):
                    raise scope.mistake("binding", "after `at` stands LET = value", first.place)
                current = first
                self._let_of(first, scope)
                if first.text in found:
                    raise scope.mistake("binding", f"`{first.text}` is bound twice", first.place)
                found[first.text] = []
                given = values
            else:
                given = (first,)
            if current is None:
                raise scope.mistake("binding", "after `at` stands LET = value", first.place)
            let = scope.values[current.text]
            for formula in given:
                value = typed(formula, scope)
                self._constant(value, formula, scope, "a binding")
                if value.dimension != let.dimension or value.scale != let.scale:
                    raise scope.mistake(
                        "dimension", f"`{current.text}` is in {_unit(let)}, not {_unit(value)}", formula.place
                    )
                found[current.text].append(value.tree)
        return tuple((name, tuple(values)) for name, values in found.items())

    def _made_label(self, words: str, statement: t.Expect) -> str:
        parts = [words]
        if isinstance(statement.target, t.Word):
            parts.append(statement.target.text)
        if statement.along is not None:
            parts.append(f"along {statement.along.text}")
        return re.sub(r"[^A-Za-z0-9]+", "_", " ".join(parts)).strip("_")


def build(
    source: Source, statements: tuple[t.Statement, ...], definitions: Definitions, sources: Mapping[str, str]
) -> Circuit:
    """The circuit of a file whose first statement is `circuit`."""
    head = _head(source, statements)
    builder = Builder(source, definitions)
    nets = _nets_of(statements)
    scope = Scope(
        source,
        {},
        {name: name for name in nets},
        {name: name for name in _parts_of(statements)},
        definitions.curve_forms,
    )
    frame = _Frame(definitions, "", scope, {}, 0)
    ambient = Typed(LetRef("ambient"), KELVIN, "degC")
    builder.parameters["ambient"] = Parameter("ambient", Number(25.0), "degC")
    builder.numbers["ambient"] = 25.0
    scope.values["ambient"] = ambient
    definitions.scope.values = scope.values
    for statement in statements:
        if isinstance(statement, t.Let) and statement.name.text in nets:
            raise scope.mistake(
                "name-clash",
                f"`{statement.name.text}` is a net too; nets and lets share one name space",
                statement.name.place,
            )
    builder.lets(statements, frame)
    builder.expand(statements, frame)
    # nets and parts inside blocks are known by now and may be named in requirements
    scope.nets = {name: name for name in builder.nets}
    scope.parts = {name: name for name in builder.parts}
    for statement in statements:
        if isinstance(statement, t.Expect):
            builder.expect(statement, frame)
    return Circuit(
        head.name.text, head.title, source.file, tuple(builder.nets), builder.parameters, builder.curves, tuple(builder.parts.values()),
        tuple(builder.couplings), tuple(builder.requirements), dict(sources),
    )  # fmt: skip


def _head(source: Source, statements: tuple[t.Statement, ...]) -> t.Head:
    if not statements:
        raise CircuitError(
            "empty-file",
            "there is no statement in this file",
            source.at(1, 1),
            'begin with: circuit NAME "title"',
        )
    first = statements[0]
    if not isinstance(first, t.Head):
        raise CircuitError(
            "no-circuit",
            "a circuit file begins with `circuit NAME`",
            source.span(statement_place(first)),
            "a file without it holds parts for `use`",
        )
    for other in statements[1:]:
        if isinstance(other, t.Head):
            raise CircuitError("second-circuit", "one circuit per file", source.span(other.name.place))
    return first


def statement_place(statement: t.Statement) -> t.Place:
    """Where a statement begins, to point at it."""
    match statement:
        case t.Use() | t.Expect():
            return statement.place
        case t.Path():
            return statement.start.place
        case t.Couple():
            return statement.first.place
        case _:
            return statement.name.place


def _nets_of(statements: tuple[t.Statement, ...]) -> dict[str, None]:
    """Names of nets that the statements themselves mention in chains and pins."""
    found: dict[str, None] = {}
    for statement in statements:
        if isinstance(statement, t.Path):
            for word in (statement.start, *(step.net for step in statement.steps)):
                found.setdefault(word.text)
        elif isinstance(statement, t.PartOf):
            for given in statement.call.fields:
                if isinstance(given.value.value, t.Word) and given.value.tolerance is None:
                    found.setdefault(given.value.value.text)
    lets = {statement.name.text for statement in statements if isinstance(statement, t.Let)}
    chained = {
        w.text
        for s in statements
        if isinstance(s, t.Path)
        for w in (s.start, *(step.net for step in s.steps))
    }
    found.pop("gnd", None)
    # a field may be given a let, which is no net
    return {name: None for name in found if name not in lets or name in chained}


def _parts_of(statements: tuple[t.Statement, ...]) -> list[str]:
    found = []
    for statement in statements:
        if isinstance(statement, t.Path):
            found += [step.name.text for step in statement.steps]
        elif isinstance(statement, t.PartOf):
            found.append(statement.name.text)
    return found


def _words(formula: t.Formula) -> set[str]:
    """Names in a formula."""
    found: set[str] = set()
    stack: list[Any] = [formula]
    while stack:
        node = stack.pop()
        match node:
            case t.Word(text, _):
                found.add(text)
            case t.Chain(_, operands, _):
                stack.extend(operands)
            case t.Power(base, exponent, _):
                stack += [base, exponent]
            case t.Negative(operand, _):
                stack.append(operand)
            case t.Call(_, fields, positional, _):
                stack += [f.value.value for f in fields]
                stack += [x for p in positional for x in (p.value, p.pair) if x is not None]
    return found


def _is_share(formula: t.Formula) -> bool:
    """Written in % or ppm."""
    return isinstance(formula, t.Num) and formula.percent


def _unit(value: Typed) -> str:
    return f"`{value.scale}`" if value.scale else in_words(value.dimension)


def _limits(value: Expression, tolerance: Tolerance) -> tuple[Expression, Expression]:
    if tolerance.relative:
        size = Operation("abs", (value,))
        return (
            Operation("+", (value, Operation("*", (size, Number(tolerance.low))))),
            Operation("+", (value, Operation("*", (size, Number(tolerance.high))))),
        )
    return Operation("+", (value, Number(tolerance.low))), Operation("+", (value, Number(tolerance.high)))


def _written(source: Source, formula: t.Formula) -> str:
    where = formula.place
    return (
        source.lines[where.line - 1][where.column - 1 : where.end_column - 1]
        if where.line == where.end_line
        else "formula"
    )


def _without_comment(line: str) -> str:
    quoted = False
    for i, c in enumerate(line):
        if c == '"':
            quoted = not quoted
        elif c == "#" and not quoted:
            return line[:i]
    return line


__all__ = ["CurrentRef", "Definitions", "NetRef", "build", "define", "lets_in", "references"]
