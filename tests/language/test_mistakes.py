"""The table of mistakes: each example gives exactly its code, at its place, with a caret and a way out."""

import ast
import re
from pathlib import Path

import pytest
from malformed import FILE, told
from write_errors import PAGE, page

from loopsim.language.rules import GROUPS, MISTAKES

PACKAGE = Path(__file__).parents[2] / "loopsim"
CASES = [
    pytest.param(entry, example, id=f"{entry.code}-{k}")
    for entry in MISTAKES.values()
    for k, example in enumerate(entry.examples, start=1)
]
# notes of `inspect` on circuits that do have an answer
REMARKS = {"no-current", "short-circuited", "single-connection"}
# a fault that is raised again with a place takes its code along
AGAIN = {"fault.code", "error.code", "finding.code", "code"}


@pytest.mark.parametrize(("entry", "example"), CASES)
def test_an_example_is_told_its_mistake(entry, example, tmp_path):
    code, message = told(example, tmp_path)
    first, *others = message.rstrip("\n").split("\n")
    assert code == 2
    assert f"{entry.code}: " in first
    assert "Traceback" not in message
    assert re.search(r"[^ ^|]", (others or [first])[-1]), "no way out is shown"
    if example.place is None:
        return
    line, column, width = example.place
    assert first.startswith(f"{FILE}:{line}:{column}: {entry.code}: ")
    if others[0].lstrip().startswith(f"{line} | "):
        caret = re.search(r"\^+", others[1])
        # the excerpt of a long line ends at its edge
        assert len(caret.group()) == width or len(others[0]) > 120 + len(f"    {line} | ") - 1


def test_no_code_is_raised_that_the_table_lacks():
    raised = set()
    for path in sorted(PACKAGE.rglob("*.py")):
        for call in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            if isinstance(call, ast.Call) and call.args and _name(call.func) in {"CircuitError", "mistake", "Finding"}:
                code = call.args[0]
                if isinstance(code, ast.Constant):
                    raised.add(code.value)
                else:
                    assert ast.unparse(code) in AGAIN, f"{path}:{call.lineno}"
    assert raised - REMARKS == set(MISTAKES)


def _name(function):
    return function.attr if isinstance(function, ast.Attribute) else getattr(function, "id", "")


def test_every_code_stands_once_and_has_a_rule_a_way_out_and_an_example():
    entries = [entry for group in GROUPS.values() for entry in group]
    assert len(entries) == len(MISTAKES)
    for entry in entries:
        assert entry.rule.endswith(".")
        assert entry.way_out
        assert entry.examples


def test_the_page_of_errors_is_made_from_the_table():
    assert PAGE.read_text(encoding="utf-8") == page(), "run python tests/write_pages.py"
