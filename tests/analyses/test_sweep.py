"""The search along the sources: it passes folds, and everything it names is a solution."""

import numpy as np
import pytest
from array_systems import Kind, Row, solve, system_of

import loopsim
from loopsim.analyses.sweep import distinct, sweep
from loopsim.equations.assemble import assemble


def cubic(drive):
    """x^3 / 3 - x = drive: three solutions for |drive| < 2/3, all on one curve from drive 0."""
    return system_of([[0.0]], [drive], [Row(Kind.POLYNOMIAL, [1.0], [1.0], (-1.0, 0.0, 1 / 3))])


@pytest.mark.parametrize("drive", [0.2, -0.5, 0.6, 1.0])
def test_points_found_are_solutions_and_nothing_else(drive):
    found = sweep(cubic(drive), budget=5.0)
    exact = solve(cubic(drive)).x
    assert len(found)
    for x in found:
        assert np.min(np.abs(exact - x)) < 1e-9


def test_the_curve_passes_folds():
    """Two curves with a falling part in series (after L. O. Chua, A. Ushida 1976, from memory): the curve from no supply crosses 30 V
    three times, folding at 32.60 V and 17.43 V, before it leaves for 58.3 V, which is further than the search follows it."""
    text = """circuit pair "Two falling curves"
curve first_curve = polynomial(11.8 A/V, -10.5 A/V^2, 2.5 A/V^3)
curve second_curve = polynomial(4.56 A/V, -2.69 A/V^2, 0.43 A/V^3)
gnd -> source: 30 V -> top -- r1: 13.3 ohm -- upper -> d1: first_curve -> lower -> d2: second_curve -> gnd
"""
    from loopsim.analyses.sweep import _along_sources

    circuit = loopsim.parse(text)
    system = assemble(circuit)
    crossed = distinct(np.array(_along_sources(system, np.inf)).reshape(-1, system.n))
    upper, lower = (crossed[:, system.index["net", net]] for net in ("upper", "lower"))
    assert np.sort(upper - lower) == pytest.approx([0.19979059, 0.21985457, 0.22826685], abs=1e-7)


def test_without_time_it_finds_nothing_and_says_so():
    assert sweep(cubic(0.2), budget=0.0).shape == (0, 1)


def test_repeated_points_are_one():
    points = np.array([[1.0, 2.0], [1.0 + 1e-9, 2.0], [1.0, 2.1]])
    assert distinct(points).tolist() == [[1.0, 2.0], [1.0, 2.1]]
    assert distinct(np.zeros((0, 3))).shape == (0, 3)
