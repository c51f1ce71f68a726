"""The list of points of a system: groups share their work, a count that degree theory forbids is never called complete."""

import time

import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, system_of, unit

from loopsim.analyses.points import all_points
from loopsim.errors import AnalysisError


def latches(n, gain=2.0, drive=0.0):
    """n cells x = drive + tanh(gain x), three points each without drive: 0 and +-0.957504 for a gain of 2."""
    rows = [Row(Kind.SATURATION, unit(n, k, gain), unit(n, k, -1.0)) for k in range(n)]
    return system_of(np.eye(n), np.full(n, drive), rows)


def test_equal_groups_are_searched_once():
    one, four = all_points(latches(1), 1e3), all_points(latches(4), 1e3)
    assert four.complete
    assert (len(one.x), len(four.x)) == (3, 81)
    assert four.groups == 4
    assert four.boxes == one.boxes
    star = 0.95750402407726874068
    cell = np.array([-star, 0.0, star])
    grid = np.stack(np.meshgrid(*[cell] * 4, indexing="ij"), axis=-1).reshape(-1, 4)
    assert_points(four.x, grid, 1e-12)


def test_points_that_the_box_cuts_off_leave_a_count_that_cannot_be():
    """Within +/- 0.5 only the middle point is left, with the wrong sign: by degree theory there must be more somewhere."""
    found = all_points(latches(1), 0.5)
    assert not found.complete
    assert "may lie outside the box" in found.remainder[0]


def test_each_point_has_a_width_that_holds_the_truth():
    found = all_points(latches(1), 1e3)
    truth = np.array([-0.95750402407726874068, 0.0, 0.95750402407726874068])
    order = np.argsort(found.x[:, 0])
    assert np.all(np.abs(found.x[order, 0] - truth) <= found.spread[order, 0])
    assert np.all(found.spread < 1e-12)


def test_sources_that_may_lie_anywhere_in_an_interval_widen_the_points():
    found = all_points(latches(1), 1e3, source_radius=np.array([1e-3]))
    assert found.complete
    assert len(found.x) == 3
    for shift in (-1e-3, 0.0, 1e-3):
        moved = all_points(latches(1, drive=shift), 1e3)
        for x in moved.x:
            assert np.any(np.abs(found.x - x) <= found.spread)


def test_a_deadline_in_the_past_leaves_all_undecided():
    found = all_points(latches(2), 1e3, time.monotonic() - 1.0)
    assert not found.complete
    assert found.remainder


def test_too_many_points_are_refused_with_a_way_out():
    with pytest.raises(AnalysisError, match="operating points") as caught:
        all_points(latches(14), 1e3)
    assert caught.value.code == "too-many-states"
    assert caught.value.hint
