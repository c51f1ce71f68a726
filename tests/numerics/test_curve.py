"""Following curves given as plain functions, and locating their folds."""

from collections.abc import Callable

import numpy as np
import pytest

from loopsim.numerics.curve import Curve, fold, follow

Function = Callable[[float, float], float]


class Plane:
    """F(x, l) = 0 in one unknown, with its derivatives."""

    def __init__(self, f: Function, by_x: Function, by_level: Function) -> None:
        self.f, self.by_x, self.by_level = f, by_x, by_level

    def residual(self, x: np.ndarray, level: float) -> np.ndarray:
        return np.array([self.f(float(x[0]), level)])

    def jacobian(self, x: np.ndarray, level: float) -> np.ndarray:
        return np.array([[self.by_x(float(x[0]), level)]])

    def slope(self, x: np.ndarray, level: float) -> np.ndarray:
        return np.array([self.by_level(float(x[0]), level)])


ONE = np.ones(2)


def followed(plane: Plane, x: float, level: float, toward: float, low: float, high: float) -> Curve:
    return follow(plane, np.array([x]), level, toward, low, high, ONE, np.inf)


def test_a_circle_comes_back_to_its_start_and_every_point_lies_on_it() -> None:
    circle = Plane(lambda x, l: x * x + l * l - 1.0, lambda x, l: 2.0 * x, lambda x, l: 2.0 * l)
    curve = followed(circle, 1.0, 0.0, 1.0, -2.0, 2.0)
    assert curve.end == "closed"
    assert np.max(np.abs(curve.x[:, 0] ** 2 + curve.level**2 - 1.0)) < 1e-10
    assert curve.length[-1] == pytest.approx(2.0 * np.pi, rel=1e-2)  # chords are shorter than the arc
    assert curve.level.max() == pytest.approx(1.0, abs=1e-2) and curve.level.min() == pytest.approx(-1.0, abs=1e-2)


@pytest.mark.parametrize("gap", [1e-1, 1e-2, 1e-3, 1e-4])
def test_a_curve_is_not_left_for_its_near_neighbour(gap: float) -> None:
    # x^2 = l^2 + gap^2: two branches that come within 2 gap of each other at l = 0
    hyperbola = Plane(lambda x, l: x * x - l * l - gap * gap, lambda x, l: 2.0 * x, lambda x, l: -2.0 * l)
    for sign in (1.0, -1.0):
        start = sign * np.sqrt(1.0 + gap * gap)
        curve = followed(hyperbola, start, -1.0, 1.0, -1.0, 1.0)
        assert curve.end == "high"
        assert np.all(sign * curve.x[:, 0] > 0.0)


def test_a_crossing_is_gone_straight_through() -> None:
    # x (x^2 - l) = 0: the line x = 0 meets the parabola at 0 (pitchfork, textbook)
    fork = Plane(lambda x, l: x * (x * x - l), lambda x, l: 3.0 * x * x - l, lambda x, l: -x)
    curve = followed(fork, 0.0, -1.0, 1.0, -1.0, 1.0)
    assert curve.end == "high" and np.max(np.abs(curve.x)) < 1e-9
    parabola = followed(fork, 1.0, 1.0, -1.0, -1.0, 1.0)
    assert parabola.end == "high" and parabola.x[-1, 0] < 0.0


@pytest.mark.parametrize("b", [1e-4, 1e-3, 1e-2])
def test_a_narrow_pair_of_turns_on_a_steep_stretch_shows_in_the_points(b: float) -> None:
    # l = x^3 - b x turns at x = -+sqrt(b/3) (textbook cusp); between, l falls by 4 (b/3)^1.5, down to 8e-7
    cusp = Plane(lambda x, l: l + b * x - x**3, lambda x, l: b - 3.0 * x * x, lambda x, l: 1.0)
    curve = followed(cusp, -1.1, -(1.1**3) + 1.1 * b, 1.0, -1.4, 1.2)
    x = curve.x[np.flatnonzero(np.diff(np.sign(np.diff(curve.level)))) + 1, 0]
    assert x == pytest.approx([-np.sqrt(b / 3), np.sqrt(b / 3)], abs=np.sqrt(b))


@pytest.mark.parametrize("steepness", [1e1, 1e3, 1e5])
def test_a_steep_corner_is_followed(steepness: float) -> None:
    # x = tanh(steepness l): an output between its limits
    step = Plane(
        lambda x, l: x - np.tanh(steepness * l), lambda x, l: 1.0, lambda x, l: -steepness / np.cosh(min(abs(steepness * l), 300.0)) ** 2
    )
    curve = followed(step, np.tanh(-steepness), -1.0, 1.0, -1.0, 1.0)
    assert curve.end == "high" and curve.x[-1, 0] == pytest.approx(np.tanh(steepness * curve.level[-1]), abs=1e-9)
    assert np.all(np.diff(curve.level) > 0.0)


def test_a_fold_is_located_to_the_last_digits_from_a_point_near_it() -> None:
    # l = x^3 - x turns at x = -1/sqrt 3 with l = 2 / 3^1.5, textbook
    cubic = Plane(lambda x, l: x**3 - x - l, lambda x, l: 3.0 * x * x - 1.0, lambda x, l: -1.0)
    found = fold(
        cubic,
        lambda x, level, v: np.array([[6.0 * x[0] * v[0]]]),
        lambda x, level, v: np.zeros(1),
        np.array([-0.5]), 0.37, np.array([1.0]), ONE,
    )  # fmt: skip
    assert found is not None
    assert found.level == pytest.approx(2.0 / 3.0**1.5, rel=1e-14) and found.x[0] == pytest.approx(-1.0 / np.sqrt(3.0), rel=1e-7)
    assert found.precision < 1e-10


def test_where_there_is_no_fold_none_is_located() -> None:
    line = Plane(lambda x, l: x - l, lambda x, l: 1.0, lambda x, l: -1.0)
    nothing = fold(line, lambda x, l, v: np.zeros((1, 1)), lambda x, l, v: np.zeros(1), np.array([0.2]), 0.2, np.array([1.0]), ONE)
    assert nothing is None
