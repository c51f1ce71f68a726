"""Parts with named pins, and instances of blocks, whose statements are expanded in a frame of their own."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from loopsim.circuit import Coupling
from loopsim.devices.catalogue import pins as device_pins
from loopsim.expressions import Operation
from loopsim.language import tree as t
from loopsim.language.chains import add_chain
from loopsim.language.definitions import BlockKind, Kind, check_fields, named_kind, refuse_positional
from loopsim.language.draft import Frame
from loopsim.language.fields import fields_of
from loopsim.language.formulas import Scope, Typed, require, typed
from loopsim.language.lets import add_lets
from loopsim.language.mistakes import nearest
from loopsim.language.names import instances_of, nets_of, parts_of
from loopsim.language.values import refuse_nets, toleranced, unit_in_words
from loopsim.units import NUMBER

MAX_DEPTH = 32  # blocks within blocks


def expand(statements: tuple[t.Statement, ...], frame: Frame) -> None:
    """Every part of a frame, with what its blocks hold."""
    for statement in statements:
        match statement:
            case t.Path():
                add_chain(statement, frame)
            case t.PartOf():
                block = frame.definitions.blocks.get(statement.call.name.text)
                if block is not None:
                    _add_instance(statement, block, frame)
                else:
                    _add_part(statement, frame)
            case t.Couple():
                _add_coupling(statement, frame)
            case _:
                continue


def _add_part(statement: t.PartOf, frame: Frame) -> None:
    scope, call = frame.scope, statement.call
    kind = named_kind(call, frame.definitions, "device, kind or block", tuple(frame.definitions.blocks))
    refuse_positional(call, scope, "pins and fields are")
    wanted = device_pins(kind.device)
    check_fields(kind.device, call, scope, wanted)
    name = frame.new_part(statement.name)
    pins = {given.name.text: _pin(given, frame) for given in call.fields if given.name.text in wanted}
    own = {given.name.text: (given.value, scope) for given in call.fields if given.name.text not in wanted}
    _check_all_connected(statement, wanted, pins, frame)
    fields = fields_of(Kind(kind.device, {**kind.fields, **own}), name, frame)
    frame.add(name, kind.device, {pin: pins[pin] for pin in wanted}, fields, statement.name.place)


def _pin(given: t.Field, frame: Frame) -> str:
    """The net that a pin is connected to."""
    if not isinstance(given.value.value, t.Word) or given.value.tolerance is not None:
        raise frame.scope.mistake(
            "unknown-net", f"the pin `{given.name.text}` takes the name of a net", given.value.value.place
        )
    return frame.net(given.value.value)


def _check_all_connected(
    statement: t.PartOf, wanted: Sequence[str], pins: dict[str, str], frame: Frame
) -> None:
    missing = [pin for pin in wanted if pin not in pins]
    if missing:
        raise frame.scope.mistake(
            "pin-missing",
            f"`{statement.name.text}` leaves {', '.join(missing)} open",
            statement.name.place,
            "connect every pin",
        )


@dataclass
class _Given:
    """What an instance gives to its block: pin to net, parameter to value, each value with the scope it was written in."""

    pins: dict[str, str]
    values: dict[str, tuple[t.Toleranced, Scope]]


def _add_instance(statement: t.PartOf, block: BlockKind, frame: Frame) -> None:
    inner = block.statement
    _check_depth(statement, inner, frame)
    full = frame.new_part(statement.name)
    frame.draft.instances[full] = frame.scope.source.span(statement.name.place)
    prefix = full + "."
    given = _given(statement, block, frame)
    scope = Scope(block.definitions.source, curves=block.definitions.curve_forms)
    for name, (value, written_in) in given.values.items():
        scope.values[name] = _parameter(prefix + name, value, written_in, frame)
    _check_dimensions(given, block, scope)
    scope.nets = {**{name: prefix + name for name in nets_of(inner.body)}, **given.pins}
    scope.parts = {name: prefix + name for name in parts_of(inner.body)}
    scope.instances = {name: prefix + name for name in instances_of(inner.body, block.definitions.blocks)}
    trail = (*frame.trail, inner.name.text)
    within = Frame(frame.draft, block.definitions, prefix, scope, given.pins, trail)
    add_lets(inner.body, within)
    expand(inner.body, within)


def _check_depth(statement: t.PartOf, inner: t.Block, frame: Frame) -> None:
    if inner.name.text in frame.trail:
        what = f"the block `{inner.name.text}` holds itself"
    elif len(frame.trail) >= MAX_DEPTH:
        what = f"blocks nest deeper than {MAX_DEPTH}"
    else:
        return
    raise frame.scope.mistake("block-depth", what, statement.name.place)


def _given(statement: t.PartOf, block: BlockKind, frame: Frame) -> _Given:
    """Pins and parameters of an instance, defaults where nothing is given."""
    scope, call, inner = frame.scope, statement.call, block.statement
    wanted = [pin.text for pin in inner.pins]
    refuse_positional(call, scope, "pins and parameters are")
    plain = Scope(block.definitions.source)
    found = _Given({}, {default.name.text: (default.value, plain) for default in inner.defaults})
    seen: set[str] = set()
    for given in call.fields:
        name = given.name.text
        if name in seen:
            raise scope.mistake("duplicate-field", f"`{name}` is given twice", given.name.place)
        seen.add(name)
        if name in wanted:
            found.pins[name] = _pin(given, frame)
        elif name in found.values:
            found.values[name] = (given.value, scope)
        else:
            raise scope.mistake(
                "unknown-pin",
                f"the block `{inner.name.text}` has no pin or parameter `{name}`",
                given.name.place,
                nearest(name, [*wanted, *found.values]),
            )
    _check_all_connected(statement, wanted, found.pins, frame)
    return found


def _parameter(full: str, given: t.Toleranced, scope: Scope, frame: Frame) -> Typed:
    """The value of a block's parameter; a formula, or one with a tolerance, becomes a parameter of the circuit."""
    value, tolerance = toleranced(given, scope, frame.draft)
    refuse_nets(value, given.value, scope, "a parameter")
    # a formula handed on as it is would grow from block to block
    if tolerance is None and not isinstance(value.tree, Operation):
        return value
    return frame.draft.name_value(full, value, tolerance, given.value, scope)


def _check_dimensions(given: _Given, block: BlockKind, found: Scope) -> None:
    """Every parameter is in the unit of its default."""
    for default in block.statement.defaults:
        name = default.name.text
        expected = typed(default.value.value, Scope(block.definitions.source))
        if (found.values[name].dimension, found.values[name].scale) != (expected.dimension, expected.scale):
            value, scope = given.values[name]
            raise scope.mistake(
                "dimension",
                f"`{name}` is in {unit_in_words(expected)}, not {unit_in_words(found.values[name])}",
                value.value.place,
            )


def _add_coupling(statement: t.Couple, frame: Frame) -> None:
    scope, formula = frame.scope, statement.coefficient
    first, second = _part(statement.first, scope), _part(statement.second, scope)
    value = typed(formula, scope)
    require(value, NUMBER, formula, scope, "a coupling coefficient is")
    refuse_nets(value, formula, scope, "a coupling coefficient")
    if abs(frame.draft.number(value.tree, formula, scope)) > 1.0:
        raise scope.mistake("field-range", "a coupling coefficient lies within -1 .. 1", formula.place)
    if first == second:
        raise scope.mistake("coupling", "an inductor cannot couple to itself", statement.second.place)
    frame.draft.couplings.append(Coupling(first, second, value.tree, scope.source.span(statement.first.place)))


def _part(word: t.Word, scope: Scope) -> str:
    full = scope.part(word.text)
    if full is None:
        raise scope.mistake(
            "unknown-part", f"there is no part `{word.text}`", word.place, nearest(word.text, scope.parts)
        )
    return full
