"""What a list of states claims: contradictions stop it, a short budget is told, letters and order."""

from dataclasses import replace

import numpy as np
import pytest

import loopsim
from loopsim.analyses import states as module
from loopsim.analyses.states import letters
from loopsim.errors import AnalysisError, InternalError

LATCH = """circuit latch "Two inverting stages"
let strength = 4 in 1 .. 10
left -- r1: 1 kohm -- gnd
right -- r2: 1 kohm -- gnd
left -> f1: 1 mA * tanh(strength * right / 1 V) -> gnd
right -> f2: 1 mA * tanh(strength * left / 1 V) -> gnd
"""


def lossy(keep):
    """The proof with a fault: the points for which `keep` does not hold are left out, and it still says complete."""
    from loopsim.analyses.points import all_points

    def proved(system, box, deadline):
        found = all_points(system, box, deadline)
        assert found.complete
        kept = [i for i, x in enumerate(found.x) if keep(x)]
        return replace(found, x=found.x[kept], spread=found.spread[kept])

    return proved


@pytest.mark.parametrize("lost", [0, 1, 2])
def test_a_point_that_the_search_finds_and_the_proof_lacks_stops_everything(lost, monkeypatch):
    whole = loopsim.parse(LATCH).states()
    assert len(whole) == 3
    gone = whole[lost].x
    monkeypatch.setattr(module, "all_points", lossy(lambda x: not np.allclose(x, gone)))
    monkeypatch.setattr(module, "sweep", lambda system, budget: whole[lost].x[None])
    with pytest.raises(InternalError, match="missed an operating point"):
        loopsim.parse(LATCH).states()


def test_the_search_of_every_run_meets_a_lost_point_by_itself(monkeypatch):
    """Without help: the curve from no supply ends in the only point of this divider."""
    text = 'circuit pair "Diode"\ngnd -> source: 5 V -> top -- r1: 1 kohm -- out -> d1: diode -> gnd\n'
    assert len(loopsim.parse(text).states()) == 1
    monkeypatch.setattr(module, "all_points", lossy(lambda x: False))
    monkeypatch.setattr(module, "SWEEP_FLOOR", 2.0)
    with pytest.raises(InternalError, match="missed an operating point"):
        loopsim.parse(text).states()


def test_the_same_point_found_twice_is_no_contradiction(monkeypatch):
    """Off by what two computations of one point differ by."""
    whole = loopsim.parse(LATCH).states()
    near = np.array([point.x * (1 + 1e-13) for point in whole])
    monkeypatch.setattr(module, "sweep", lambda system, budget: near)
    assert len(loopsim.parse(LATCH).states()) == 3


def test_without_time_for_a_proof_what_is_found_is_not_called_complete():
    points = loopsim.parse(LATCH).states(budget=1e-9)
    assert not points.complete
    assert points.undecided > 0
    assert points.remainder


@pytest.mark.parametrize("box", [0.0, -1.0, float("nan"), float("inf")])
def test_a_box_must_be_a_positive_voltage(box):
    with pytest.raises(AnalysisError, match="start box"):
        loopsim.parse(LATCH).states(box=box)


def test_states_are_lettered_in_ascending_order_of_the_watched_net():
    points = loopsim.parse(LATCH + "expect values of right = {-0.99 V +/- 0.1 V, 0 V +/- 1 mV, 0.99 V +/- 0.1 V}\n").states()
    assert points.watch == ("right",)
    assert [point.name for point in points] == ["A", "B", "C"]
    values = [point["right"] for point in points]
    assert values == sorted(values)
    assert points["A"]["right"] == -points["C"]["right"] == pytest.approx(-1.0, abs=0.01)


def test_a_let_set_outside_its_stated_range_is_told():
    assert loopsim.parse(LATCH).states(strength=10).notes == loopsim.parse(LATCH).states().notes
    assert "strength is set outside the range its file states: 1 .. 10" in loopsim.parse(LATCH).states(strength=11).notes


def test_nets_that_sources_put_outside_the_box_are_told():
    text = 'circuit far "Far"\ngnd -> source: 2 kV -> top -- r1: 1 Mohm -- out -> d1: diode -> gnd\n'
    near, far = loopsim.parse(text).states(box=3e3), loopsim.parse(text).states()
    assert near.complete
    assert not any("outside the box" in note for note in near.notes)
    assert "outside the box, where sources and linear parts alone put them: top" in far.notes


def test_after_z_comes_aa():
    names = letters(26 + 26 * 26 + 1)
    assert names[25:28] == ["Z", "AA", "AB"]
    assert names[-2:] == ["ZZ", "AAA"]
