"""Every shipped circuit: it reads, it is laid out in the standard way, its values are preferred ones, and its requirements
hold."""

import itertools
import re
from pathlib import Path

import pytest

import loopsim
from loopsim.equations.assemble import parameter_values
from loopsim.expressions import evaluate

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


DANGEROUS = re.compile(r"kiln|heater|mains|lithium|coin cell|motor|pump|tide mill|ferry|alarm", re.IGNORECASE)


@pytest.mark.parametrize("path", [p for p in CIRCUITS if DANGEROUS.search(p.read_text(encoding="utf-8"))], ids=name)
def test_dangerous_surroundings_carry_a_caution(path):
    assert "\n# Caution: " in path.read_text(encoding="utf-8")


@pytest.mark.parametrize("path", FILES, ids=name)
def test_resistances_capacitances_and_inductances_are_preferred_values(path):
    for line in path.read_text(encoding="utf-8").splitlines():
        if line.startswith(("expect", "#", "let", "kind", "curve")):
            continue
        for number, _ in re.findall(r": ([0-9.]+) (?:[fpnumkMG]?)(ohm|F|H)\b", line):
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


def test_the_page_of_circuits_is_made_from_the_files():
    import write_circuits

    assert write_circuits.PAGE.read_text(encoding="utf-8") == write_circuits.page(), "write it anew: python tests/write_pages.py"


def test_the_page_of_circuits_names_every_file():
    page = (ROOT / "docs" / "reference" / "circuits.md").read_text(encoding="utf-8")
    listed = set(re.findall(r"^\| `([a-z_/]+\.loop)` \|", page, re.MULTILINE))
    assert listed == {path.relative_to(LIBRARY).as_posix() for path in CIRCUITS}


def bindings(requirement, values):
    """Every combination of the `at` values [SI]."""
    names = [let for let, _ in requirement.at]
    choices = [[float(evaluate(formula, values)) for formula in formulas] for _, formulas in requirement.at]
    return [dict(zip(names, chosen, strict=True)) for chosen in itertools.product(*choices)]


def limits(target, values):
    """(low, high) of one entry of a relation [SI]."""
    _, low, high = target
    return float(evaluate(low, values)), float(evaluate(high, values))


def holds(requirement, points, values):
    """Whether a requirement on counts or values holds for a list of operating points."""
    if requirement.in_stable_states:
        points = [p for p in points if p.stable is True]
    if requirement.measure == "values":
        found = sorted(float(evaluate(requirement.target, values, dict(p.nets), dict(p.currents))) for p in points)
    else:
        wanted = {"states": (True, False, None), "stable states": (True,), "unstable states": (False,)}[requirement.measure]
        found = [float(sum(p.stable in wanted for p in points))]
    ranges = sorted(limits(target, values) for target in requirement.relation.targets)
    if requirement.relation.form == "set":
        near = all(any(low <= v <= high for low, high in ranges) for v in found)
        return near and all(any(low <= v <= high for v in found) for low, high in ranges)
    assert requirement.relation.form in ("equal", "range")
    return bool(found) and all(low <= v <= high for v in found for low, high in ranges)


@pytest.mark.parametrize("path", CIRCUITS, ids=name)
def test_requirements_on_states_hold(path):
    circuit = loopsim.load(str(path))
    served = [r for r in circuit.requirements if r.measure in ("states", "stable states", "unstable states", "values")]
    assert served
    known = {}
    for requirement in served:
        for settings in bindings(requirement, parameter_values(circuit)):
            key = tuple(sorted(settings.items()))
            if key not in known:
                known[key] = circuit.states(**settings)
            points = known[key]
            assert points.complete, f"{settings}: {points}"
            assert holds(requirement, points, parameter_values(circuit, settings)), f"{requirement.text}\n{points}"
