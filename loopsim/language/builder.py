"""Statements to a Circuit: lets, parts with blocks expanded, requirements, each checked where it stands."""

from __future__ import annotations

from collections.abc import Mapping

from loopsim.circuit import Circuit, Parameter
from loopsim.errors import CircuitError
from loopsim.expressions import LetRef, Number
from loopsim.language import tree as t
from loopsim.language.blocks import expand
from loopsim.language.definitions import Definitions
from loopsim.language.draft import Draft, Frame
from loopsim.language.expects import add_requirement
from loopsim.language.formulas import Scope, Typed
from loopsim.language.lets import add_lets
from loopsim.language.mistakes import nearest
from loopsim.language.names import instances_of, nets_of, parts_of, statement_place
from loopsim.language.source import Source
from loopsim.units import KELVIN

USUAL_AMBIENT = 25.0  # degC


def build(
    source: Source, statements: tuple[t.Statement, ...], definitions: Definitions, sources: Mapping[str, str]
) -> Circuit:
    """The circuit of a file whose first statement is `circuit`."""
    head = _head(source, statements)
    draft, scope = Draft(definitions.curves), _outer_scope(source, statements, definitions)
    frame = Frame(draft, definitions, "", scope)
    draft.parameters["ambient"] = Parameter("ambient", Number(USUAL_AMBIENT), "degC")
    draft.numbers["ambient"] = USUAL_AMBIENT
    add_lets(statements, frame)
    expand(statements, frame)
    _check_inner_nets(draft)
    # nets and parts inside blocks are known by now and may be named in requirements
    scope.nets = {name: name for name in draft.nets}
    scope.parts = {name: name for name in draft.parts}
    scope.instances = {}
    for statement in statements:
        if isinstance(statement, t.Expect):
            add_requirement(statement, frame)
    return Circuit(
        head.name.text,
        head.title,
        source.file,
        tuple(draft.nets),
        draft.parameters,
        draft.curves,
        tuple(draft.parts.values()),
        tuple(draft.couplings),
        tuple(draft.requirements),
        dict(sources),
    )


def _outer_scope(source: Source, statements: tuple[t.Statement, ...], definitions: Definitions) -> Scope:
    """What names mean outside of blocks; the kinds of the circuit's own file see its lets too."""
    nets = nets_of(statements)
    scope = Scope(
        source,
        {"ambient": Typed(LetRef("ambient"), KELVIN, "degC")},
        {name: name for name in nets},
        {name: name for name in parts_of(statements)},
        definitions.curve_forms,
        {name: name for name in instances_of(statements, definitions.blocks)},
    )
    definitions.scope.values = scope.values
    for statement in statements:
        if isinstance(statement, t.Let) and statement.name.text in nets:
            raise scope.mistake(
                "name-clash",
                f"`{statement.name.text}` is a net too; nets and lets share one name space",
                statement.name.place,
            )
    return scope


def _check_inner_nets(draft: Draft) -> None:
    """Error for `instance.net` where that block has no such net."""
    for full, (word, scope) in draft.named_outside.items():
        if full not in draft.nets:
            raise scope.mistake(
                "unknown-net", f"no block here has a net `{word.text}`", word.place, nearest(full, draft.nets)
            )


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
