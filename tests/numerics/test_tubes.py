"""Every solution for every level at once: what is called proved has to hold the whole curve, and nothing may be lost."""

import numpy as np
import pytest
from array_systems import Kind, Row, system_of

from loopsim.devices.phi_rows import rows_of
from loopsim.numerics.problem import Problem
from loopsim.numerics.tubes import all_levels, points_at, region, with_level


def cubic(low: float, high: float, b: float = 1.0) -> Problem:
    """0 = l + b x - x^3 as -b x + x^3 = l."""
    system = system_of([[-b]], [0.0], [Row(Kind.POLYNOMIAL, [1.0], [1.0], (0.0, 0.0, 1.0))])
    rows = rows_of(system.kinds, system.parameters)
    problem = Problem(system.G, system.B, system.W, system.V, rows, system.c, system.c, system.d, system.d, system.s, system.s)
    return with_level(problem, np.array([1.0]), low, high)


def box(low: float, high: float) -> tuple[np.ndarray, np.ndarray]:
    return np.array([[-10.0, low]]), np.array([[10.0, high]])


FOLD = 2.0 / 3.0**1.5  # of x^3 - x, textbook


def roots(level: float) -> np.ndarray:
    found = np.roots([1.0, 0.0, -1.0, -level])
    return np.sort(found[np.abs(found.imag) < 1e-9].real)


def test_single_levels_are_solved_in_one_search() -> None:
    levels = np.array([-1.0, -0.3, 0.0, 0.2, 1.0])
    low, high = np.column_stack([np.full(5, -10.0), levels]), np.column_stack([np.full(5, 10.0), levels])
    found = all_levels(cubic(-1.0, 1.0), low, high)
    for level in levels:
        x, spread, complete = points_at(cubic(-1.0, 1.0), found, float(level))
        assert complete
        assert np.sort(x[:, 0]) == pytest.approx(roots(level), abs=1e-12)
        assert np.all(spread[:, 0] < 1e-10)


def test_away_from_folds_tubes_cover_every_level() -> None:
    found = all_levels(cubic(-0.3, 0.3), *box(-0.3, 0.3))
    assert found.complete
    for level in np.linspace(-0.3, 0.3, 301):
        here = (found.low <= level) & (level <= found.high)
        for root in roots(level):
            assert np.any(np.abs(found.x[here, 0] - root) <= found.spread[here, 0])


def test_a_region_about_a_fold_closes_the_range() -> None:
    problem = cubic(-1.0, 1.0)
    size = np.array([2.0, 2.0])
    regions = [region(problem, np.array([sign / np.sqrt(3.0), -sign * FOLD]), np.array([1.0, 0.0]), size) for sign in (-1.0, 1.0)]
    assert all(one is not None for one in regions)
    found = all_levels(problem, *box(-1.0, 1.0), regions=[one for one in regions if one is not None])
    assert found.complete and found.boxes < 500


def test_without_a_region_the_fold_itself_stays_open() -> None:
    found = all_levels(cubic(-1.0, 1.0), *box(-1.0, 1.0), max_boxes=3000)
    assert not found.complete
    levels = found.open[:, :, -1]
    for fold in (-FOLD, FOLD):
        assert np.any((levels[:, 0] <= fold + 1e-9) & (levels[:, 1] >= fold - 1e-9))


def test_a_region_away_from_the_curve_is_never_proved() -> None:
    """Along the level there is no root near 0 at 0.5, and near 0.5 at 0.9: the boxes that hold the one root hold turning slopes too."""
    problem = cubic(-1.0, 1.0)
    for x in ([0.0, 0.5], [-0.5, 0.9]):
        assert region(problem, np.array(x), np.array([0.0, 1.0]), np.array([2.0, 2.0])) is None


def test_a_region_holds_only_the_curve_that_it_was_made_for() -> None:
    """Two curves 1e-3 apart: x^2 = l and its shifted copy as one polynomial (x^2 - l)(x^2 - l - e) is no cubic; here a chain of
    folds close together: the region about one may not swallow its neighbour."""
    # -b x + x^3 with a small b has its folds 2 (b/3)^1.5 apart
    b = 1e-3
    problem = cubic(-1e-3, 1e-3, b)
    reach = 2.0 * (b / 3.0) ** 1.5
    size = np.array([1.0, 2e-3])
    here = region(problem, np.array([np.sqrt(b / 3.0), -reach]), np.array([1.0, 0.0]), size)
    assert here is not None
    found = all_levels(problem, *box(-1e-3, 1e-3), regions=[here])
    other = found.open[:, :, -1]
    # all three roots at level 0 are still accounted for: by a tube, the region's stretch or an open box
    for root in (-np.sqrt(b), 0.0, np.sqrt(b)):
        in_tube = np.any((found.low <= 0.0) & (found.high >= 0.0) & (np.abs(found.x[:, 0] - root) <= found.spread[:, 0] + 1e-15))
        along = float(here.row @ np.array([root, 0.0]))
        in_region = here.reach[0] <= along <= here.reach[1]
        in_open = np.any((other[:, 0] <= 0.0) & (other[:, 1] >= 0.0))
        assert in_tube or in_region or in_open


def test_random_cubics_lose_no_root() -> None:
    random = np.random.default_rng(11)
    for _ in range(40):
        b = float(random.uniform(-1.0, 2.0))
        problem = cubic(-1.5, 1.5, b)
        known = []
        if b > 0.0:
            reach, x = 2.0 * (b / 3.0) ** 1.5, np.sqrt(b / 3.0)
            folds = [np.array([s * x, -s * reach]) for s in (-1.0, 1.0) if reach < 1.5]
            known = [one for one in (region(problem, f, np.array([1.0, 0.0]), np.array([2.0, 3.0])) for f in folds) if one is not None]
        found = all_levels(problem, *box(-1.5, 1.5), regions=known, max_boxes=3000)
        for level in random.uniform(-1.5, 1.5, 20):
            here = (found.low <= level) & (level <= found.high)
            opened = (found.open[:, 0, -1] <= level) & (found.open[:, 1, -1] >= level)
            for root in np.roots([1.0, 0.0, -b, -level]):
                if abs(root.imag) > 1e-7:
                    continue
                x = float(root.real)
                inside = np.any(np.abs(found.x[here, 0] - x) <= found.spread[here, 0] + 1e-9)
                inside |= any(one.reach[0] <= one.row @ np.array([x, level]) <= one.reach[1] for one in known)
                inside |= bool(np.any((found.open[opened, 0, 0] <= x + 1e-9) & (found.open[opened, 1, 0] >= x - 1e-9)))
                assert inside, (b, level, x)
