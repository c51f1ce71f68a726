"""Each scalar nonlinearity against long arithmetic, and its slope and curvature against derivatives taken there."""

import mpmath
import numpy as np
import pytest

from loopsim.devices.phi import CURVATURE, EXPONENT_LIMIT, SLOPE, VALUE, Kind

DIGITS = 700  # the curvature of tanh at 300 is 1e-260, and a difference quotient must still see it
CUBIC = (11.8, -10.5, 2.5)
ROOF = (1.0, 2.0, -1.0, -3.0, 0.5, 4.0, 2.0, 0.25)  # value 1 at 0, slope 2, then three corners


def _softplus(w):
    return mpmath.log1p(mpmath.exp(w))


def _exponential(w):
    limit = mpmath.mpf(EXPONENT_LIMIT)
    return mpmath.expm1(w) if w <= limit else mpmath.expm1(limit) + mpmath.exp(limit) * (w - limit)


def _polynomial(w):
    return sum(mpmath.mpf(a) * w ** (j + 1) for j, a in enumerate(CUBIC))


def _points(w):
    total = mpmath.mpf(ROOF[0]) + ROOF[1] * w
    for corner, change in zip(ROOF[2::2], ROOF[3::2], strict=True):
        total += change * (max(w - corner, 0) - max(-corner, 0))
    return total


def _reciprocal(w):
    return 1 / w if abs(w) > 1 else 2 * w - w**3


LAWS = {
    Kind.EXPONENTIAL: (_exponential, ()),
    Kind.SATURATION: (mpmath.tanh, ()),
    Kind.SOFTPLUS: (_softplus, ()),
    Kind.CHARGE_SHEET: (lambda w: _softplus(w / 2) ** 2, ()),
    Kind.ARCTANGENT: (mpmath.atan, ()),
    Kind.POLYNOMIAL: (_polynomial, CUBIC),
    Kind.POINTS: (_points, ROOF),
    Kind.RECIPROCAL: (_reciprocal, ()),
}
# no corner of ROOF and not |w| = 1, where second derivatives have two sides
PLACES = [
    -300.0,
    -45.7,
    -19.3,
    -3.25,
    -1.2,
    -0.3,
    -1e-9,
    1e-12,
    0.03,
    0.7,
    1.9,
    6.5,
    21.0,
    119.0,
    120.5,
    400.0,
]


@pytest.mark.parametrize("kind", list(Kind), ids=lambda kind: kind.name)
def test_value_slope_and_curvature_agree_with_long_arithmetic(kind):
    law, parameters = LAWS[kind]
    numbers = [np.float64(p) for p in parameters]
    for w in PLACES:
        with mpmath.workdps(DIGITS):
            place, h = mpmath.mpf(w), mpmath.mpf(10) ** -120
            before, here, after = law(place - h), law(place), law(place + h)
            exact = [here, (after - before) / (2 * h), (after - 2 * here + before) / h**2]
        for table, wanted in zip((VALUE, SLOPE, CURVATURE), exact, strict=True):
            # the terms of a sum may cancel: the error is measured against their size
            size = (
                sum(abs(p) for p in parameters) * max(1.0, abs(w)) ** max(1, len(parameters))
                if parameters
                else 0.0
            )
            found = float(table[kind](np.float64(w), numbers))
            assert found == pytest.approx(float(wanted), rel=4e-14, abs=4e-16 * size + 1e-300), (kind, w)


@pytest.mark.parametrize("kind", list(Kind), ids=lambda kind: kind.name)
def test_slope_is_the_limit_of_differences(kind):
    _, parameters = LAWS[kind]
    numbers = [np.float64(p) for p in parameters]
    for w in (-2.6, -0.4, 0.9, 1.7, 3.3):
        h = 1e-5
        for value, slope in ((VALUE, SLOPE), (SLOPE, CURVATURE)):
            rise = (value[kind](w + h, numbers) - value[kind](w - h, numbers)) / (2 * h)
            assert slope[kind](w, numbers) == pytest.approx(rise, rel=1e-7, abs=1e-7)


def test_the_exponential_goes_on_straight_beyond_its_limit():
    top = VALUE[Kind.EXPONENTIAL](EXPONENT_LIMIT, ())
    slope = SLOPE[Kind.EXPONENTIAL](EXPONENT_LIMIT + 50.0, ())
    assert slope == SLOPE[Kind.EXPONENTIAL](EXPONENT_LIMIT, ())
    assert VALUE[Kind.EXPONENTIAL](EXPONENT_LIMIT + 50.0, ()) == pytest.approx(top + 50.0 * slope, rel=1e-15)


def test_arrays_and_single_numbers_give_the_same():
    w = np.linspace(-7.3, 8.1, 41)
    for kind in Kind:
        _, parameters = LAWS[kind]
        for table in (VALUE, SLOPE, CURVATURE):
            rows = table[kind](w, [np.full(41, p) for p in parameters])
            singles = [float(table[kind](v, [np.float64(p) for p in parameters])) for v in w]
            assert np.allclose(rows, singles, rtol=1e-15, atol=0.0)
