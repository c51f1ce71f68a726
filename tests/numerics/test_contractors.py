"""What the steps of the proof keep and what they drop: a known solution stays in every box that holds it, through each contractor, exactly
in 60 digits; boxes get narrow where a closed form says how narrow; a certificate holds the point, and one solution only."""

from fractions import Fraction

import numpy as np
import pytest
from mpmath import mp, mpf

from loopsim.devices.phi import EXPONENT_LIMIT, Kind
from loopsim.devices.phi_rows import rows_of
from loopsim.numerics.balances import nodal
from loopsim.numerics.boxes import Boxes, boxes_over
from loopsim.numerics.certificate import certify, injective, newton_points
from loopsim.numerics.hull import hull
from loopsim.numerics.problem import Problem
from loopsim.numerics.prune import search, split
from loopsim.numerics.relaxation import relax

DIGITS = 60
KINDS = (Kind.EXPONENTIAL, Kind.SATURATION, Kind.SOFTPLUS, Kind.CHARGE_SHEET, Kind.ARCTANGENT, Kind.POLYNOMIAL)


@pytest.fixture(autouse=True)
def _precise():
    before = mp.dps
    mp.dps = DIGITS
    yield
    mp.dps = before


def exact(kind, w, p):
    """phi(w) in 60 digits; w: mpf."""
    match kind:
        case Kind.EXPONENTIAL:
            top = mpf(EXPONENT_LIMIT)  # continued by its tangent
            return mp.expm1(w) if w <= top else mp.expm1(top) + mp.exp(top) * (w - top)
        case Kind.SATURATION:
            return mp.tanh(w)
        case Kind.SOFTPLUS:
            return mp.log1p(mp.exp(w))
        case Kind.CHARGE_SHEET:
            return mp.log1p(mp.exp(w / 2)) ** 2
        case Kind.ARCTANGENT:
            return mp.atan(w)
        case _:
            return sum(mpf(float(a)) * w ** (j + 1) for j, a in enumerate(p))


def rational(x):
    return mpf(Fraction(float(x)).numerator) / mpf(Fraction(float(x)).denominator)


def known_case(random, products):
    """(problem, x, w, psi, u, phi): equations that hold at x for some s in [s_low, s_high], a few roundings wide."""
    n, m = int(random.integers(1, 5)), int(random.integers(1, 6))
    magnitude = 10 ** random.uniform(-3, 3)
    G = random.normal(size=(n, n)) * magnitude * (random.random((n, n)) < 0.7)
    G += np.diag(random.uniform(0.5, 2.0, n)) * magnitude
    B = random.normal(size=(n, m)) * magnitude * 10 ** random.uniform(-3, 1) * (random.random((n, m)) < 0.7)
    W = random.normal(size=(m, n)) * 10 ** random.uniform(-1, 1.5) * (random.random((m, n)) < 0.6)
    if m > 1 and random.random() < 0.5:
        W[1] = -2.0 * W[0]  # arguments that share a difference
    V = random.normal(size=(m, n)) * 0.1 * (random.random((m, 1)) < 0.4) if products else np.zeros((m, n))
    kinds = random.choice(KINDS, m)
    parameters = np.where(kinds[:, None] == Kind.POLYNOMIAL, random.normal(size=(m, 3)), 0.0)
    x = random.uniform(-2, 2, n)
    c = random.uniform(-2, 2, m)
    d = np.ones(m)
    point = [rational(v) for v in x]
    w = [rational(c[k]) + sum(rational(W[k, j]) * point[j] for j in range(n)) for k in range(m)]
    u = [rational(d[k]) + sum(rational(V[k, j]) * point[j] for j in range(n)) for k in range(m)]
    phi = [exact(int(kinds[k]), w[k], parameters[k]) for k in range(m)]
    psi = [a * b for a, b in zip(phi, u, strict=True)]
    s = [sum(rational(G[i, j]) * point[j] for j in range(n)) + sum(rational(B[i, k]) * psi[k] for k in range(m)) for i in range(n)]
    nearest = np.array([float(v) for v in s])
    problem = Problem(
        G, B, W, V, rows_of(kinds, parameters), c, c, d, d, np.nextafter(nearest, -np.inf), np.nextafter(nearest, np.inf)
    )
    return problem, x, w, psi, u, phi


def holds(problem, boxes, truth):
    """Whether the one box still holds the solution, in every column."""
    x, w, psi, u, phi = truth
    q = problem.product
    values = [rational(v) for v in x] + w + psi + [u[k] for k in q] + [phi[k] for k in q]
    return all(
        rational(low) <= value <= rational(high)
        for low, high, value in zip(boxes.low[0], boxes.high[0], values, strict=True)
    )


@pytest.mark.parametrize("products", [False, True])
@pytest.mark.parametrize("count", [60, pytest.param(1500, marks=pytest.mark.slow)])
def test_no_contractor_drops_a_solution(count, products):
    random = np.random.default_rng(11 + products)
    narrowed = 0
    for _ in range(count):
        problem, *truth = known_case(random, products)
        x = truth[0]
        size = 10 ** random.uniform(-12, 5, problem.n)
        share = np.where(random.random(problem.n) < 0.2, 0.0, random.random(problem.n))  # some stand on the end of the box
        with np.errstate(all="ignore"):
            boxes = boxes_over(problem, (x - share * size)[None], (x + (1.0 - share) * size)[None])
            assert holds(problem, boxes, truth)
            begin = boxes.high - boxes.low
            for _ in range(4):
                for step in (hull, nodal, lambda p, b: relax(p, b).boxes):
                    boxes = step(problem, boxes)
                    assert holds(problem, boxes, truth)
            narrowed += bool(np.any(boxes.high - boxes.low < 0.5 * begin))
    assert narrowed > 0.8 * count


@pytest.mark.parametrize("count", [40, pytest.param(1000, marks=pytest.mark.slow)])
def test_a_certificate_holds_the_solution_and_shares_its_region_with_no_other(count):
    random = np.random.default_rng(12)
    good = 0
    for _ in range(count):
        problem, *truth = known_case(random, False)
        x = truth[0]
        with np.errstate(all="ignore"):
            start = newton_points(problem, (x + 1e-6 * random.normal(size=problem.n))[None])
            found = certify(problem, start)
            if not found.good[0] or np.max(np.abs(found.x[0] - x)) > 1e-3:
                continue
            region = found.boxes(problem)
            if not injective(problem, region)[0]:
                continue
        good += 1
        # a few roundings of s, spread by the inverse: within the certificate for every s in its interval
        assert all(
            abs(rational(a) - rational(b)) <= rational(r) for a, b, r in zip(x, found.x[0], found.spread[0], strict=True)
        )
    assert good > 0.6 * count


def cubic(s):
    """x^3 - x = s in one unknown."""
    one = np.ones((1, 1))
    parameters = np.array([[-1.0, 0.0, 1.0]])
    rows = rows_of(np.array([Kind.POLYNOMIAL]), parameters)
    none, s = np.zeros(1), np.array([float(s)])
    return Problem(np.zeros((1, 1)), one, one, np.zeros((1, 1)), rows, none, none, np.ones(1), np.ones(1), s, s)


@pytest.mark.parametrize(
    ("low", "high", "one_to_one"),
    # x^3 - x has its extrema at +/- 1 / sqrt(3) = 0.57735: closed form
    [(-2.0, 2.0, False), (0.5, 2.0, False), (0.6, 1.2, True), (-0.5, 0.5, True), (-0.5, 0.6, False), (5.0, 9.0, True)],
)
def test_one_to_one_is_said_between_the_extrema_and_never_across_one(low, high, one_to_one):
    problem = cubic(0.1)
    assert injective(problem, boxes_over(problem, np.array([[low]]), np.array([[high]])))[0] == one_to_one


def test_three_roots_of_a_cubic_to_rounding():
    """x^3 - x = 0: -1, 0 and 1."""
    found = search(cubic(0.0), np.array([-1e3]), np.array([1e3]))
    assert found.complete
    assert np.all(np.abs(np.sort(found.x[:, 0]) - [-1.0, 0.0, 1.0]) <= np.sort(found.spread[:, 0]).max())
    assert found.spread.max() < 1e-14


def test_a_double_root_is_a_cluster_and_never_counted():
    """x^3 - x = 2 / (3 sqrt 3): a double root at -1 / sqrt 3, to the rounding of s; a simple one at 2 / sqrt 3."""
    found = search(cubic(2.0 / (3.0 * np.sqrt(3.0))), np.array([-10.0]), np.array([10.0]))
    assert not found.complete
    assert len(found.clusters)
    assert np.any(np.abs(found.x[:, 0] - 2.0 / np.sqrt(3.0)) < 1e-12)
    assert np.all(np.abs(found.clusters + 1.0 / np.sqrt(3.0)) < 1e-5)


def test_relaxation_is_exact_where_the_rows_are_straight():
    """2 x + 3 x = 5 with the second term as a row: a relaxed box is a few roundings wide whatever it was."""
    rows = rows_of(np.array([Kind.POLYNOMIAL]), np.array([[3.0, 0.0, 0.0]]))
    one, none, s = np.ones((1, 1)), np.zeros(1), np.array([5.0])
    problem = Problem(2.0 * one, one, one, np.zeros((1, 1)), rows, none, none, np.ones(1), np.ones(1), s, s)
    boxes = relax(problem, boxes_over(problem, np.array([[-1e3]]), np.array([[1e3]]))).boxes
    assert boxes.low[0, 0] <= 1.0 <= boxes.high[0, 0]
    assert boxes.high[0, 0] - boxes.low[0, 0] < 1e-10


def test_a_relaxation_narrows_by_the_square_of_the_width():
    """e^x - 1 + x = s: what a chord leaves over [x - h, x + h] is h^2 e^x / 2 to first order, so a tenth of h leaves a hundredth."""
    rows = rows_of(np.array([Kind.EXPONENTIAL]), np.zeros((1, 1)))
    one, none, s = np.ones((1, 1)), np.zeros(1), np.array([np.expm1(0.7) + 0.7])
    problem = Problem(one, one, one, np.zeros((1, 1)), rows, none, none, np.ones(1), np.ones(1), s, s)
    left = []
    for h in (0.1, 0.01, 0.001):
        boxes = relax(problem, boxes_over(problem, np.array([[0.7 - h]]), np.array([[0.7 + h]]))).boxes
        left.append(boxes.high[0, 0] - boxes.low[0, 0])
        # the error interval, over the slope of the relaxed equation: closed form
        assert left[-1] == pytest.approx(0.5 * h * h * np.exp(0.7) / (1.0 + np.exp(0.7)), rel=0.1)


def test_hull_alone_solves_a_divider():
    """(x - 5) / 1 + x / 4 = 0 has one unknown in one row: x = 4."""
    rows = rows_of(np.zeros(0, dtype=np.int64), np.zeros((0, 1)))
    empty, none = np.zeros((0, 1)), np.zeros(0)
    s = np.array([5.0])
    problem = Problem(np.array([[1.25]]), np.zeros((1, 0)), empty, empty, rows, none, none, none, none, s, s)
    boxes = hull(problem, Boxes(np.array([[-1e3]]), np.array([[1e3]])))
    assert boxes.low[0, 0] <= 4.0 <= boxes.high[0, 0]
    assert boxes.high[0, 0] - boxes.low[0, 0] < 1e-13


def test_a_split_covers_the_box_without_a_gap():
    random = np.random.default_rng(13)
    for _ in range(50):
        problem, x, *_ = known_case(random, False)
        boxes = boxes_over(problem, (x - 3.0)[None], (x + 2.0)[None])
        parts = split(problem, boxes, np.abs(random.normal(size=(1, problem.m))))
        assert np.array_equal(parts.low.min(axis=0), boxes.low[0])
        assert np.array_equal(parts.high.max(axis=0), boxes.high[0])
        cut = np.flatnonzero((parts.low[0] != parts.low[1]) | (parts.high[0] != parts.high[1]))
        assert len(cut) == 1
        assert parts.high[0, cut[0]] == parts.low[1, cut[0]]
