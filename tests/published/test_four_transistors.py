"""Two coupled flip-flops of four transistors: nine operating points.

L. O. Chua, R. L. P. Ying, Finding all solutions of piecewise-linear circuits, Int. J. Circuit Theory Appl. 10 (1982)
201-229, and
S. M. Lee, K. S. Chao, IEEE Trans. CAS 30 (1983). Equations from memory; the count of nine supports them.
Unknowns: base-emitter voltages of a forward-only model, i_k = 1e-9 (exp(40 v_k) - 1).
"""

import mpmath
import numpy as np
import pytest
from array_systems import Kind, Row, assert_points, determinant_sign, solve, system_of, unit

G = np.array([[0, 4.36634, 0, 0], [5.4, 0, 1, 0], [0, 0, 0, 4.36634], [1, 0, 5.4, 0]])
R = np.array([[6103.168, 2863.168, 0, 0], [3580, 6620, 700, 500], [0, 0, 6103.168, 2863.168], [700, 500, 3580, 6620]])
S = np.array([12.0, 22.0, 12.0, 20.0])

# recomputed to 40 digits, rounded
POINTS = np.array(
    [
        [-1.05100508878220073, 0.377518161483779743, 0.384577794301183165, -3.95422403017815045],
        [-0.711936480287239998, 0.377518161483779743, 0.335039975836171815, 0.365379845233352164],
        [-0.51366189576763715, 0.377518161483779726, -0.968207350313094416, 0.377518161483779743],
        [0.323948927642942258, 0.370422322530045685, -1.09558636043121175, 0.377518161483779743],
        [0.330021977029172065, 0.368064005838539302, 0.338042562552485585, 0.363311398851801896],
        [0.336575222146033202, 0.364374280536513119, 0.382873520508819574, -3.51253293225254521],
        [0.383967785825636823, -3.79265932246128683, 0.379989923384129092, -2.83047580257377904],
        [0.385893054600171318, -4.31628717937796758, 0.343879509585547567, 0.357736863961484198],
        [0.387902147369741746, -4.90745984360420254, -1.51039405021340985, 0.377518161483779743],
    ]
)
SIGNS = (1, -1, 1, -1, 1, -1, 1, -1, 1)


def four_transistors():
    return system_of(G, S, [Row(Kind.EXPONENTIAL, unit(4, j, 40.0), 1e-9 * R[:, j]) for j in range(4)])


def polish(start):
    """The nearest solution in 40-digit arithmetic."""
    with mpmath.workdps(40):
        g = [[mpmath.mpf(str(a)) for a in row] for row in G]
        r = [[mpmath.mpf(str(a)) for a in row] for row in R]

        def balance(*v):
            i = [mpmath.mpf("1e-9") * mpmath.expm1(40 * a) for a in v]
            return [sum(g[k][j] * v[j] + r[k][j] * i[j] for j in range(4)) - mpmath.mpf(S[k]) for k in range(4)]

        return [float(a) for a in mpmath.findroot(balance, [mpmath.mpf(float(a)) for a in start])]


@pytest.mark.parametrize("box", [10.0, 1e3, 1e6])
def test_all_nine_points_are_proved(box):
    found = solve(four_transistors(), box)
    assert found.complete
    assert_points(found.x, POINTS, 1e-11)


def test_tabled_points_solve_the_equations():
    for point in POINTS:
        assert np.allclose(polish(point), point, rtol=1e-15, atol=0)


def test_determinant_signs_sum_to_one():
    signs = determinant_sign(four_transistors(), solve(four_transistors()).x)
    reference = np.sign(np.linalg.det(G + R))  # every junction conducting hard: the passive far end
    assert tuple(signs * reference) == SIGNS or tuple(-signs * reference) == SIGNS
    assert abs(signs.sum()) == 1
