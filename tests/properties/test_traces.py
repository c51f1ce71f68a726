"""Characteristics of random circuits whose states are the real roots of one polynomial: what is called complete over the range is held
against the roots at values that no station meets.

Two random falling curves in series behind a resistor: E - R g1(v1) - v1 = v2 and g1(v1) = g2(v2), one polynomial of degree 9 in v1 for
each supply E (the elimination of the two-tunnel-diode problem: L. O. Chua, A. Ushida, Int. J. Circuit Theory Appl. 4 (1976)).
"""

import mpmath
import numpy as np
import pytest
from exact_roots import product, real_roots, value

import loopsim

TOP = 60.0  # V
TRIED = 12  # supplies at which roots are counted


def coefficients(random: np.random.Generator) -> tuple[float, float, float]:
    """a1 v + a2 v^2 + a3 v^3 that rises, falls and rises between 0 and some volts [mA/V, ...]."""
    top, bottom = np.sort(random.uniform(0.4, 4.0, 2))
    size = random.uniform(0.5, 4.0)
    # slope 3 size (v - top)(v - bottom)
    return round(3 * size * top * bottom, 6), round(-1.5 * size * (top + bottom), 6), round(size, 6)


def circuit(first: tuple[float, float, float], second: tuple[float, float, float], ohms: float) -> loopsim.Circuit:
    def polynomial(a: tuple[float, float, float]) -> str:
        return f"polynomial({a[0]} mA/V, {a[1]} mA/V^2, {a[2]} mA/V^3)"

    return loopsim.parse(f"""circuit chance "two random curves"
let supply = 0 V in 0 V .. {TOP:g} V
curve one = {polynomial(first)}
curve two = {polynomial(second)}
gnd -> source: supply -> feed -- load: {ohms} kohm -- upper -> d1: one -> lower -> d2: two -> gnd
upper -- c1: 10 pF -- lower -- c2: 10 pF -- gnd
""")


def exact_count(first: tuple[float, float, float], second: tuple[float, float, float], ohms: float, supply: float) -> int:
    """How many real v1 there are, in extended precision."""
    with mpmath.workdps(50):
        R = mpmath.mpf(str(ohms))
        g1 = [mpmath.mpf(0), *(mpmath.mpf(str(a)) for a in first)]
        v2 = [mpmath.mpf(supply), -R * g1[1] - 1, -R * g1[2], -R * g1[3]]
        square = product(v2, v2)
        total = [mpmath.mpf(str(second[2])) * a for a in product(square, v2)]
        for factor, terms in ((second[1], square), (second[0], v2), (-1, g1)):
            for i, a in enumerate(terms):
                total[i] += mpmath.mpf(str(factor)) * a
        roots = real_roots(total)
        assert all(abs(value(total, r)) < 1e-10 * (1 + abs(r)) ** 9 * max(abs(a) for a in total) for r in roots)
    return len(roots)


def compared(seed: int) -> tuple[bool, int]:
    """(whether the range was called complete, most states anywhere); every count has to fit where it was."""
    random = np.random.default_rng([77, seed])
    first, second, ohms = coefficients(random), coefficients(random), round(float(random.uniform(1.0, 20.0)), 4)
    curve = circuit(first, second, ohms).trace("supply", budget=120.0, range_budget=100.0)
    most = 0
    for supply in random.uniform(0.0, TOP, TRIED).tolist():
        crossed = sum(int(np.count_nonzero(np.diff(np.sign(branch.values - supply)))) for branch in curve.branches)
        count = exact_count(first, second, ohms, supply)
        most = max(most, count)
        if curve.over_range:
            assert crossed == count, (seed, supply)
        else:
            assert crossed <= count, (seed, supply)
    return curve.over_range, most


@pytest.mark.parametrize("seed", range(3))
def test_a_range_called_complete_has_every_root(seed: int) -> None:
    complete, _ = compared(seed)
    assert complete


@pytest.mark.slow
@pytest.mark.parametrize("block", range(6))
def test_sixty_ranges_called_complete_have_every_root(block: int) -> None:
    found = [compared(seed) for seed in range(100 + 10 * block, 110 + 10 * block)]
    assert sum(complete for complete, _ in found) >= 9
    assert max(most for _, most in found) >= 3
