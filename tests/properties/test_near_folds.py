"""Two points that nearly touch, at every distance down to less than a unit in the last place: the proof may say that it
cannot tell, but a complete list is right. Counts are exact: rational arithmetic on the doubles as given, or 80 digits."""

from dataclasses import replace
from fractions import Fraction

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, solve, system_of, unit

SEEDS = range(60)


def cubic_count(coefficients):
    """Number of real roots of a0 + a1 x + a2 x^2 + a3 x^3 by its discriminant, exactly; None for a double root."""
    d, c, b, a = (Fraction(float(x)) for x in coefficients)
    discriminant = 18 * a * b * c * d - 4 * b**3 * d + b**2 * c**2 - 4 * a * c**3 - 27 * a**2 * d**2
    return None if discriminant == 0 else 3 if discriminant > 0 else 1


def touching_cubic(seed):
    """(e, coefficients) of s ((x - a)^2 - e) (x - b), e of either sign from 1e-22 to 1e-2, s over 30 decades."""
    random = np.random.default_rng([41, seed])
    a, b = random.uniform(-3, 3, 2)
    e = random.choice([-1.0, 1.0]) * 10 ** random.uniform(-22, -2)
    scale = 10 ** random.uniform(-15, 15)
    return e, scale * np.convolve([a * a - e, -2 * a, 1.0], [-b, 1.0])


@pytest.mark.parametrize("seed", SEEDS)
def test_cubics_with_roots_that_nearly_touch(seed):
    _, coefficients = touching_cubic(seed)
    row = Row(Kind.POLYNOMIAL, [1.0], [1.0], tuple(coefficients[1:]))
    found = solve(system_of([[0.0]], [-coefficients[0]], [row]), box=10 ** np.random.default_rng(seed).uniform(1, 6), budget=10.0)
    count = cubic_count(coefficients)
    if found.complete:
        assert len(found.x) == count
    assert count is None or len(found.x) <= count


def test_clear_distances_are_decided():
    decided = 0
    for seed in range(200):
        e, coefficients = touching_cubic(seed)
        if abs(e) < 1e-9:
            continue
        row = Row(Kind.POLYNOMIAL, [1.0], [1.0], tuple(coefficients[1:]))
        found = solve(system_of([[0.0]], [-coefficients[0]], [row]), budget=10.0)
        assert found.complete
        assert len(found.x) == cubic_count(coefficients)
        decided += 1
    assert decided > 50


@pytest.mark.parametrize("seed", SEEDS)
def test_saturating_latch_near_its_fold(seed):
    random = np.random.default_rng([42, seed])
    gain = random.uniform(1.05, 50.0)
    with mpmath.workdps(80):
        a = mpmath.mpf(gain)
        fold = mpmath.sqrt(1 - 1 / a) - mpmath.acosh(mpmath.sqrt(a)) / a
        drive = float(fold * (1 + mpmath.mpf(random.choice([-1.0, 1.0]) * 10 ** random.uniform(-18, -3))))
        count = 3 if drive < fold else 1
    found = solve(system_of([[1.0]], [drive], [Row(Kind.SATURATION, [gain], [-1.0])]), budget=10.0)
    if found.complete:
        assert len(found.x) == count
    assert len(found.x) <= count


@pytest.mark.parametrize("seed", SEEDS)
def test_exponential_against_a_falling_line_near_its_fold(seed):
    """e^x - 1 = g x + s has two solutions, one or none: the line g x + s touches the curve at x = ln g, s = g - 1 - g ln g."""
    random = np.random.default_rng([43, seed])
    slope = 10 ** random.uniform(-3, 6)
    with mpmath.workdps(80):
        g = mpmath.mpf(slope)
        touch = g - 1 - g * mpmath.log(g)
        offset = float(touch + (1 + abs(touch)) * mpmath.mpf(random.choice([-1.0, 1.0]) * 10 ** random.uniform(-18, -2)))
        count = 2 if offset > touch else 0
    found = solve(system_of([[-slope]], [offset], [Row(Kind.EXPONENTIAL, [1.0], [1.0])]), box=1e6, budget=10.0)
    inside = count if count == 0 or abs(offset / slope) < 1e5 else None
    if found.complete and inside is not None:
        assert len(found.x) == inside
    assert len(found.x) <= 2


@pytest.mark.parametrize("seed", range(40))
def test_products_have_the_roots_of_both_factors(seed):
    """p(w) (1 + x / k) = 0 in a mixed system: the roots of p, and x = -k with any root of the other equation."""
    random = np.random.default_rng([44, seed])
    roots = np.sort(random.uniform(-3, 3, 3))
    if np.min(np.diff(roots)) < 0.05:
        roots += np.array([-0.1, 0.0, 0.1])
    k, tie = random.uniform(4, 8), random.uniform(0.2, 2.0)
    p = np.convolve(np.convolve([-roots[0], 1], [-roots[1], 1]), [-roots[2], 1])
    # x2 = tie x1; p(x1) (1 + x2 / k) = 0. The constant of p times (1 + x2 / k) is linear
    row = Row(Kind.POLYNOMIAL, unit(2, 0), unit(2, 0), tuple(p[1:]))
    G = np.array([[0.0, p[0] / k], [-tie, 1.0]])
    plain = system_of(G, [-p[0], 0.0], [row])
    system = replace(plain, V=np.array([[0.0, 1 / k]]))
    expected = np.sort([*roots, -k / tie])
    found = solve(system, box=10 ** random.uniform(2, 6), budget=20.0)
    assert found.complete
    assert len(found.x) == 4
    assert np.allclose(np.sort(found.x[:, 0]), expected, rtol=1e-6, atol=1e-6)
