"""The collector of circuit files, run in a pytest of its own."""

import importlib
import re
import xml.etree.ElementTree as ET
from importlib.metadata import entry_points
from pathlib import Path

import pytest

pytest_plugins = ["pytester"]
ROOT = Path(__file__).parents[1]
INSTALLED = any(entry.name == "loopsim" for entry in entry_points(group="pytest11"))
BARE = ("-p", "no:hypothesispytest")  # a plugin that takes a second to load and has no part in this
PLUGIN = BARE if INSTALLED else (*BARE, "-p", "loopsim.pytest_plugin")
GOOD = """circuit {name} "divider"
let supply = 5 V
gnd -> battery: supply -> top
top -- upper: 1 kohm -- middle -- lower: 1 kohm -- gnd
expect states = 1
expect half: values of middle = 2.5 V +/- 10 mV
expect third: values of middle = 1.67 V +/- 10 mV
"""


# an inner run forgets what it imported, and NumPy bears no second import
for _name in ("loopsim.analyses.states", "loopsim.requirements.verify", "loopsim.language.load"):
    importlib.import_module(_name)


@pytest.fixture
def run(pytester: pytest.Pytester, monkeypatch: pytest.MonkeyPatch):
    """pytest over circuits/pump.loop; a bare checkout names the plugin, an installed one brings it."""
    monkeypatch.setenv("PYTHONPATH", str(ROOT))
    folder = pytester.mkdir("circuits")
    (folder / "pump.loop").write_text(GOOD.format(name="pump"), encoding="utf-8")
    (folder / "kinds.loop").write_text("# nothing to expect here\nkind ohms = resistor(resistance = 1 ohm)\n", encoding="utf-8")
    return lambda *words: pytester.runpytest_inprocess(*PLUGIN, *words)


@pytest.mark.skipif(not INSTALLED, reason="a bare checkout has no entry point")
def test_the_installed_package_brings_the_plugin(pytester: pytest.Pytester) -> None:
    assert "--loopsim" in pytester.runpytest_subprocess("--help").stdout.str()


def test_off_unless_asked_for(run) -> None:
    assert run().ret == pytest.ExitCode.NO_TESTS_COLLECTED


def test_an_item_a_requirement_with_its_place_and_a_short_message(run, pytester: pytest.Pytester) -> None:
    pytester.makeini("[pytest]\nloopsim = true\n")
    found = run("-v", "--junit-xml=report.xml", "-o", "junit_family=xunit1")
    found.assert_outcomes(passed=2, failed=1)
    text = found.stdout.str()
    assert "circuits/pump.loop::half PASSED" in text and "circuits/pump.loop::third FAILED" in text
    assert re.search(r"^circuits/pump\.loop:7: violated: expect third: .*\(measured 2\.500 V; ", text, re.MULTILINE)
    assert "Traceback" not in text and "pytest_plugin.py" not in text and "RequirementFailure" not in text
    cases = {case.get("name"): case for case in ET.parse(pytester.path / "report.xml").iter("testcase")}
    assert (cases["third"].get("file"), cases["third"].get("line")) == ("circuits/pump.loop", "6")  # from zero
    assert float(cases["half"].find("properties/property[@name='margin']").get("value")) == pytest.approx(0.01)
    assert cases["half"].find("properties/property[@name='proof']").get("value")


def test_a_broken_file_is_an_error_of_that_file_only(run, pytester: pytest.Pytester) -> None:
    (pytester.path / "circuits" / "broken.loop").write_text("circuit broken\nexpect states = = 1\n", encoding="utf-8")
    (pytester.path / "circuits" / "binary.loop").write_bytes(b"circuit \xff\nexpect states = 1\n")
    found = run("--loopsim", "--continue-on-collection-errors", "-k", "not third")
    outcome = found.parseoutcomes()
    assert (outcome["errors"], outcome["passed"]) == (2, 2)
    text = found.stdout.str()
    assert "broken.loop:2:17: " in text and "binary.loop" in text and "Traceback" not in text


def test_collection_reads_and_computes_nothing(run, pytester: pytest.Pytester) -> None:
    pytester.makeconftest("import sys\ndef pytest_collection_finish(session):\n    assert 'scipy' not in sys.modules\n")
    found = pytester.runpytest_subprocess(*PLUGIN, "--loopsim", "--collect-only", "-q")
    assert found.ret == 0
    found.stdout.fnmatch_lines(["circuits/pump.loop::states", "circuits/pump.loop::half", "circuits/pump.loop::third"])


def test_the_last_failed_run_again_alone(run) -> None:
    run("--loopsim").assert_outcomes(passed=2, failed=1)
    again = run("--loopsim", "--lf", "-v")
    again.assert_outcomes(failed=1)
    again.stdout.fnmatch_lines(["*pump.loop::third FAILED*"])


@pytest.mark.slow
@pytest.mark.parametrize("dist", ["load", "worksteal", "loadscope", "loadfile"])
def test_every_way_of_handing_out_items_gives_the_same_outcomes(run, pytester: pytest.Pytester, dist: str) -> None:
    pytester.runpytest_subprocess(*PLUGIN, "--loopsim", "-n", "2", "--dist", dist).assert_outcomes(passed=2, failed=1)


def test_the_fixture_loads_a_circuit_beside_the_test(run, pytester: pytest.Pytester) -> None:
    (pytester.path / "circuits" / "test_pump.py").write_text(
        "import pytest, loopsim\n"
        "def test_good(circuit):\n    assert len(circuit('pump.loop').states()) == 1\n"
        "def test_bad(circuit):\n    circuit('no.loop')\n",
        encoding="utf-8",
    )
    found = run("-k", "test_")
    found.assert_outcomes(passed=1, failed=1)
    assert "no.loop" in found.stdout.str()


def test_settings_of_the_ini_are_read_and_checked(run, pytester: pytest.Pytester) -> None:
    pytester.makeini("[pytest]\nloopsim = true\nloopsim_budget = soon\n")
    found = run()
    assert found.ret == pytest.ExitCode.USAGE_ERROR
    assert "loopsim_budget = soon: not a number with s" in found.stderr.str()


def test_the_page_on_the_plugin_says_what_happens(pytester: pytest.Pytester, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("PYTHONPATH", str(ROOT))
    page = (ROOT / "docs/how-to/pytest.md").read_text(encoding="utf-8")
    for language, text in re.findall(r"^```(\w+)\n(.*?)^```$", page, re.MULTILINE | re.DOTALL):
        named = re.match(r"# file: (\S+)\n", text)
        if named:
            (pytester.path / named[1]).write_text(text, encoding="utf-8")
        elif language == "ini":
            pytester.makeini(text)
        elif language == "text":
            shown = text.splitlines()
    found = pytester.runpytest_inprocess(*PLUGIN, "-v")
    found.assert_outcomes(passed=5, failed=1)
    said = "\n".join(re.sub(r" +\[.*?%\]$", "", line) for line in found.outlines)
    for line in shown[1:]:
        assert line == "..." or line in said, line
