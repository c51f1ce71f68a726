"""The standard layout, and what a file goes through to get it."""

import pytest

from loopsim.language.tidy import tidy

LAYOUTS = [
    ("let   a=1   V", "let a = 1 V"),
    ("let a=9V", "let a = 9 V"),
    ("let a = (b)-(c)", "let a = (b) - (c)"),
    ("let a=-b*-c^-2", "let a = -b * -c^-2"),
    ("let a = 2*( - 3 )", "let a = 2 * (-3)"),
    ("let t=25degC+/-5 K in-20 degC..60 degC", "let t = 25 degC +/- 5 K in -20 degC .. 60 degC"),
    ("a--r1:4K7+/-1%--b->d1:clamp->gnd", "a -- r1: 4K7 +/- 1 % -- b -> d1: clamp -> gnd"),
    ("u1:opamp( plus=a ,minus = b )", "u1: opamp(plus = a, minus = b)"),
    ("expect values of -a={-1V,2V}", "expect values of -a = { -1 V, 2 V }"),
    ("block cell(p;r=1 kohm){", "block cell(p; r = 1 kohm) {"),
    ("# as   it   is", "# as   it   is"),
    ("let a = 1 V# why", "let a = 1 V  # why"),
]


@pytest.mark.parametrize(("written", "laid_out"), LAYOUTS)
def test_a_line_gets_its_blanks(written, laid_out):
    closing = "\n}" if written.endswith("{") else ""
    assert tidy(f"circuit x\n{written}{closing}\n").split("\n")[1] == laid_out


def test_a_statement_that_goes_on_is_indented():
    text = "circuit x\nblock cell(p) {\np -- r1: 1 kohm --\ngnd\n}\n\n\n\na -- r2: 1 kohm --  # on\n\ngnd\n\n"
    assert tidy(text) == (
        "circuit x\nblock cell(p) {\n  p -- r1: 1 kohm --\n    gnd\n}\n\na -- r2: 1 kohm --  # on\n\n  gnd\n"
    )


def test_line_ends_become_line_feeds_and_a_byte_order_mark_goes():
    assert tidy("\ufeffcircuit x\r\nlet a = 1 V\r\n") == "circuit x\nlet a = 1 V\n"
