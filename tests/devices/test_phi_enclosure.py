"""What the proof is told about each scalar nonlinearity holds the truth: range, slope range, chord error, inverse, sampled
against ball arithmetic of 256 bits (python-flint). Tightness is tested apart."""

import numpy as np
import pytest
from flint import arb, ctx

from loopsim.devices import phi_enclosure
from loopsim.devices.phi import EXPONENT_LIMIT, VALUE, Kind

BITS = 256
SAMPLES = 6  # points looked at within each interval, its ends among them
MONOTONE = (Kind.EXPONENTIAL, Kind.SATURATION, Kind.SOFTPLUS, Kind.CHARGE_SHEET, Kind.ARCTANGENT)


@pytest.fixture(autouse=True)
def _precise():
    before = ctx.prec
    ctx.prec = BITS
    yield
    ctx.prec = before


def _softplus(w):
    return w.exp().log1p() if w < 0 else w + (-w).exp().log1p()


def _logistic(w):
    return 1 / (1 + (-w).exp()) if w > 0 else w.exp() / (1 + w.exp())


def exact(kind, w, p):
    """(phi, phi') at the double w, as balls far thinner than a double's spacing. At a corner of POINTS the slope to the right."""
    x = arb(float(w))
    match kind:
        case Kind.EXPONENTIAL:
            limit = arb(EXPONENT_LIMIT)
            if w <= EXPONENT_LIMIT:
                return x.expm1(), x.exp()
            return limit.expm1() + limit.exp() * (x - limit), limit.exp()
        case Kind.SATURATION:
            e = (-2 * abs(x)).exp()
            return x.tanh(), 4 * e / (1 + e) ** 2
        case Kind.SOFTPLUS:
            return _softplus(x), _logistic(x)
        case Kind.CHARGE_SHEET:
            s = _softplus(x / 2)
            return s * s, s * _logistic(x / 2)
        case Kind.ARCTANGENT:
            return x.atan(), 1 / (1 + x * x)
        case Kind.POLYNOMIAL:
            value, slope = arb(0), arb(0)
            for j in range(len(p) - 1, -1, -1):
                slope = slope * x + (j + 1) * arb(float(p[j]))
                value = (value + arb(float(p[j]))) * x
            return value, slope
        case Kind.POINTS:
            value, slope = arb(float(p[0])) + arb(float(p[1])) * x, arb(float(p[1]))
            for corner, change in zip(p[2::2], p[3::2], strict=True):
                above, base = max(x - arb(float(corner)), arb(0)), max(-float(corner), 0.0)
                value += arb(float(change)) * (above - arb(base))
                slope += arb(float(change)) if w >= corner else arb(0)
            return value, slope
        case Kind.RECIPROCAL:
            return (1 / x, -1 / (x * x)) if abs(w) > 1 else (2 * x - x**3, 2 - 3 * x * x)
    raise AssertionError(kind)


def magnitudes(random, shape):
    """Numbers of either sign over many decades, with zeros and the special places of the functions among them."""
    found = random.choice([-1.0, 1.0], shape) * 10 ** random.uniform(-9, 6, shape)
    usual = random.random(shape)
    found = np.where(usual < 0.5, random.uniform(-5, 5, shape), found)
    found = np.where((usual > 0.5) & (usual < 0.6), random.uniform(-130, 130, shape), found)
    special = random.choice([0.0, 1.0, -1.0, EXPONENT_LIMIT, -EXPONENT_LIMIT, 0.5, 1e3, -1e3], shape)
    return np.where(usual > 0.95, special, found)


def parameters(random, kind, count):
    """(p, count)."""
    if kind == Kind.POLYNOMIAL:
        degree = int(random.integers(1, 6))
        return random.normal(size=(degree, count)) * 10 ** random.uniform(-6, 3, (degree, 1))
    if kind == Kind.POINTS:
        corners = np.sort(random.uniform(-4, 4, (3, count)), axis=0)
        found = np.zeros((8, count))
        found[:2] = random.normal(size=(2, count))
        found[2::2], found[3::2] = corners, random.normal(size=(3, count)) * 10 ** random.uniform(-2, 3)
        return found
    return np.zeros((1, count))


def intervals(random, count):
    """(low, high), (count,) each: wide, narrow, and single points."""
    middle, shape = magnitudes(random, count), random.random(count)
    width = np.where(shape < 0.4, 10 ** random.uniform(-2, 3, count), np.abs(middle) * 10 ** random.uniform(-15, 0, count))
    width = np.where(shape > 0.95, 0.0, width)
    other = np.where(random.random(count) < 0.3, magnitudes(random, count), middle + width)
    return np.minimum(middle, other), np.maximum(middle, other)


def points_of(random, low, high):
    """(SAMPLES, count) doubles in [low, high], the ends among them."""
    share = random.random((SAMPLES, len(low)))
    share[0], share[1] = 0.0, 1.0
    found = np.clip(low + (high - low) * share, low, high)
    found[1] = high
    return found


def within(ball, low, high):
    """Whether the ball certainly lies in [low, high]; infinite bounds hold everything."""
    return (not np.isfinite(low) or ball >= arb(float(low))) and (not np.isfinite(high) or ball <= arb(float(high)))


def check(kind, seed, count):
    random = np.random.default_rng([51, int(kind), seed])
    p = parameters(random, kind, count)
    low, high = intervals(random, count)
    w = points_of(random, low, high)
    with np.errstate(all="ignore"):
        bottom, top = phi_enclosure.bounds(kind, low, high, p)
        s_low, s_high = phi_enclosure.slope_bounds(kind, low, high, p)
        a, e_low, e_high = phi_enclosure.chord(kind, low, high, p)
        # a window of values that holds some of the samples
        values = VALUE[kind](w, p)
        y_low = np.minimum(values[2], values[3]) - random.choice([0.0, 1e-12, 0.1], count)
        y_high = np.maximum(values[2], values[3]) + random.choice([0.0, 1e-12, 0.1], count)
        w_low, w_high = phi_enclosure.inverse(kind, low, high, y_low, y_high, p)
    for k in range(count):
        for x in w[:, k]:
            value, slope = exact(kind, x, p[:, k])
            place = f"{kind.name} at {x!r} in [{low[k]!r}, {high[k]!r}], parameters {p[:, k]!r}"
            assert within(value, bottom[k], top[k]), f"range: {place}"
            assert within(slope, s_low[k], s_high[k]), f"slope range: {place}"
            assert within(value - arb(float(a[k])) * arb(float(x)), e_low[k], e_high[k]), f"chord: {place}"
            if value >= arb(float(y_low[k])) and value <= arb(float(y_high[k])):
                assert w_low[k] <= x <= w_high[k], f"inverse: {place}"


@pytest.mark.parametrize("kind", list(Kind), ids=lambda kind: kind.name.lower())
def test_the_truth_lies_within(kind):
    check(kind, 0, 150)


@pytest.mark.slow
@pytest.mark.parametrize("kind", list(Kind), ids=lambda kind: kind.name.lower())
def test_the_truth_lies_within_at_ten_thousand_points(kind):
    for seed in range(1, 11):
        check(kind, seed, 180)


@pytest.mark.parametrize("kind", MONOTONE, ids=lambda kind: kind.name.lower())
def test_ranges_of_increasing_functions_are_tight(kind):
    """Within 1e-14 of the values at the ends."""
    random = np.random.default_rng(52)
    low, high = intervals(random, 200)
    bottom, top = phi_enclosure.bounds(kind, low, high, np.zeros((1, 200)))
    for found, end in ((bottom, low), (top, high)):
        true = VALUE[kind](end, ())
        assert np.all(np.abs(found - true) <= 1e-14 * np.abs(true) + 1e-290)


@pytest.mark.parametrize("kind", [Kind.EXPONENTIAL, Kind.SATURATION, Kind.CHARGE_SHEET, Kind.RECIPROCAL, Kind.POLYNOMIAL],
                         ids=lambda kind: kind.name.lower())  # fmt: skip
def test_chord_errors_are_tight(kind):
    """The error band of the chord is at most 1 % wider than what 2,000 samples show, over intervals of moderate size."""
    random = np.random.default_rng(53)
    low = random.uniform(-4, 3, 60)
    high = low + 10 ** random.uniform(-1, 0.7, 60)
    p = np.array([[11.8], [-10.5], [2.5]]) * np.ones(60) if kind == Kind.POLYNOMIAL else np.zeros((1, 60))
    a, e_low, e_high = phi_enclosure.chord(kind, low, high, p)
    grid = low + (high - low) * np.linspace(0, 1, 2000)[:, None]
    seen = VALUE[kind](grid, p) - a * grid
    band = seen.max(axis=0) - seen.min(axis=0)
    size = np.max(np.abs(seen), axis=0)
    assert np.all(e_high - e_low <= 1.01 * band + 1e-9 * size)


@pytest.mark.parametrize("kind", MONOTONE, ids=lambda kind: kind.name.lower())
def test_inverses_of_increasing_functions_are_tight(kind):
    """A window of values between those at two points comes back as the interval between the points. (Where the function is nearly
    flat, as tanh beyond 3, the inverse may give up: a rounded value then says little about its place.)"""
    random = np.random.default_rng(54)
    w_low = random.uniform(-2.5, 1.5, 100)
    w_high = w_low + random.uniform(0.1, 1, 100)
    none = np.zeros((1, 100))
    y_low, y_high = VALUE[kind](w_low, none), VALUE[kind](w_high, none)
    found_low, found_high = phi_enclosure.inverse(kind, np.full(100, -50.0), np.full(100, 50.0), y_low, y_high, none)
    assert np.allclose(found_low, w_low, atol=1e-9)
    assert np.allclose(found_high, w_high, atol=1e-9)
