"""The collector of circuit files, run in a pytest of its own."""

import shutil
from importlib.metadata import entry_points
from pathlib import Path

import pytest

pytest_plugins = ["pytester"]
PUMP = Path(__file__).parents[1] / "circuits/comparators/cistern_pump.loop"

# the plugin comes by the entry point of the installed package; a bare checkout has none
pytestmark = pytest.mark.skipif(
    not any(e.name == "loopsim" for e in entry_points(group="pytest11")), reason="needs loopsim installed"
)


@pytest.fixture
def folder(pytester):
    for family, name in (("comparators", "cistern_pump"), ("parts", "amplifiers")):
        (pytester.path / "circuits" / family).mkdir(parents=True)
        shutil.copy(PUMP.parents[1] / family / f"{name}.loop", pytester.path / "circuits" / family)
    with (pytester.path / "circuits/comparators/cistern_pump.loop").open("a") as file:
        file.write("expect margin: phase margin > 45\n")
    return pytester


def test_off_unless_asked_for(folder):
    folder.runpytest_subprocess().assert_outcomes()


def test_one_item_a_requirement_and_undecided_fails(folder):
    found = folder.runpytest_subprocess("--loopsim", "-v", "-k", "states or margin")
    assert (found.parseoutcomes()["passed"], found.parseoutcomes()["failed"]) == (3, 1)
    found.stdout.fnmatch_lines(["*cistern_pump.loop::stable_states PASSED*"])


def test_a_broken_file_is_an_error_of_that_file_only(folder):
    (folder.path / "broken.loop").write_text("circuit\nexpect states = = 1\n")
    found = folder.runpytest_subprocess("--loopsim", "--continue-on-collection-errors", "-k", "states")
    outcome = found.parseoutcomes()
    assert (outcome["errors"], outcome["passed"]) == (1, 3)
