"""Which names the statements themselves mention, before anything is looked up."""

from __future__ import annotations

from collections.abc import Container, Iterator
from typing import Any

from loopsim.language import tree as t


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


def nets_of(statements: tuple[t.Statement, ...]) -> dict[str, None]:
    """Names of nets that the statements mention in chains and pins, in the order in which they stand."""
    lets = {statement.name.text for statement in statements if isinstance(statement, t.Let)}
    chained = {word.text for word in _chained(statements)}
    found = dict.fromkeys(word.text for s in statements for word in (*_chained((s,)), *_pinned((s,))))
    # a field may be given a let, which is no net
    return {name: None for name in found if name != "gnd" and (name not in lets or name in chained)}


def _chained(statements: tuple[t.Statement, ...]) -> Iterator[t.Word]:
    for statement in statements:
        if isinstance(statement, t.Path):
            yield statement.start
            yield from (step.net for step in statement.steps)


def _pinned(statements: tuple[t.Statement, ...]) -> Iterator[t.Word]:
    """Single words given in the brackets of a part: nets, or lets given to fields."""
    for statement in statements:
        if isinstance(statement, t.PartOf):
            for given in statement.call.fields:
                if isinstance(given.value.value, t.Word) and given.value.tolerance is None:
                    yield given.value.value


def parts_of(statements: tuple[t.Statement, ...]) -> list[str]:
    """Names of the parts that the statements place."""
    found = []
    for statement in statements:
        if isinstance(statement, t.Path):
            found += [step.name.text for step in statement.steps]
        elif isinstance(statement, t.PartOf):
            found.append(statement.name.text)
    return found


def instances_of(statements: tuple[t.Statement, ...], blocks: Container[str]) -> list[str]:
    """Names of the parts that are instances of blocks."""
    return [s.name.text for s in statements if isinstance(s, t.PartOf) and s.call.name.text in blocks]


def words_in(formula: t.Formula) -> set[str]:
    """Names in a formula."""
    found: set[str] = set()
    stack: list[Any] = [formula]
    while stack:
        match stack.pop():
            case t.Word(text, _):
                found.add(text)
            case t.Chain(_, operands, _):
                stack.extend(operands)
            case t.Power(base, exponent, _):
                stack += [base, exponent]
            case t.Negative(operand, _):
                stack.append(operand)
            case t.Call(_, fields, positional, _):
                stack += [given.value.value for given in fields]
                stack += [end for item in positional for end in (item.value, item.pair) if end is not None]
    return found


def a(noun: str) -> str:
    """The noun with its article."""
    return f"{'an' if noun[0] in 'aeiou' else 'a'} {noun}"
