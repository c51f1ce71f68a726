"""Reading circuit files: what is read, and where a mistake is shown."""

import pytest

from loopsim import CircuitError, parse
from loopsim.language.tidy import tidy

GOOD = """circuit small "A divider"
let top = 5 V +/- 2 % in 0 V .. 9 V
gnd -> source: top -> a
a -- r1: 4K7 +/- 1 % -- b -- r2: 10 kohm -- gnd
expect states = 1 at top = 1 V, 5 V
"""

WRONG = [
    ("unknown-unit", "circuit x\nlet a = 5 volts\n", 2),
    ("polarity", "circuit x\na -> r: 1 kohm -> gnd\n", 2),
    ("dimension", "circuit x\nlet a = 1 V + 2 ohm\n", 2),
    ("unknown-field", "circuit x\nkind k = diode(saturation_curent = 10 fA)\n", 2),
    ("unknown-name", "circuit x\ngnd -> v: supply -> a\n", 2),
    ("bad-number", "circuit x\nlet a = 1e999 V\n", 2),
    ("let-cycle", "circuit x\nlet a = b\nlet b = a\n", 2),
    ("duplicate-part", "circuit x\na -- r: 1 kohm -- gnd\na -- r: 2 kohm -- gnd\n", 3),
    ("unknown-measure", "circuit x\na -- r: 1 kohm -- gnd\nexpect stats = 1\n", 3),
    ("nesting", "circuit x\nlet a = " + "(" * 300 + "1" + ")" * 300 + "\n", 2),
    ("empty-file", "", 1),
    ("no-circuit", "let a = 1 V\n", 1),
    ("use-path", 'circuit x\nuse "/etc/passwd"\n', 2),
    ("unfinished", "circuit x\nlet a =\n", 2),
]


def test_a_small_circuit_is_read_as_written():
    circuit = parse(GOOD)
    assert [part.device for part in circuit.parts] == ["voltage_source", "resistor", "resistor"]
    assert set(circuit.parameters) == {"ambient", "top", "r1.resistance"}
    assert circuit.nets == ("a", "b")
    assert len(circuit.states()) == 1


@pytest.mark.parametrize(("code", "text", "line"), WRONG, ids=[code for code, _, _ in WRONG])
def test_a_mistake_is_named_with_its_place(code, text, line):
    with pytest.raises(CircuitError) as caught:
        parse(text)
    assert (caught.value.code, caught.value.line) == (code, line)
    assert caught.value.column is not None


def test_tidy_is_idempotent_and_keeps_comments():
    once = tidy("# why\n" + GOOD.replace(" -- ", "   --  "))
    assert tidy(once) == once
    assert once.startswith("# why\n")
    assert parse(once).parts[1].name == "r1"
