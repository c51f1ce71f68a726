"""The two-transistor amplifier of the test set for initial value problems: stiff, index 1, coupling capacitors make C singular.

P. Rentrop, M. Roche, G. Steinebach, Numer. Math. 55 (1989) 545-563 (citation from memory); Test Set for IVP Solvers, F. Mazzia,
C. Magherini, release 2.4 (2008). Data and end values read from the R package deTestSet 1.1.7.4, src/Ex_transistor.f; the end values
used here were recomputed in 113-bit arithmetic and agree with the printed ones to 13-16 digits.
"""

import numpy as np
import pytest
from numpy.typing import NDArray

from loopsim.devices.phi import Kind
from loopsim.numerics import kernel
from loopsim.numerics.radau import Equations, Path, Waves, equations, integrate

Array = NDArray[np.float64]

UB, UF, ALPHA, BETA, R0, R = 6.0, 0.026, 0.99, 1e-6, 1000.0, 9000.0
START = np.array([0.0, 3.0, 3.0, 6.0, 3.0, 3.0, 6.0, 0.0])
END = np.array(
    [
        -5.5621450122622744e-3, 3.00652247190304267, 2.84995878860812851, 2.92642253620624151,
        2.70461786501055459, 2.76183777839314405, 4.77092763161677216, 1.23699586809154755,
    ]
)  # fmt: skip


def amplifier() -> tuple[Equations, Array, Waves]:
    """C y' = s(t) - G y - B f(w), f = exp(w) - 1, w = (base - emitter) / UF."""
    C, G, s = np.zeros((8, 8)), np.zeros((8, 8)), np.zeros(8)
    for first, second, value in ((0, 1, 1e-6), (3, 4, 3e-6), (6, 7, 5e-6)):
        C[first, first] += value
        C[second, second] += value
        C[first, second] -= value
        C[second, first] -= value
    C[2, 2], C[5, 5] = 2e-6, 4e-6
    G[0, 0] = 1.0 / R0
    for net in (1, 4):  # a divider to the supply and to ground
        G[net, net] = 2.0 / R
        s[net] = UB / R
    for net in (2, 5, 7):
        G[net, net] = 1.0 / R
    for net in (3, 6):
        G[net, net] = 1.0 / R
        s[net] = UB / R
    B, W = np.zeros((8, 2)), np.zeros((2, 8))
    for k, (base, emitter, collector) in enumerate(((1, 2, 3), (4, 5, 6))):
        W[k, base], W[k, emitter] = 1.0 / UF, -1.0 / UF
        B[base, k], B[emitter, k], B[collector, k] = (1.0 - ALPHA) * BETA, -BETA, ALPHA * BETA
    column = np.zeros(8)
    column[0] = 1.0 / R0
    waves = Waves(
        np.array([kernel.LINEAR, kernel.SINE]),
        (np.array([0.0, 0.0, 0.0, 1.0]), np.array([0.0, 0.1, 200.0 * np.pi, 0.0, 0.0])),
        np.array([np.zeros(8), column]),
        fastest=0.01,
    )
    return equations(C, G, B, W, np.zeros(2), [Kind.EXPONENTIAL] * 2), s, waves


def run(tolerance: float, stages: int | None = None) -> Path:
    eq, s, waves = amplifier()
    return integrate(eq, START, 0.0, 0.2, s, waves=waves, rtol=tolerance, atol=tolerance, stages=stages)


@pytest.mark.parametrize("tolerance", [1e-4, 1e-6, 1e-8])
def test_end_values_come_out_within_ten_times_the_tolerance(tolerance: float) -> None:
    path = run(tolerance)
    assert path.outcome == kernel.DONE
    assert np.all(np.abs(path.end_x - END) <= 10.0 * tolerance * np.maximum(np.abs(END), 1.0))


@pytest.mark.parametrize("stages", [3, 5, 7])
def test_every_order_reaches_ten_digits_at_the_end(stages: int) -> None:
    path = run(1e-8, stages)
    assert np.all(np.abs(path.end_x - END) <= 1e-10)
