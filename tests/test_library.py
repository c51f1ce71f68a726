"""Every shipped circuit: it reads, it is laid out in the standard way, its values are preferred ones, and its requirements
hold."""

import re
from pathlib import Path

import pytest

import loopsim

ROOT = Path(__file__).parents[1]
LIBRARY = ROOT / "circuits"
FILES = sorted(LIBRARY.rglob("*.loop"))
CIRCUITS = [path for path in FILES if path.parent.name != "parts"]
PARTS = [path for path in FILES if path.parent.name == "parts"]

# IEC 60063:2015: E24 in full; E96 by its rule round(100 * 10^(i / 96)), which it follows without exception
E24 = (10, 11, 12, 13, 15, 16, 18, 20, 22, 24, 27, 30, 33, 36, 39, 43, 47, 51, 56, 62, 68, 75, 82, 91)
PREFERRED = {float(f"{v * 10}") for v in E24} | {float(round(100 * 10 ** (i / 96))) for i in range(96)}


def name(path):
    return str(path.relative_to(LIBRARY))


def test_the_library_is_large_enough_and_has_every_family():
    assert len(CIRCUITS) >= 30
    families = {path.parent.name for path in CIRCUITS}
    assert families >= {
        "comparators", "latches", "memory", "references", "supplies", "oscillators", "amplifiers", "switches", "curves",
    }  # fmt: skip


@pytest.mark.parametrize("path", FILES, ids=name)
def test_header_says_what_it_is(path):
    text = path.read_text(encoding="utf-8")
    assert text.startswith("# ")
    if path in CIRCUITS:
        assert "\n# Known: " in text
        assert re.search(rf'^circuit {path.stem} "', text, re.MULTILINE)


@pytest.mark.parametrize("path", [p for p in CIRCUITS if re.search("kiln|heater|mains|lithium|cells", p.read_text())], ids=name)
def test_dangerous_surroundings_carry_a_caution(path):
    text = path.read_text(encoding="utf-8")
    if re.search("kiln|heater|mains|lithium", text):
        assert "# Caution: " in text


@pytest.mark.parametrize("path", FILES, ids=name)
def test_resistances_and_capacitances_are_preferred_values(path):
    for line in path.read_text(encoding="utf-8").splitlines():
        if line.startswith(("expect", "#", "let", "kind", "curve")):
            continue
        for number, _ in re.findall(r": ([0-9.]+) (?:[fpnumkMG]?)(ohm|F)\b", line):
            value = float(number)
            while value < 100:
                value *= 10
            while value >= 1000:
                value /= 10
            assert any(abs(value - p) < 1e-6 * p for p in PREFERRED), f"{number} in: {line}"


@pytest.mark.parametrize("path", CIRCUITS, ids=name)
def test_circuit_reads_and_states_requirements(path):
    circuit = loopsim.load(str(path))
    assert circuit.name == path.stem
    assert circuit.title
    assert circuit.requirements


@pytest.mark.parametrize("path", FILES, ids=name)
def test_laid_out_in_the_standard_way(path):
    from loopsim.language.tidy import tidy

    text = path.read_text(encoding="utf-8")
    assert tidy(text) == text


def test_the_page_of_circuits_names_every_file():
    page = (ROOT / "docs" / "reference" / "circuits.md").read_text(encoding="utf-8")
    listed = set(re.findall(r"^\| `([a-z_/]+\.loop)` \|", page, re.MULTILINE))
    assert listed == {path.relative_to(LIBRARY).as_posix() for path in CIRCUITS}
