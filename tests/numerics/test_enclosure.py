"""Interval arithmetic holds the exact answer, in rational numbers, over many decades and through cancellation; and is not needlessly
wide, which is tested apart."""

from fractions import Fraction
from itertools import product

import numpy as np
import pytest

from loopsim.numerics import enclosure

FEW, MANY = 400, 10_000


def numbers(random, shape, decades=100):
    """Doubles of either sign over +/- `decades` decades, with zeros, ones and whole powers of two among them."""
    found = random.choice([-1.0, 1.0], shape) * 10 ** random.uniform(-decades, decades, shape)
    found = np.where(random.random(shape) < 0.4, random.uniform(-3, 3, shape), found)
    special = random.choice([0.0, 1.0, -1.0, 2.0**60, -(2.0**-60), 0.1], shape)
    return np.where(random.random(shape) < 0.1, special, found)


def intervals(random, count, decades=100):
    """(low, high): from single points and neighbours to intervals over zero."""
    low = numbers(random, count, decades)
    width = np.abs(low) * 10 ** random.uniform(-16, 1, count)
    shape = random.random(count)
    high = np.where(shape < 0.2, low, np.where(shape < 0.7, low + width, numbers(random, count, decades)))
    return np.minimum(low, high), np.maximum(low, high)


def sizes(check):
    """A few with every run, ten thousand in the slow set."""
    return pytest.mark.parametrize("count", [FEW, pytest.param(MANY, marks=pytest.mark.slow)])(check)


def holds(low, high, exact):
    return Fraction(float(low)) <= exact <= Fraction(float(high))


@sizes
def test_down_and_up_pass_two_roundings(count):
    x = numbers(np.random.default_rng(1), count)
    for rounded, away in ((enclosure.down(x), -np.inf), (enclosure.up(x), np.inf)):
        # two roundings to nearest, half a unit in the last place each, are one step to the next double
        assert np.all((rounded - np.nextafter(x, away)) * np.sign(away) >= 0)
        assert np.all(np.abs(rounded - x) <= 5 * 2.0**-53 * np.abs(x) + 2 * enclosure.TINY)


@sizes
def test_a_middle_lies_between_and_the_radius_reaches_both_ends(count):
    low, high = intervals(np.random.default_rng(2), count)
    centre = enclosure.middle(low, high)
    reach = enclosure.radius(low, high, centre)
    assert np.all((low <= centre) & (centre <= high))
    for a, b, m, r in zip(low, high, centre, reach, strict=True):
        assert Fraction(float(r)) >= max(Fraction(float(b)) - Fraction(float(m)), Fraction(float(m)) - Fraction(float(a)))
    assert np.all(reach <= 0.5 * (high - low) + 2.0**-51 * np.maximum(np.abs(low), np.abs(high)) + 2 * enclosure.TINY)


@sizes
def test_products_and_quotients_hold_every_corner(count):
    random = np.random.default_rng(3)
    a_low, a_high = intervals(random, count, 60)
    b_low, b_high = intervals(random, count, 60)
    low, high = enclosure.multiply(a_low, a_high, b_low, b_high)
    q_low, q_high = enclosure.divide_clear(a_low, a_high, b_low, b_high)
    s_low, s_high = enclosure.scale(a_low, b_low, b_high)
    for k in range(count):
        a, b = [Fraction(float(v[k])) for v in (a_low, a_high)], [Fraction(float(v[k])) for v in (b_low, b_high)]
        corners = [x * y for x, y in product(a, b)]
        assert holds(low[k], high[k], min(corners))
        assert holds(low[k], high[k], max(corners))
        scaled = [a[0] * y for y in b]
        assert holds(s_low[k], s_high[k], min(scaled))
        assert holds(s_low[k], s_high[k], max(scaled))
        if b[0] <= 0 <= b[1]:
            assert (q_low[k], q_high[k]) == (-enclosure.HUGE, enclosure.HUGE)
            continue
        corners = [x / y for x, y in product(a, b)]
        assert holds(q_low[k], q_high[k], min(corners))
        assert holds(q_low[k], q_high[k], max(corners))


def test_products_are_tight():
    random = np.random.default_rng(4)
    a_low, a_high = intervals(random, FEW, 30)
    b_low, b_high = intervals(random, FEW, 30)
    low, high = enclosure.multiply(a_low, a_high, b_low, b_high)
    corners = np.array([x * y for x, y in product((a_low, a_high), (b_low, b_high))])
    slack = 8 * 2.0**-53 * np.max(np.abs(corners), axis=0) + 2 * enclosure.TINY
    assert np.all(low >= corners.min(axis=0) - slack)
    assert np.all(high <= corners.max(axis=0) + slack)


def images(random, count):
    """Batches of (matrix, centre, spread) with sums that cancel, 14 decades of entries, and columns of nothing."""
    for _ in range(count // 8):
        r, n = int(random.integers(1, 5)), int(random.integers(1, 9))
        matrix = random.normal(size=(8, r, n)) * 10 ** random.uniform(-7, 7, (8, r, n))
        centre = random.normal(size=(8, n)) * 10 ** random.uniform(-6, 6, (8, n))
        spread = np.abs(centre) * 10 ** random.uniform(-17, 0, (8, n)) * (random.random((8, n)) < 0.7)
        if n > 1:
            # the last term takes away nearly all of the sum of the others
            rest = (matrix[:, 0, :-1] * centre[:, :-1]).sum(axis=1)
            matrix[:, 0, -1] = -rest / np.where(centre[:, -1] == 0.0, 1.0, centre[:, -1])
        yield matrix, centre, spread


@sizes
def test_a_linear_image_holds_the_exact_one_however_its_terms_cancel(count):
    tight = []
    for matrix, centre, spread in images(np.random.default_rng(5), count):
        value, reach = enclosure.linear_image(matrix, centre, spread)
        for k in range(len(matrix)):
            for i in range(matrix.shape[1]):
                row = [Fraction(float(m)) for m in matrix[k, i]]
                exact = sum(m * Fraction(float(c)) for m, c in zip(row, centre[k], strict=True))
                width = sum(abs(m) * Fraction(float(s)) for m, s in zip(row, spread[k], strict=True))
                assert abs(Fraction(float(value[k, i])) - exact) + width <= Fraction(float(reach[k, i]))
                size = float(sum(abs(m) * abs(Fraction(float(c))) for m, c in zip(row, centre[k], strict=True)))
                tight.append((float(reach[k, i]) - float(width)) / (size * (len(row) + 6) * 2.0**-53 + 1e-280))
    # the slack is what rounding of such a sum may cost, with the widths' own share
    assert max(tight) < 6.0


def test_what_underflows_is_still_held():
    low, high = enclosure.multiply(*(np.array([v]) for v in (1e-200, 2e-200, -1e-180, 1e-180)))
    assert low[0] < 0 < high[0]
    value, reach = enclosure.linear_image(np.full((1, 1, 2), 1e-200), np.full((1, 2), 1e-150), np.zeros((1, 2)))
    assert Fraction(2) / 10**350 <= Fraction(float(value[0, 0] + reach[0, 0]))
