"""Text to statements: a LALR grammar (grammar.lark) whose tree is made while it parses, so that nesting costs no recursion."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import replace
from functools import cache
from importlib.resources import files
from typing import Any, cast

from lark import Lark, Token, Transformer, UnexpectedInput

from loopsim.errors import CircuitError
from loopsim.language import tree as t
from loopsim.language.explain import explained
from loopsim.language.source import Source, place
from loopsim.units import CODE_PATTERN, UNIT_PATTERN, code, quantity

MAX_CHARACTERS = 2_000_000  # a circuit file of 50,000 lines; beyond it is not one circuit
MAX_NESTING = 100  # operations within operations, brackets within brackets; keeps recursion well within Python's limit of 1000


class _LineEnds:
    """Drops line ends inside round brackets, after a comma and after a link: the statement goes on there. Holds the nesting cap."""

    always_accept = ("_LINE_END",)

    def process(self, stream: Iterator[Token]) -> Iterator[Token]:
        depth = 0
        last = ""
        # nothing may be held back here: the lexer chooses its terminals by the state in which the parser is
        for token in stream:
            if token.type == "_LINE_END":
                if depth == 0 and last not in ("COMMA", "PLAIN_LINK", "ARROW", "SEMICOLON"):
                    yield token
                continue
            if token.type == "OPEN":
                depth += 1
                if depth > MAX_NESTING:
                    raise _TooDeep(token)
            elif token.type == "CLOSE":
                depth = max(0, depth - 1)
            last = token.type
            yield token


class _TooDeep(Exception):
    def __init__(self, token: Token) -> None:
        self.token = token


class _BadNumber(Exception):
    def __init__(self, token: Token, reason: str) -> None:
        self.token, self.reason = token, reason


class _TooLong(Exception):
    def __init__(self, where: t.Place) -> None:
        self.where = where


def _deeper(where: t.Place, inner: Iterable[t.Formula], operations: int = 1) -> int:
    """The depth of a formula that applies some operations to inner ones."""
    depth = operations + max((t.depth_of(formula) for formula in inner), default=0)
    if depth > MAX_NESTING:
        raise _TooLong(where)
    return depth


class _Make(Transformer[Token, Any]):
    """Tree nodes from rules; children come ready-made."""

    def number(self, c: list[Token]) -> t.Num:
        unit = str(c[1]) if len(c) > 1 else ""
        try:
            value = quantity(str(c[0]), unit)
        except ValueError as reason:
            raise _BadNumber(c[0], str(reason)) from None
        return t.Num(value, place(c[0]).to(place(c[-1])), unit in ("%", "ppm"))

    def code(self, c: list[Token]) -> t.Num:
        try:
            return t.Num(code(str(c[0])), place(c[0]))
        except ValueError as reason:
            raise _BadNumber(c[0], str(reason)) from None

    def name(self, c: list[Token]) -> t.Word:
        return t.Word(str(c[0]), place(c[0]))

    def bracket(self, c: list[Any]) -> t.Formula:
        inner: t.Formula = c[1]
        return replace(inner, place=place(c[0]).to(place(c[2])))

    def sign(self, c: list[Token]) -> str:
        return str(c[0])

    times = link_text = sign

    def _flat(self, c: list[Any]) -> t.Formula:
        if len(c) == 1:
            return cast(t.Formula, c[0])
        operands, where = tuple(c[0::2]), c[0].place.to(c[-1].place)
        return t.Chain(tuple(c[1::2]), operands, where, _deeper(where, operands, len(operands) - 1))

    sum = product = _flat

    def negative(self, c: list[Any]) -> t.Formula:
        return t.Negative(c[1], place(c[0]).to(c[1].place), _deeper(place(c[0]), c[1:]))

    def positive(self, c: list[Any]) -> t.Formula:
        return cast(t.Formula, c[1])

    def unary(self, c: list[Any]) -> t.Formula:
        return cast(t.Formula, c[0])

    def power(self, c: list[Any]) -> t.Formula:
        if len(c) == 1:
            return cast(t.Formula, c[0])
        where = c[0].place.to(c[2].place)
        return t.Power(c[0], c[2], where, _deeper(where, (c[0], c[2])))

    def atom(self, c: list[Any]) -> t.Formula:
        return cast(t.Formula, c[0])

    def toleranced(self, c: list[Any]) -> t.Toleranced:
        return t.Toleranced(c[0], c[1] if len(c) > 1 else None)

    def tolerance(self, c: list[Any]) -> t.Formula:
        return cast(t.Formula, c[1])

    def field(self, c: list[Any]) -> t.Field:
        return t.Field(self.name(c[:1]), c[2])

    named = field

    def positional(self, c: list[Any]) -> t.Positional:
        return t.Positional(c[0], c[2] if len(c) > 1 else None)

    def call(self, c: list[Any]) -> t.Call:
        fields = tuple(x for x in c if isinstance(x, t.Field))
        positional = tuple(x for x in c if isinstance(x, t.Positional))
        where = place(c[0]).to(place(c[-1]))
        inner = [given.value.value for given in fields]
        inner += [end for item in positional for end in (item.value, item.pair) if end is not None]
        # `min` and `max` of many apply one operation to each more
        depth = _deeper(where, inner, max(1, len(positional) - 1) if str(c[0]) in ("min", "max") else 1)
        return t.Call(self.name(c[:1]), fields, positional, where, depth)

    def circuit(self, c: list[Token]) -> t.Head:
        return t.Head(self.name(c[1:2]), str(c[2])[1:-1] if len(c) > 2 else "")

    def use(self, c: list[Token]) -> t.Use:
        return t.Use(str(c[1])[1:-1], place(c[1]))

    def range(self, c: list[Any]) -> tuple[t.Formula, t.Formula]:
        return c[1], c[3]

    def let(self, c: list[Any]) -> t.Let:
        low, high = c[4] if len(c) > 4 else (None, None)
        return t.Let(self.name(c[1:2]), c[3], low, high)

    def kind(self, c: list[Any]) -> t.KindOf:
        return t.KindOf(self.name(c[1:2]), c[3])

    def curve(self, c: list[Any]) -> t.CurveOf:
        return t.CurveOf(self.name(c[1:2]), c[3])

    def names(self, c: list[Any]) -> tuple[t.Word, ...]:
        return tuple(self.name([x]) for x in c if x is not None and x.type == "NAME")

    def block_defaults(self, c: list[Any]) -> tuple[t.Field, ...]:
        return tuple(x for x in c if isinstance(x, t.Field))

    def block(self, c: list[Any]) -> t.Block:
        pins = next(x for x in c if isinstance(x, tuple))
        defaults = next((x for x in c if isinstance(x, tuple) and x is not pins), ())
        body = tuple(x for x in c if not isinstance(x, Token | tuple))
        return t.Block(self.name(c[1:2]), pins, defaults, body)

    def couple(self, c: list[Any]) -> t.Couple:
        return t.Couple(self.name(c[1:2]), self.name(c[3:4]), c[5])

    def part(self, c: list[Any]) -> t.PartOf:
        return t.PartOf(self.name(c[:1]), c[2])

    def link(self, c: list[Token]) -> Token:
        return c[0]

    def chain(self, c: list[Any]) -> t.Path:
        steps = []
        for i in range(1, len(c), 6):
            before, name, _, value, after, net = c[i : i + 6]
            steps.append(
                t.Step(
                    str(before),
                    place(before),
                    self.name([name]),
                    value,
                    str(after),
                    place(after),
                    self.name([net]),
                )
            )
        return t.Path(self.name(c[:1]), tuple(steps))

    def label(self, c: list[Token]) -> tuple[str, t.Word]:
        return "label", self.name(c[:1])

    def words(self, c: list[Token]) -> tuple[str, tuple[t.Word, ...]]:
        return "words", tuple(self.name([x]) for x in c)

    def of_target(self, c: list[Any]) -> tuple[str, t.Formula]:
        return "target", c[1]

    def along(self, c: list[Token]) -> tuple[str, t.Word]:
        return "along", self.name(c[1:2])

    def stable(self, c: list[Token]) -> tuple[str, bool]:
        return "stable", True

    def _relation(self, form: str, c: list[Any]) -> tuple[str, t.Relation]:
        items = tuple(
            x if isinstance(x, t.Toleranced) else t.Toleranced(x) for x in c if not isinstance(x, Token)
        )
        return "relation", t.Relation(form, items, place(c[0]))

    def equal(self, c: list[Any]) -> tuple[str, t.Relation]:
        return self._relation("equal", c)

    def set(self, c: list[Any]) -> tuple[str, t.Relation]:
        return self._relation("set", c)

    def within(self, c: list[Any]) -> tuple[str, t.Relation]:
        return self._relation("range", c)

    def below(self, c: list[Any]) -> tuple[str, t.Relation]:
        return self._relation("below", c)

    def above(self, c: list[Any]) -> tuple[str, t.Relation]:
        return self._relation("above", c)

    def several(self, c: list[Any]) -> tuple[t.Formula, ...]:
        return tuple(x for x in c if not isinstance(x, Token))

    def at_item(self, c: list[Any]) -> tuple[t.Formula, tuple[t.Formula, ...] | None]:
        if len(c) == 1:
            return c[0], None
        return c[0], c[2] if isinstance(c[2], tuple) else (c[2],)

    def at(self, c: list[Any]) -> tuple[str, Any]:
        return "at", tuple(x for x in c if not isinstance(x, Token))

    def start_from(self, c: list[Token]) -> tuple[str, t.Word]:
        return "start", self.name(c[1:2])

    def over(self, c: list[Token]) -> tuple[str, bool]:
        return "over", True

    def expect(self, c: list[Any]) -> t.Expect:
        got = dict(c[1:])
        return t.Expect(
            got.get("label"), got["words"], got.get("target"), got.get("along"), bool(got.get("stable")), got["relation"],
            got.get("at", ()), got.get("start"), bool(got.get("over")), place(c[0]),
        )  # fmt: skip

    def start(self, c: list[Any]) -> tuple[t.Statement, ...]:
        return tuple(x for x in c if not isinstance(x, Token))


@cache
def _parser() -> Lark:
    grammar = files("loopsim.language").joinpath("grammar.lark").read_text(encoding="utf-8")
    grammar += f"\nUNIT.2: /{UNIT_PATTERN.replace('/', chr(92) + '/')}/\nCODE.2: /{CODE_PATTERN.replace('/', chr(92) + '/')}/\n"
    return Lark(
        grammar, parser="lalr", lexer="contextual", transformer=_Make(), postlex=cast(Any, _LineEnds()), propagate_positions=False,
        maybe_placeholders=False, keep_all_tokens=True,
    )  # fmt: skip


def statements(source: Source) -> tuple[t.Statement, ...]:
    """The statements of a text. CircuitError with place and hint for what is not one."""
    if len(source.text) > MAX_CHARACTERS:
        raise CircuitError(
            "file-size", f"more than {MAX_CHARACTERS:,} characters", source.at(1, 1), "one circuit per file"
        )
    try:
        return cast("tuple[t.Statement, ...]", _parser().parse(source.text + "\n"))
    except _TooDeep as deep:
        raise CircuitError(
            "nesting", f"brackets nest deeper than {MAX_NESTING}", source.span(place(deep.token))
        ) from None
    except _TooLong as long:
        raise CircuitError(
            "formula-size",
            f"this formula holds more than {MAX_NESTING} operations within each other",
            source.span(long.where),
            "name its parts with `let`",
        ) from None
    except _BadNumber as bad:
        raise CircuitError("bad-number", bad.reason, source.span(place(bad.token))) from None
    except UnexpectedInput as error:
        raise explained(source, error) from None
