"""The van der Pol oscillator: a coil, a capacitor and a negative conductance, in Lienard form (the circuit's own).

x'' - mu (1 - x^2) x' + x = 0 as x' = y - mu (x^3 / 3 - x), y' = -x. Periods, amplitudes and end values recomputed in 113-bit arithmetic;
published: E. Hairer, S. P. Norsett, G. Wanner, Solving ODE I (T and A for mu = 1, read in public files that cite it); deTestSet 1.1.7.4
(end at t = 2000); E. Hairer's stiff test set page, file res_exact_pic, quoted in two public test files (table C).
"""

import numpy as np
import pytest

from loopsim.devices.phi import Kind
from loopsim.numerics.radau import Equations, crossings, equations, integrate

PERIODS = {  # mu: (period, largest x)
    0.1: (6.2871112722886656075, 2.0001039798721344798),
    0.5: (6.3806758017735862844, 2.0024879304471084473),
    1.0: (6.66328685932313018969968202, 2.00861986087484313650964019),
    2.0: (7.6298744796748416320, 2.0198913846671360241),
    5.0: (11.612230667719570035, 2.0215080615623213238),
    10.0: (19.078369566939014070, 2.0142853609264052853),
    100.0: (162.83707109237001213, 2.0013186811772241612),
    1000.0: (1614.4011258083339831, 2.0000729660025968615),
}
STIFF = np.array(  # table C: y1, y2 at t = 1 .. 11 (t in units of 1000)
    [
        [-1.86364625480813390, 0.753543086543543370],
        [1.70616773217046501, -0.892809701024816550],
        [-1.51060693674411149, 1.17838000073091102],
        [1.19441467769595904, -2.79958599653936382],
        [1.89042859641676763, -0.734511868016679413],
        [-1.73771630680591217, 0.860400865302563884],
        [1.55161464554826509, -1.10238289253324827],
        [-1.27863198433049164, 2.01389088300858800],
        [-1.91655294948986756, 0.716957300346298177],
        [1.76816379239198346, -0.831527640789806048],
        [-1.59015054482912677, 1.04027938921238703],
    ]
)


def oscillator(mu: float) -> Equations:
    return equations(
        np.eye(2), np.array([[0.0, -1.0], [1.0, 0.0]]), np.array([[1.0], [0.0]]), np.array([[1.0, 0.0]]), [0.0], [Kind.POLYNOMIAL],
        np.array([[-mu, 0.0, mu / 3.0]]),
    )  # fmt: skip


@pytest.mark.parametrize("mu", PERIODS)
def test_period_and_amplitude(mu: float) -> None:
    period, amplitude = PERIODS[mu]
    rounds = 12 if mu < 2.0 else 3  # a weakly damped cycle takes some rounds to be reached
    if mu == 0.1:
        rounds = 40
    start = np.array([2.0, mu * 2.0 / 3.0])
    path = integrate(oscillator(mu), start, 0.0, (rounds + 2.2) * period, np.zeros(2), rtol=1e-9, atol=1e-9, stages=5)
    times, signs = crossings(path, 0, 0.0)
    rises = times[signs > 0]
    assert rises[-1] - rises[-2] == pytest.approx(period, rel=2e-8)
    # the top is sharp where mu is large: look finely into every step of the last period
    begins = path.times[(path.times >= rises[-2]) & (path.times < rises[-1])]
    ends = np.append(begins[1:], rises[-1])
    fine = np.concatenate([np.linspace(a, b, 300) for a, b in zip(begins, ends, strict=True)])
    assert path.at(fine)[:, 0].max() == pytest.approx(amplitude, rel=2e-8)


@pytest.mark.parametrize("tolerance", [1e-4, 1e-6, 1e-8])
def test_stiff_course_within_ten_times_the_tolerance(tolerance: float) -> None:
    times = 1000.0 * np.arange(1, 12)
    path = integrate(oscillator(1000.0), [2.0, 2000.0 / 3.0], 0.0, 11000.0, np.zeros(2), rtol=tolerance, atol=tolerance)
    found = path.at(times)
    x = found[:, 0]
    # table C's times lie between jumps; the largest error is where x moves fastest, at t = 4000
    assert np.max(np.abs(x - STIFF[:, 0])) <= 10.0 * tolerance * 2.0


def test_end_of_the_test_set_interval() -> None:
    path = integrate(oscillator(1000.0), [2.0, 2000.0 / 3.0], 0.0, 2000.0, np.zeros(2), rtol=1e-10, atol=1e-10)
    x, y = path.end_x
    assert x == pytest.approx(1.70616773217046501, abs=2e-9)
    # the slope is a difference of numbers near 700: seven digits fewer than they have
    assert y - 1000.0 * (x**3 / 3.0 - x) == pytest.approx(-8.9280970102481655e-4, abs=1e-7)


def test_slopes_of_the_stiff_table_on_the_slow_branches() -> None:
    times = 1000.0 * np.arange(1, 12)
    path = integrate(oscillator(1000.0), [2.0, 2000.0 / 3.0], 0.0, 11000.0, np.zeros(2), rtol=1e-10, atol=1e-10)
    x = path.at(times)[:, 0]
    # on a slow branch x' = -x / (mu (x^2 - 1)) up to terms of order mu^-3, largest near the jump; table C counts time in thousands
    slow = -x / (x**2 - 1.0)
    assert np.allclose(slow, STIFF[:, 1], rtol=5e-5)
