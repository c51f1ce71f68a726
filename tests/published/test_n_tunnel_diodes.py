"""n tunnel diodes with a common resistor, and a cubic companion with a closed form: exact counts at every size.

K. Yamamura, H. Kawata, A. Tokue, Interval solution of nonlinear equations using linear programming, BIT 38 (1998)
186-199; formula from
memory. Counts recomputed by a reduction to one variable, repeated here. Companion: closed form derived.
"""

import itertools

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, solve, system_of, unit
from exact_roots import real_roots
from scipy.optimize import brentq

COUNTS = {1: 1, 2: 1, 3: 1, 4: 3, 5: 5, 6: 5, 7: 7, 8: 7, 9: 5, 10: 9}
FOUR = np.array(
    [
        [0.0193939652276446, 0.115314098338711, 0.234908724647729, 0.405465507484900],
        [-0.0538900176068571, 0.0289805897138180, 0.126875384957858, 1.56482091725227],
        [-0.0929371120877488, -0.0158235191197449, 0.0734101275606586, 2.22470696359225],
    ]
)
FIVE = np.array(
    [
        [-0.0141391318803280, 0.0753955744040828, 0.183971466955170, 0.328361301274558, 0.595358720025999],
        [-0.0460272739272016, 0.0380921604074876, 0.137931663098426, 0.264738092244932, 1.17087531803553],
        [-0.0844273076410338, -0.0061183705088960, 0.0848745615059998, 1.73261605154701, 0.345645471502281],
        [-0.104380092223659, -0.0288257018131794, 0.0581420343053511, 2.12583769747603, 0.298153894752277],
        [-0.112973748636655, -0.0385555366211094, 0.0467809934256332, 0.148540078091749, 2.42691538946016],
    ]
)


def diodes(n):
    """g(x_i) + sum of all x = i, g(x) = 2.5 x^3 - 10.5 x^2 + 11.8 x."""
    rows = [Row(Kind.POLYNOMIAL, unit(n, j), unit(n, j), (11.8, -10.5, 2.5)) for j in range(n)]
    return system_of(np.ones((n, n)), np.arange(1.0, n + 1), rows)


def companion(n):
    """x_i = (sum of x_j^3 + i) / (2 n)."""
    rows = [Row(Kind.POLYNOMIAL, unit(n, j), np.full(n, -0.5 / n), (0.0, 0.0, 1.0)) for j in range(n)]
    return system_of(np.eye(n), np.arange(1.0, n + 1) / (2 * n), rows)


def companion_points(n):
    """With S = sum of x_j^3: x_i = (S + i) / (2 n), where S solves one cubic."""
    with mpmath.workdps(50):
        k = mpmath.mpf(2 * n) ** 3
        sums = [mpmath.mpf(sum(i**p for i in range(1, n + 1))) for p in range(4)]
        cubic = [sums[3], 3 * sums[2] - k, 3 * sums[1], sums[0]]
        return np.array([[float((S + i) / (2 * n)) for i in range(1, n + 1)] for S in real_roots(cubic)])


def diode_points(n):
    """Every solution by the reduction: for a sum S each x_i is one of the real roots of g(x) = i - S. The branch of
    each root is
    followed by monotone pieces of g; zeros of sum(x_i) - S by brentq on a grid between the ends of the pieces."""
    top, bottom = 0.778174729794079, 2.021825270205921

    def g(x):
        return ((2.5 * x - 10.5) * x + 11.8) * x

    pieces = ((-60.0, top), (top, bottom), (bottom, 60.0))

    def root(level, piece):
        low, high = pieces[piece]
        a, b = g(low) - level, g(high) - level
        return brentq(lambda x: g(x) - level, low, high, xtol=1e-15, rtol=1e-15) if a * b <= 0 else None

    found = []

    def gap(S, choice):
        xs = [root(i - S, piece) for i, piece in zip(range(1, n + 1), choice, strict=True)]
        return None if any(x is None for x in xs) else sum(xs) - S

    levels = (g(top), g(bottom))
    for choice in itertools.product(range(3), repeat=n):
        # S must leave each level i - S inside the range of its piece
        low, high = -50.0, 50.0
        for i, piece in zip(range(1, n + 1), choice, strict=True):
            if piece in (0, 1):
                low = max(low, i - levels[0])
            if piece in (1, 2):
                high = min(high, i - levels[1])
        if low >= high:
            continue
        grid = low + (high - low) * (0.5 - 0.5 * np.cos(np.linspace(0, np.pi, 60)))
        grid[0], grid[-1] = low + 1e-12, high - 1e-12
        values = [gap(S, choice) for S in grid]
        for a, b, fa, fb in zip(grid, grid[1:], values, values[1:], strict=False):
            if fa is not None and fb is not None and fa * fb < 0:
                S = brentq(gap, a, b, args=(choice,), xtol=1e-14)
                found.append([root(i - S, piece) for i, piece in zip(range(1, n + 1), choice, strict=True)])
    return np.array(found)


@pytest.mark.parametrize("n", sorted(COUNTS))
def test_count_and_completeness(n):
    found = solve(diodes(n))
    assert found.complete
    assert len(found.x) == COUNTS[n]


@pytest.mark.parametrize("n", [1, 3, 4, 5])
def test_points_agree_with_the_reduction_to_one_variable(n):
    assert_points(solve(diodes(n)).x, diode_points(n), 1e-9)


@pytest.mark.parametrize(("n", "points"), [(4, FOUR), (5, FIVE)])
def test_tabled_points(n, points):
    assert_points(solve(diodes(n)).x, points, 1e-12)


@pytest.mark.parametrize("box", [10.0, 1e3, 1e6])
def test_the_start_box_does_not_matter(box):
    found = solve(diodes(5), box)
    assert found.complete
    assert_points(found.x, FIVE, 1e-12)


@pytest.mark.parametrize("n", [2, 5, 10, 30, pytest.param(100, marks=pytest.mark.slow)])
def test_companion_has_the_roots_of_its_cubic(n):
    found = solve(companion(n), 2.5)  # the published start box
    assert found.complete
    assert_points(found.x, companion_points(n), 1e-11)


def test_companion_of_five_has_an_exact_point():
    found = solve(companion(5), 1e3).x
    assert np.min(np.max(np.abs(found - [1.0, 1.1, 1.2, 1.3, 1.4]), axis=1)) < 1e-14
