"""Mistakes of `expect`."""

from loopsim.language.rules.entry import Mistake, mistake

_NET = "let level = 1 V in 0 V .. 2 V\nlet load = 1 kohm\ngnd -> v1: level -> a\na -- r1: load -- gnd\n"

REQUIREMENTS: tuple[Mistake, ...] = (
    mistake(
        "unknown-measure",
        "A requirement asks for one of the measures of the language.",
        "the measures are listed in docs/reference/language.md",
        _NET + "expect ⟦stabel states⟧ = 1\n",
        _NET + "expect ⟦voltage⟧ of a = 1 V\n",
        _NET + "expect ⟦States⟧ = 1\n",
    ),
    mistake(
        "measure-target",
        "Some measures are of a net or a formula, some are of the whole circuit.",
        "MEASURE of NET, or without `of`",
        _NET + "expect ⟦values⟧ = 1 V\n",
        _NET + "expect states of ⟦a⟧ = 1\n",
    ),
    mistake(
        "measure-along",
        "A threshold, a hysteresis and a slope are along a let; the first two need its range.",
        "let NAME = ... in LO .. HI, and MEASURE along NAME",
        _NET + "expect rising ⟦threshold⟧ of a = 1 V\n",
        _NET + "expect states along ⟦level⟧ = 1\n",
        _NET + "expect hysteresis of a along ⟦load⟧ = 1 ohm\n",
    ),
    mistake(
        "measure-clause",
        "`in stable states` goes with what is read at operating points, `from` with what begins somewhere: `off` or the letter of a state.",
        "leave the clause out",
        _NET + "expect ⟦states⟧ in stable states = 1\n",
        _NET + "expect states = 1 from ⟦off⟧\n",
        _NET + "expect final value of a = 1 V from ⟦somewhere⟧\n",
    ),
    mistake(
        "relation",
        "A range rises, a set in braces goes with `values`, a count is a whole number.",
        "= v, = v +/- tol, in LO .. HI, < v, > v",
        _NET + "expect states in ⟦3⟧ .. 1\n",
        _NET + "expect states ⟦=⟧ {1, 3}\n",
        _NET + "expect states = ⟦1.5⟧\n",
        _NET + "expect states = ⟦-1⟧\n",
    ),
    mistake(
        "binding",
        "After `at` stand lets with their values, each let once.",
        "at LET = value, value, OTHER = value",
        _NET + "expect states = 1 at ⟦3 V⟧\n",
        _NET + "expect states = 1 at level = 1 V, ⟦level⟧ = 2 V\n",
        _NET + "expect states = 1 at ⟦level + 1 V⟧ = 2 V\n",
    ),
    mistake(
        "duplicate-label",
        "Labels of requirements differ.",
        "choose another label",
        _NET + "expect low: states = 1\nexpect ⟦low⟧: states < 2\n",
    ),
)
