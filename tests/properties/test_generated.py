"""Circuits with known counts: no point is missed, and nothing is called complete that is not."""

import numpy as np
import pytest
from array_systems import assert_points, solve
from generated import MAKERS, case


def decided(seed, budget):
    """Whether the list was proved complete; if so, or if not, no point in it may be wrong, and a complete list misses none."""
    made, box = case(seed)
    found = solve(made.system, box, budget=budget)
    assert len(found.x) <= made.count, f"{made.family}: {len(found.x)} points where {made.count} are"
    if found.complete:
        assert len(found.x) == made.count, f"{made.family}, box {box:.3g}: {len(found.x)} of {made.count} called complete"
        if made.points is not None:
            assert_points(found.x, made.points, 1e-7)
    return found.complete


@pytest.mark.parametrize("seed", range(100))
def test_known_counts(seed):
    assert decided(seed, budget=30.0)


@pytest.mark.slow
@pytest.mark.parametrize("block", range(20))
def test_known_counts_of_a_thousand(block):
    """Undecided is an honest answer, but not a frequent one."""
    open_ones = [seed for seed in range(1000 + 50 * block, 1050 + 50 * block) if not decided(seed, budget=10.0)]
    assert len(open_ones) <= 2, open_ones


def test_the_set_holds_every_family_and_many_counts():
    made = [case(seed)[0] for seed in range(100)]
    assert len({m.family for m in made}) == len(MAKERS)
    counts = {m.count for m in made}
    assert {0, 1, 3, 9} <= counts
    assert max(counts) > 15


def edges():
    """(case, half width of a box with points on both sides of its edge, how many are inside) for hidden roots."""
    for seed in range(0, 150, 5):
        made, _ = case(seed)
        reach = np.sort(np.max(np.abs(made.points), axis=1)) if made.count > 1 else np.zeros(0)
        gaps = np.diff(reach)
        if len(gaps) and np.max(gaps) > 1e-3:
            cut = int(np.argmax(gaps))
            yield made, float(0.5 * (reach[cut] + reach[cut + 1])), cut + 1


def test_a_point_outside_the_box_is_not_counted():
    """The box is part of what is proved: with points on both sides of its edge exactly the inner ones are found."""
    tried = 0
    for made, box, inside in edges():
        found = solve(made.system, box, budget=30.0)
        assert found.complete
        assert len(found.x) == inside
        tried += 1
    assert tried >= 15
