"""The ring modulator of the test set for initial value problems: four diodes, stray capacitances of 2 pF, thousands of oscillations.

E.-H. Horneber, dissertation, Kaiserslautern 1976 (citation from memory); Test Set for IVP Solvers 2.4. Data read from deTestSet 1.1.7.4,
src/Ex_ring.f. End values recomputed in 113-bit arithmetic (11-14 digits agree between two runs); beyond the tenth digit the printed
ones differ from them.
"""

import numpy as np
import pytest
from numpy.typing import NDArray

from loopsim.devices.phi import Kind
from loopsim.numerics import kernel
from loopsim.numerics.radau import Equations, Waves, equations, integrate

Array = NDArray[np.float64]

CAPACITANCE, CS, CP, R, RP = 1.6e-8, 2e-12, 1e-8, 25e3, 50.0
RG1, RG2, RI, RC = 36.3, 17.3, 50.0, 600.0
LH, LS1, LS2 = 4.45, 2e-3, 5e-4
GAMMA, DELTA = 40.67286402e-9, 17.7493332
END = np.array(
    [
        -0.0233905735843716, -0.00736748548600823, 0.25829567099919, -0.40644657205880, -0.40394556644554, 0.26079667661245,
        0.110676186127329836, 2.9399043424331e-7, -2.8400299330658e-8, 7.2671982672915e-4, 7.9294871970232e-4, -7.2552834957658e-4,
        -7.9414019685488e-4, 7.0884954168756783e-5, 2.39005907527711e-5,
    ]
)  # fmt: skip


def modulator() -> tuple[Equations, Waves]:
    """y1..y7 volts, y8..y15 amperes; row k of the published equations with its storage element on the left."""
    C = np.diag([CAPACITANCE] * 2 + [CS] * 4 + [CP] + [LH] * 2 + [LS2] * 4 + [LS1] * 2)
    F = np.zeros((15, 15))  # the linear right-hand side
    rows: dict[int, dict[int, float]] = {
        1: {8: 1, 10: -0.5, 11: 0.5, 14: 1, 1: -1 / R},
        2: {9: 1, 12: -0.5, 13: 0.5, 15: 1, 2: -1 / R},
        3: {10: 1}, 4: {11: -1}, 5: {12: 1}, 6: {13: -1}, 7: {7: -1 / RP},
        8: {1: -1}, 9: {2: -1},
        10: {1: 0.5, 3: -1, 10: -RG2}, 11: {1: -0.5, 4: 1, 11: -RG2},
        12: {2: 0.5, 5: -1, 12: -RG2}, 13: {2: -0.5, 6: 1, 13: -RG2},
        14: {1: -1, 14: -(RI + RG1)}, 15: {2: -1, 15: -(RC + RG1)},
    }  # fmt: skip
    for row, terms in rows.items():
        for column, value in terms.items():
            F[row - 1, column - 1] = value
    controls = [{3: 1, 5: -1, 7: -1}, {4: -1, 6: 1, 7: -1}, {4: 1, 5: 1, 7: 1}, {3: -1, 6: -1, 7: 1}]
    drive = np.array([-1.0, -1.0, 1.0, 1.0])  # of Uin2 in each diode's voltage
    outputs = {3: {1: -1, 4: 1}, 4: {2: 1, 3: -1}, 5: {1: 1, 3: -1}, 6: {2: -1, 4: 1}, 7: {1: 1, 2: 1, 3: -1, 4: -1}}
    # Uin2 enters through the diodes: one more unknown y16 = Uin2(t) carries it
    size = 16
    big_C, G, W, B = np.zeros((size, size)), np.zeros((size, size)), np.zeros((4, size)), np.zeros((size, 4))
    big_C[:15, :15], G[:15, :15], G[15, 15] = C, -F, 1.0
    for k, terms in enumerate(controls):
        for column, value in terms.items():
            W[k, column - 1] = DELTA * value
        W[k, 15] = DELTA * drive[k]
    for row, terms in outputs.items():
        for k, value in terms.items():
            B[row - 1, k - 1] = -GAMMA * value
    columns = np.zeros((3, size))
    columns[1, 13], columns[2, 15] = 1.0, 1.0
    waves = Waves(
        np.array([kernel.LINEAR, kernel.SINE, kernel.SINE]),
        (
            np.array([0.0, 0.0, 0.0, 1.0]), np.array([0.0, 0.5, 2e3 * np.pi, 0.0, 0.0]), np.array([0.0, 2.0, 2e4 * np.pi, 0.0, 0.0])
        ),
        columns,
        fastest=1e-4,
    )  # fmt: skip
    return equations(big_C, G, B, W, np.zeros(4), [Kind.EXPONENTIAL] * 4), waves


@pytest.mark.parametrize("tolerance", [1e-4, 1e-6, 1e-8])
def test_end_values_within_ten_times_the_tolerance_of_each_amplitude(tolerance: float) -> None:
    eq, waves = modulator()
    peak = np.array([0.1] * 2 + [0.5] * 5 + [1e-6] * 2 + [1e-3] * 6 + [2.0])  # V and A: the sizes that the unknowns reach
    path = integrate(eq, np.zeros(16), 0.0, 1e-3, np.zeros(16), waves=waves, rtol=tolerance, atol=tolerance * 1e-3 * peak, peak=peak)
    assert path.outcome == kernel.DONE
    assert np.all(np.abs(path.end_x[:15] - END) <= 10.0 * tolerance * peak[:15])
