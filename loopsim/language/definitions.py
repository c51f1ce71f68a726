"""The kinds, curves and blocks that a file defines or takes from parts files."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

from loopsim.circuit import Curve
from loopsim.devices.catalogue import DEVICES, field_specs
from loopsim.errors import CircuitError, Span
from loopsim.language import tree as t
from loopsim.language.block_checks import check_block
from loopsim.language.curves import read_curve
from loopsim.language.formulas import Scope
from loopsim.language.mistakes import nearest
from loopsim.language.names import a
from loopsim.language.source import Source
from loopsim.units import Dimension


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
        if "." in word.text:
            raise CircuitError("reserved-name", f"`{word.text}`: a point belongs to the nets of a block", where)
        if word.text in DEVICES:
            there = "a built-in device"
        elif word.text in self.places:
            there = f"already defined at {self.places[word.text]}"
        else:
            self.places[word.text] = where
            return
        raise CircuitError("duplicate-name", f"`{word.text}` is {there}", where, "choose another name")


def define(source: Source, statements: tuple[t.Statement, ...], used: Callable[[t.Use], Definitions]) -> Definitions:
    """The kinds, curves and blocks of a file and of the parts files it uses."""
    found = Definitions(source)
    for statement in statements:
        match statement:
            case t.Use():
                _take(found, used(statement), statement)
            case t.CurveOf(name, call):
                found.claim(name)
                found.curves[name.text], found.curve_forms[name.text] = read_curve(name, call, Scope(source))
            case t.KindOf(name, call):
                found.claim(name)
                found.kinds[name.text] = kind_of(found, call, found.scope)
            case t.Block(name, _, _, _):
                found.claim(name)
                check_block(statement, Scope(source))
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


def kind_of(definitions: Definitions, call: t.Call, scope: Scope) -> Kind:
    """What `BASE(field = value, ...)` describes; its fields override those of the base."""
    base = named_kind(call, definitions, "device or kind", ())
    refuse_positional(call, scope, "fields are")
    check_fields(base.device, call, scope)
    return Kind(base.device, {**base.fields, **{given.name.text: (given.value, scope) for given in call.fields}})


def named_kind(call: t.Call, definitions: Definitions, what: str, besides: tuple[str, ...]) -> Kind:
    """The device or kind that a call names. what, besides: what else could stand there, for the message and the hint."""
    base = call.name.text
    if base in definitions.kinds:
        return definitions.kinds[base]
    if base in DEVICES:
        return Kind(base, {})
    known = [*DEVICES, *definitions.kinds, *besides]
    raise definitions.scope.mistake(
        "unknown-device", f"there is no {what} `{base}`", call.name.place, nearest(base, known)
    )


def refuse_positional(call: t.Call, scope: Scope, what: str) -> None:
    """Error for a bare value where only `name = value` may stand."""
    if call.positional:
        raise scope.mistake("call", f"{what} written name = value", call.positional[0].value.place)


def check_fields(device: str, call: t.Call, scope: Scope, pins: tuple[str, ...] = ()) -> None:
    """Error for a field (or pin, where pins are given) that the device has not, or that is given twice."""
    known = (*field_specs(device), *pins)
    seen: set[str] = set()
    for given in call.fields:
        name = given.name.text
        if name not in known:
            raise scope.mistake(
                "unknown-field", f"{a(device)} has no field `{name}`", given.name.place, nearest(name, known)
            )
        if name in seen:
            raise scope.mistake("duplicate-field", f"`{name}` is given twice", given.name.place)
        seen.add(name)
