"""Newton's method on many starts at once."""

import mpmath
import numpy as np
import pytest

from loopsim.numerics.newton import newton, solve

THERMAL = 0.025  # V


def diode(x):
    """5 V, 1 kohm, 10 fA: (V - x) / R = I (exp(x / v) - 1), in mA. (batch, 1)."""
    return (x - 5.0) + 1e-11 * np.expm1(x / THERMAL)


def diode_slope(x):
    return (1.0 + 1e-11 / THERMAL * np.exp(x / THERMAL))[..., None]


def exact_diode():
    """Lambert W, in 40 digits."""
    with mpmath.workdps(40):
        i, v = mpmath.mpf("1e-11"), mpmath.mpf("0.025")
        return float(5 + i - v * mpmath.lambertw(i / v * mpmath.exp((5 + i) / v)))


def test_a_diode_is_solved_from_far_and_near():
    starts = np.linspace(-2.0, 1.5, 36)[:, None]
    found = newton(diode, diode_slope, starts)
    assert found.converged.all()
    assert found.x[:, 0] == pytest.approx(np.full(36, exact_diode()), rel=1e-13)
    assert found.steps < 80


def test_a_batch_equals_a_loop_of_singles():
    starts = np.linspace(-2.0, 1.5, 12)[:, None]
    together = newton(diode, diode_slope, starts)
    alone = np.concatenate([newton(diode, diode_slope, start[None]).x for start in starts])
    assert np.array_equal(together.x, alone)


def test_starts_go_to_different_roots():
    def cubic(x):
        return (x + 1.0) * x * (x - 2.0)

    def slope(x):
        return (3 * x**2 - 2 * x - 2.0)[..., None]

    found = newton(cubic, slope, np.array([[-3.0], [0.1], [5.0]]))
    assert found.converged.all()
    assert found.x[:, 0] == pytest.approx([-1.0, 0.0, 2.0], abs=1e-13)


def test_without_a_root_nothing_converges():
    found = newton(lambda x: x**2 + 1.0, lambda x: 2.0 * x[..., None], np.array([[0.3], [2.0], [0.0]]))
    assert not found.converged.any()
    assert np.isfinite(found.x).all()


def test_a_singular_start_does_not_spoil_its_neighbours():
    found = newton(lambda x: x**2 - 4.0, lambda x: 2.0 * x[..., None], np.array([[0.0], [1.0], [-9.0]]))
    assert found.converged.tolist() == [False, True, True]
    assert found.x[1:, 0] == pytest.approx([2.0, -2.0], rel=1e-14)


def test_singular_matrices_come_back_as_not_a_number():
    matrices = np.array([[[1.0, 2.0], [2.0, 4.0]], [[2.0, 0.0], [0.0, 4.0]]])
    found = solve(matrices, np.ones((2, 2)))
    assert np.isnan(found[0]).all()
    assert found[1].tolist() == [0.5, 0.25]
