"""Two tunnel diodes in series: nine operating points, four of them on a closed branch that no sweep of the supply reaches.

Circuit after L. O. Chua, A. Ushida, A switching-parameter algorithm for finding multiple solutions of nonlinear
resistive circuits,
Int. J. Circuit Theory Appl. 4 (1976) 215-239. Coefficients from memory; nine real roots support them. The reference is
one polynomial
of degree 9 in v1, solved here by mpmath: at most nine solutions, so nine real roots are a proof of completeness.
"""

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, determinant_sign, solve, system_of, unit
from exact_roots import product, real_roots, value

SUPPLY, RESISTANCE = 30.0, 13.3
FIRST = (11.8, -10.5, 2.5)
SECOND = (4.56, -2.69, 0.43)

# v1, stable: recomputed to 40 digits and rounded; the fifth has the right determinant sign and two growing modes all the same
V1_STABLE = (
    (0.1997905925274603932428, True),
    (0.2198545732011034901739, False),
    (0.2282668518462373535320, True),
    (1.666377840445786264904, False),
    (1.702657758207876219713, False),
    (1.775503561381978173776, False),
    (2.224729753244630956542, True),
    (2.277597006141357589844, False),
    (2.305222063003569558271, True),
)
SIGNS = (1, -1, 1, -1, 1, -1, 1, -1, 1)

# supply voltages at which the determinant vanishes, and what the count changes to there (recomputed)
FOLDS = (
    (17.4326592791347814, 1, 3),
    (23.7405131423377845, 3, 5),
    (25.4617117400949651, 5, 7),
    (26.8592854886430095, 7, 9),
    (32.5962175345852683, 9, 7),
    (33.9072457453627066, 7, 5),
    (34.7319065951493801, 5, 3),
    (58.3007488102998987, 3, 1),
)


def two_diodes(supply=SUPPLY):
    """Unknowns v1, v2; current balance of each diode with the resistor; a capacitor of 1 across each."""
    conductance = np.full((2, 2), 1.0 / RESISTANCE)
    rows = [
        Row(Kind.POLYNOMIAL, unit(2, j), unit(2, j), curve) for j, curve in enumerate((FIRST, SECOND))
    ]
    return system_of(conductance, np.full(2, supply / RESISTANCE), rows, C=np.eye(2))


def by_polynomial(supply=SUPPLY):
    """(v1, v2) of every real solution, by eliminating v2 = E - R g1(v1) - v1; coefficients ascending."""
    with mpmath.workdps(60):
        R, E = mpmath.mpf("13.3"), mpmath.mpf(supply)
        g1 = [mpmath.mpf(a) for a in ("0", "11.8", "-10.5", "2.5")]
        v2 = [E, -R * g1[1] - 1, -R * g1[2], -R * g1[3]]
        square = product(v2, v2)
        total = [mpmath.mpf("0.43") * a for a in product(square, v2)]
        for factor, terms in (("-2.69", square), ("4.56", v2), ("-1", g1)):
            for i, a in enumerate(terms):
                total[i] += mpmath.mpf(factor) * a
        return np.array([[float(r), float(value(v2, r))] for r in real_roots(total)])


def test_reference_polynomial_has_the_nine_tabled_roots():
    assert np.allclose(by_polynomial()[:, 0], [v for v, _ in V1_STABLE], rtol=1e-15, atol=0)


@pytest.mark.parametrize("box", [10.0, 1e3, 1e6])
def test_all_nine_points_are_proved(box):
    found = solve(two_diodes(), box)
    assert found.complete
    assert_points(found.x, by_polynomial(), 1e-12)


def test_determinant_signs_sum_to_one():
    signs = determinant_sign(two_diodes(), solve(two_diodes()).x)
    assert tuple(signs) == SIGNS
    assert signs.sum() == 1


def test_verdicts_with_a_capacitor_across_each_diode():
    from loopsim.analyses.stability import judge

    system = two_diodes()
    verdicts = judge(system, by_polynomial())
    assert [v.stable for v in verdicts] == [stable for _, stable in V1_STABLE]
    # the matrix is symmetric: only real modes
    assert all(np.all(np.isreal(v.eigenvalues)) for v in verdicts)


def test_fifth_point_is_unstable_although_its_determinant_sign_is_right():
    from loopsim.analyses.stability import judge

    fifth = by_polynomial()[4:5]
    assert determinant_sign(two_diodes(), fifth)[0] == 1
    verdict = judge(two_diodes(), fifth)[0]
    assert verdict.stable is False
    assert np.count_nonzero(verdict.eigenvalues.real > 0) == 2


@pytest.mark.parametrize(("at", "before", "after"), FOLDS)
def test_count_changes_at_each_fold(at, before, after):
    for supply, count in ((at - 1e-3, before), (at + 1e-3, after)):
        found = solve(two_diodes(supply))
        assert found.complete
        assert len(found.x) == count == len(by_polynomial(supply))


CIRCUIT = """
circuit two_tunnel_diodes "Two negative-resistance diodes in series"
curve first_curve = polynomial(11.8 A/V, -10.5 A/V^2, 2.5 A/V^3)
curve second_curve = polynomial(4.56 A/V, -2.69 A/V^2, 0.43 A/V^3)
let supply = 30 V
gnd -> source: supply -> top -- r1: 13.3 ohm -- upper -> d1: first_curve -> lower -> d2: second_curve -> gnd
upper -- c1: 1 F -- lower -- c2: 1 F -- gnd
"""


def test_the_same_as_a_circuit():
    import loopsim

    points = loopsim.parse(CIRCUIT).states()
    expected = by_polynomial()
    assert points.complete
    found = np.array([[p["upper"] - p["lower"], p["lower"]] for p in points])
    assert_points(found, expected, 1e-11)
    order = np.argsort(found[:, 0])
    assert [points[int(i)].stable for i in order] == [stable for _, stable in V1_STABLE]
