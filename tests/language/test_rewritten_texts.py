"""Texts that say the same in other words describe the same circuit: order, names, blocks, kinds, line ends, spelling of values."""

import re

import pytest
from mutations import sources

from loopsim import Circuit, parse

SHIPPED = sources()
CIRCUITS = [name for name, text in SHIPPED.items() if re.search(r"^circuit ", text, re.MULTILINE)]


def read(name: str, text: str) -> Circuit:
    return parse(text, name, sources={**SHIPPED, name: text})


def contents(circuit: Circuit) -> list[object]:
    """Everything of a circuit, without order and places."""
    return [
        sorted(circuit.nets),
        sorted((p.name, p.device, tuple(p.pins.items()), settled(p.fields)) for p in circuit.parts),
        sorted((p.name, settled(p.value), p.unit, settled((p.low, p.high, p.tolerance))) for p in circuit.parameters.values()),
        sorted(circuit.curves),
        sorted((c.first, c.second) for c in circuit.couplings),
        sorted(r.text for r in circuit.requirements),
    ]


def settled(value: object) -> str:
    return re.sub(r"span=Span\(.*?\)(?=[,)])", "", re.sub(r"text='[^']*'|text=\"[^\"]*\"", "", repr(value)))


def statements(text: str) -> list[str]:
    """Whole statements, each with the lines on which it goes on; a comment or an empty line is one of its own."""
    found: list[str] = []
    for line in text.split("\n"):
        if found and _goes_on(found[-1]):
            found[-1] += "\n" + line
        else:
            found.append(line)
    return found


def _goes_on(text: str) -> bool:
    bare = re.sub(r'"[^"]*"|#.*', "", text).rstrip()
    return (
        bare.count("(") > bare.count(")") or bare.count("{") > bare.count("}") or bare.endswith((",", "--", "->"))
    )


@pytest.mark.parametrize("name", CIRCUITS)
def test_lets_chains_parts_and_requirements_stand_in_any_order(name):
    text = SHIPPED[name]
    lines = statements(text)
    fixed = [line for line in lines if re.match(r"\s*(circuit|use|kind|curve|block)\b", line)]
    free = [line for line in lines if line not in fixed]
    assert contents(read(name, "\n".join([*fixed, *reversed(free)]))) == contents(read(name, text))


@pytest.mark.parametrize("name", CIRCUITS)
def test_line_ends_byte_order_marks_and_micro_signs_change_nothing(name):
    text = SHIPPED[name]
    plain = contents(read(name, text))
    assert contents(read(name, text.replace("\n", "\r\n"))) == plain
    assert contents(read(name, "\ufeff" + text)) == plain
    signs = re.sub(r"(?<=[0-9] )u(?=[VAFHs]\b)", "\u00b5", text).replace("+/-", "\u00b1")
    assert contents(read(name, signs))[:-1] == plain[:-1]


INLINE = """circuit one
let load = 2 kohm
gnd -> v1: 5 V -> vcc -- r1: 1 kohm +/- 1 % -- out -> d1: diode(saturation_current = 10 fA, ideality = 1.2) -> gnd
out -- r2: load -- gnd
"""
KIND = """circuit one
kind clamp = diode(saturation_current = 10 fA, ideality = 2)
kind sharper = clamp(ideality = 1.2)
gnd -> v1: 5 V -> vcc
r1: resistor(from = vcc, to = out, resistance = 1K0 +/- 1 %)
out -> d1: sharper -> gnd
let half = 1 kohm
let load = 2*half
out -- r2: load -- gnd
"""
BLOCK = """circuit one
block shunt(p; load = 1 kohm, share = 1.1) {
  p -> d1: diode(saturation_current = 10 fA, ideality = share) -> gnd
  p -- r2: load -- gnd
}
gnd -> v1: 5 V -> vcc -- r1: 1000 ohm +/- 10 ohm -- out
x1: shunt(p = out, load = 2 kohm, share = 1.2)
"""


def test_kinds_blocks_and_spelled_out_parts_give_the_same_voltages():
    inline, kind, block = (parse(text).states() for text in (INLINE, KIND, BLOCK))
    assert len(inline) == len(kind) == len(block) == 1
    assert kind[0]["out"] == pytest.approx(inline[0]["out"], rel=1e-12)
    assert block[0]["out"] == pytest.approx(inline[0]["out"], rel=1e-12)


def test_two_instances_do_not_share_their_inside():
    text = "circuit two\nblock cell(p; load = 1 kohm) {\n  p -- r1: load -- mid -- r2: 1 kohm -- gnd\n}\ngnd -> v1: 4 V -> a\n"
    states = parse(text + "x1: cell(p = a)\nx2: cell(p = a, load = 3 kohm)\n").states()
    assert (states[0]["x1.mid"], states[0]["x2.mid"]) == (pytest.approx(2.0), pytest.approx(1.0))


def test_a_formula_outside_reads_nets_and_currents_inside_a_block():
    text = (
        "circuit reach\nblock cell(p) {\n  p -- r1: 1 kohm -- mid -- r2: 1 kohm -- gnd\n}\ngnd -> v1: 4 V -> a\nx1: cell(p = a)\n"
        "gnd -> copy: 2*x1.mid + current(x1.r1)*1 kohm -> b -- r3: 1 kohm -- gnd\n"
    )
    assert parse(text).states()[0]["b"] == pytest.approx(6.0)


def test_a_curve_in_a_let_has_its_value():
    text = "circuit curved\ncurve square_law = polynomial(1, 2/(1 V))\nlet top = square_law(3 V)\n"
    assert parse(text + "gnd -> v1: top -> a -- r1: 1 kohm -- gnd\n").states()[0]["a"] == pytest.approx(21.0)


def test_an_asymmetric_tolerance_keeps_its_sides_in_either_order():
    for spread in ("+ 50 % - 20 %", "- 20 % + 50 %"):
        circuit = parse(f"circuit spread\na -- c1: 10 uF {spread} -- gnd\n")
        tolerance = circuit.parameters["c1.capacitance"].tolerance
        assert (tolerance.low, tolerance.high, tolerance.relative) == (-0.2, 0.5, True)


@pytest.mark.parametrize(("given", "high", "relative"), [("5 %", 0.05, True), ("200 ppm", 0.0002, True)])
def test_a_block_hands_on_a_tolerance(given, high, relative):
    text = f"circuit handed\nblock cell(p; spread = 1 %) {{\n  p -- r1: 1 kohm +/- spread -- gnd\n}}\nx1: cell(p = a, spread = {given})\n"
    tolerance = parse(text).parameters["x1.r1.resistance"].tolerance
    assert (tolerance.low, tolerance.high, tolerance.relative) == (-high, high, relative)
