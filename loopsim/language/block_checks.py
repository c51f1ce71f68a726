"""What holds for a block wherever it is placed: its pins, its parameters, the statements in it."""

from __future__ import annotations

from loopsim.language import tree as t
from loopsim.language.formulas import Scope
from loopsim.language.names import statement_place

_OUTSIDE = {t.Head: "circuit", t.Use: "use", t.Block: "block", t.Expect: "expect", t.KindOf: "kind", t.CurveOf: "curve"}


def check_block(block: t.Block, scope: Scope) -> None:
    """CircuitError for names of pins and parameters that cannot be, and for statements that do not stand inside a block."""
    seen: set[str] = set()
    for what, word in (
        *(("pin", pin) for pin in block.pins),
        *(("parameter", default.name) for default in block.defaults),
    ):
        if word.text == "gnd":
            raise scope.mistake("reserved-name", f"`gnd` is the reference everywhere; it is no {what}", word.place)
        if "." in word.text:
            raise scope.mistake("reserved-name", f"a {what}'s own name has no point in it", word.place)
        if word.text in seen:
            raise scope.mistake("duplicate-name", f"the {what} `{word.text}` stands twice", word.place)
        seen.add(word.text)
    for statement in block.body:
        if type(statement) in _OUTSIDE:
            raise scope.mistake(
                "misplaced",
                f"`{_OUTSIDE[type(statement)]}` does not stand inside a block",
                statement_place(statement),
                "put it beside the block",
            )
