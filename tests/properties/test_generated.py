"""Circuits with known counts: no point is missed, and nothing is called complete that is not."""

import numpy as np
import pytest
from array_systems import assert_points, solve
from generated import MAKERS, case


def check(seed):
    made, box = case(seed)
    found = solve(made.system, box, budget=20.0)
    assert len(found.x) <= made.count, f"{made.family}: {len(found.x)} points where {made.count} are"
    assert found.complete, f"{made.family}: not decided within the budget"
    assert len(found.x) == made.count, f"{made.family}, box {box:.3g}: {len(found.x)} of {made.count} points called complete"
    if made.points is not None:
        assert_points(found.x, made.points, 1e-7)


@pytest.mark.parametrize("seed", range(100))
def test_known_counts(seed):
    check(seed)


@pytest.mark.slow
@pytest.mark.parametrize("block", range(20))
def test_known_counts_thousand(block):
    for seed in range(1000 + 50 * block, 1050 + 50 * block):
        check(seed)


def test_the_set_holds_every_family_and_many_counts():
    made = [case(seed)[0] for seed in range(100)]
    assert len({m.family for m in made}) == len(MAKERS)
    counts = {m.count for m in made}
    assert {0, 1, 3, 9} <= counts
    assert max(counts) > 15


@pytest.mark.parametrize("seed", range(25))
def test_a_point_outside_the_box_is_not_counted(seed):
    """The box is part of what is proved: with the points on both sides of its edge exactly the inner ones are found."""
    made, _ = case(seed * 5)  # hidden roots
    assert made.points is not None
    reach = np.sort(np.max(np.abs(made.points), axis=1))
    if len(reach) < 2:
        pytest.skip("one point has no two sides")
    gaps = np.diff(reach)
    cut = int(np.argmax(gaps))
    if gaps[cut] < 1e-3:
        pytest.skip("no gap to put the edge into")
    found = solve(made.system, float(0.5 * (reach[cut] + reach[cut + 1])), budget=20.0)
    assert found.complete
    assert len(found.x) == cut + 1
