"""A piecewise-linear resistor, two capacitors and an inductor: three equilibria, all unstable, all in closed form.

T. Matsumoto, L. O. Chua, M. Komuro, The double scroll, IEEE Trans. CAS 32 (1985) 797-818; L. O. Chua, M. Komuro, T.
Matsumoto, The double
scroll family, IEEE Trans. CAS 33 (1986) 1072-1118: parameters and three-digit eigenvalues from memory, recomputed to 16.
x' = alpha (y - x - f(x)), y' = x - y + z, z' = -beta y, f(x) = m1 x + (m0 - m1) (|x + 1| - |x - 1|) / 2, m0 = -8/7, m1 = -5/7.
"""

import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, determinant_sign, solve, system_of, unit

M0, M1 = -8 / 7, -5 / 7
EQUILIBRIA = np.array([[-1.5, 0.0, 1.5], [0.0, 0.0, 0.0], [1.5, 0.0, -1.5]])  # x* = (m1 - m0) / (1 + m1) = 3/2, exact

# (alpha, beta, real eigenvalue at 0, complex one at 0, real at +-P, complex at +-P)
EIGENVALUES = (
    (9, 100 / 7, 2.217395045959707, -0.9658403801227108 + 2.711171648617678j, -3.942128895399357,
     0.1853501619853929 + 3.046988124895465j),
    (10, 100 / 7, 2.516286116394453, -1.043857343911512 + 2.649677751475963j, -4.363740569090181,
     0.2532988559736618 + 3.047844782834647j),
    (15.6, 28, 3.473077712786575, -1.122253142107573 + 4.087459016109554j, -6.068306341886302,
     0.3055817423717226 + 4.524653567541928j),
)  # fmt: skip


def oscillator(alpha=9.0, beta=100 / 7):
    """Rows divided by alpha, 1, beta: capacitor currents of both capacitors, inductor voltage."""
    G = np.array([[1.0, -1.0, 0.0], [-1.0, 1.0, -1.0], [0.0, 1.0, 0.0]])
    curve = Row(Kind.POINTS, unit(3, 0), unit(3, 0), (0.0, M1, -1.0, M0 - M1, 1.0, M1 - M0))
    return system_of(G, np.zeros(3), [curve], C=np.diag([1 / alpha, 1.0, 1 / beta]))


@pytest.mark.parametrize("box", [10.0, 1e3, 1e6])
def test_three_equilibria_are_proved(box):
    found = solve(oscillator(), box)
    assert found.complete
    assert_points(found.x, EQUILIBRIA, 1e-13)


def test_determinant_signs_sum_to_one_and_a_right_sign_is_no_proof_of_stability():
    assert tuple(determinant_sign(oscillator(), EQUILIBRIA)) == (1, -1, 1)


@pytest.mark.parametrize("row", EIGENVALUES, ids=lambda row: f"alpha {row[0]}")
def test_eigenvalues_and_verdicts(row):
    from loopsim.analyses.stability import judge

    alpha, beta, real_0, pair_0, real_p, pair_p = row
    verdicts = judge(oscillator(alpha, beta), EQUILIBRIA)
    for verdict, real, pair in zip(verdicts, (real_p, real_0, real_p), (pair_p, pair_0, pair_p), strict=True):
        expected = np.sort_complex(np.array([real, pair, np.conj(pair)]))
        assert np.allclose(np.sort_complex(verdict.eigenvalues), expected, rtol=1e-12, atol=1e-12)
        assert verdict.stable is False


@pytest.mark.parametrize("row", EIGENVALUES[:1])
def test_published_three_digit_figures(row):
    assert np.round(row[2], 2) == 2.22
    assert np.round(row[3], 2) == -0.97 + 2.71j
    assert np.round(row[4], 2) == -3.94
    assert np.round(row[5], 2) == 0.19 + 3.05j


CIRCUIT = """
circuit piecewise_linear_oscillator "Two capacitors, an inductor and a piecewise-linear resistor, scaled to 1 ohm and 1 F"
curve diode_curve = points(-2 V: 13 A / 7, -1 V: 8 A / 7, 1 V: -8 A / 7, 2 V: -13 A / 7)
let alpha = 9
let beta = 100 / 7
x -> nonlinear: diode_curve -> gnd
x -- c1: 1 F / alpha -- gnd
x -- r1: 1 ohm -- y -- c2: 1 F -- gnd
y -- l1: 1 H / beta -- gnd
"""


def test_the_same_as_a_circuit():
    import loopsim

    points = loopsim.parse(CIRCUIT).states()
    assert points.complete
    assert_points(np.array([[p["x"], p["y"], -p.currents["l1"]] for p in points]), EQUILIBRIA, 1e-12)
    assert [p.stable for p in points] == [False] * 3
    zero = min(points, key=lambda p: abs(p["x"]))
    assert zero.verdict == "unstable, whatever the strays"
    assert zero.growth_rate == pytest.approx(EIGENVALUES[0][2], rel=1e-10)
    others = [p for p in points if p is not zero]
    assert all(p.verdict.startswith("unstable with these dynamics") for p in others)
