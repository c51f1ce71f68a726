"""Small circuits with known answers, built from parts and solved by plain Newton."""

import numpy as np
import pytest
from probing import solve

from loopsim.build import CircuitBuilder
from loopsim.devices.thermal import thermal_voltage
from loopsim.equations.assemble import assemble, pin_currents
from loopsim.equations.system import lurie

VT = thermal_voltage(25.0)


def _at(system, x, net):
    return x[system.index["net", net]]


def test_bridge_with_one_diode():
    # M. Newman, Computational Physics, 2013, exercise 6.17; the book prints no answer, recomputed to 19 digits
    b = CircuitBuilder("bridge")
    b.chain("gnd", "battery", "top", device="voltage_source", voltage=5.0)
    for name, start, end, ohms in (
        ("r1", "top", "n1", 1e3),
        ("r2", "n1", "gnd", 4e3),
        ("r3", "top", "n2", 3e3),
        ("r4", "n2", "gnd", 2e3),
    ):
        b.chain(start, name, end, device="resistor", resistance=ohms)
    b.chain("n1", "d", "n2", device="diode", saturation_current=3e-9, ideality=0.05 / VT)
    system = assemble(b.circuit())
    x = solve(system)
    assert _at(system, x, "n1") == pytest.approx(3.4469546188585743799, rel=1e-13)
    assert _at(system, x, "n2") == pytest.approx(2.8295680717121384302, rel=1e-13)


def test_four_resistor_bias_of_a_bipolar_transistor():
    # forward-active closed form by Lambert W (derived); reverse injection is made negligible by its 6 V of reverse bias
    b = CircuitBuilder("bias")
    b.chain("gnd", "battery", "vcc", device="voltage_source", voltage=12.0)
    for name, start, end, ohms in (
        ("r1", "vcc", "b", 1e5),
        ("r2", "b", "gnd", 2e4),
        ("rc", "vcc", "c", 4.7e3),
        ("re", "e", "gnd", 1e3),
    ):
        b.chain(start, name, end, device="resistor", resistance=ohms)
    b.part(
        "q",
        "bipolar_npn",
        {"collector": "c", "base": "b", "emitter": "e"},
        saturation_current=1e-15,
        ideality=0.025852 / VT,
        reverse_gain=1e6,
    )
    circuit = b.circuit()
    system = assemble(circuit)
    x = solve(system, np.array([12.0, 1.8, 6.9, 1.1, 0.0]))
    # I_C = B_F I_B there; here the reverse saturation current of 1e-15 A adds to the collector, hence 1e-11 relative
    assert _at(system, x, "b") == pytest.approx(1.81820999564527508, rel=1e-10)
    assert _at(system, x, "e") == pytest.approx(1.10164742638963299, rel=1e-10)
    assert _at(system, x, "c") == pytest.approx(6.87352187719675737, rel=1e-10)
    found = pin_currents(circuit, x)
    assert found["q.collector"] == pytest.approx(1.0907400261283495e-3, rel=1e-9)
    assert found["q.base"] == pytest.approx(1.0907400261283495e-5, rel=1e-9)


def test_diode_connected_mosfet_in_strong_inversion():
    # square law in closed form (derived); the charge sheet with slope factor 1 differs by exp(-39) there
    b = CircuitBuilder("mos")
    b.chain("gnd", "battery", "vdd", device="voltage_source", voltage=5.0)
    b.chain("vdd", "r", "d", device="resistor", resistance=1e4)
    b.part(
        "m",
        "mosfet_n",
        {"drain": "d", "gate": "d", "source": "gnd", "body": "gnd"},
        threshold=1.0,
        transconductance=2e-4,
        slope_factor=1.0,
    )
    system = assemble(b.circuit())
    x = solve(system)
    assert _at(system, x, "d") == pytest.approx(2.5615528128088302749, rel=1e-12)


def _inverter(vdd, n, p, vin):
    b = CircuitBuilder("inverter")
    b.chain("gnd", "battery", "vdd", device="voltage_source", voltage=vdd)
    b.part(
        "mp", "mosfet_p", {"drain": "out", "gate": vin, "source": "vdd", "body": "vdd"}, slope_factor=1.0, **p
    )
    b.part(
        "mn", "mosfet_n", {"drain": "out", "gate": vin, "source": "gnd", "body": "gnd"}, slope_factor=1.0, **n
    )
    return b


@pytest.mark.parametrize(("ratio", "volts"), [(1.0, 1.265), (2.0, 0.98666667)])
def test_threshold_of_an_inverter(ratio, volts):
    # input tied to output: V_M = (V_DD - |V_tp| + r V_tn) / (1 + r), r = sqrt(k_n / k_p), square law (derived)
    n, p = (
        {"threshold": 0.43, "transconductance": 1e-4 * ratio**2},
        {"threshold": 0.4, "transconductance": 1e-4},
    )
    b = _inverter(2.5, n, p, "out")
    system = assemble(b.circuit())
    x = solve(system, [2.5, 1.2, 0.0])
    assert _at(system, x, "out") == pytest.approx(volts, rel=1e-6)


def test_emitter_coupled_trigger_has_its_three_points():
    # Lj. Trajkovic, R. C. Melville, S.-C. Fang 1990/91; parameters from memory, points recomputed
    n = 1.0 / 38.78 / VT
    fields = {
        "saturation_current": 1e-16,
        "forward_gain": 0.99 / 0.01,
        "reverse_gain": 0.5 / 0.5,
        "ideality": n,
    }
    b = CircuitBuilder("trigger")
    b.chain("gnd", "battery", "vcc", device="voltage_source", voltage=10.0)
    for name, start, end, ohms in (
        ("rc1", "vcc", "c1", 1.5e3), ("rc2", "vcc", "c2", 1e3), ("r1", "c1", "b2", 1e4), ("r4", "b2", "gnd", 1e6),
        ("r2", "vcc", "b1", 5e3), ("r3", "b1", "gnd", 1.25e3), ("re", "e", "gnd", 100.0),
    ):  # fmt: skip
        b.chain(start, name, end, device="resistor", resistance=ohms)
    b.part("q1", "bipolar_npn", {"collector": "c1", "base": "b1", "emitter": "e"}, **fields)
    b.part("q2", "bipolar_npn", {"collector": "c2", "base": "b2", "emitter": "e"}, **fields)
    system = assemble(b.circuit())
    signs = []
    for e, c1, c2, b2, b1 in (
        (
            1.17609574105776534,
            5.49256274732809628,
            1.26882608316058147,
            2.0053100345790445,
            1.97316936467512191,
        ),
        (
            1.13842898771610747,
            2.62649495854352897,
            3.57840013833134614,
            1.95826584937717601,
            1.95102174629584937,
        ),
        (
            0.668223462299142325,
            0.739851160982595759,
            9.99999999999868946,
            0.732525901963845132,
            1.4904654104528596,
        ),
    ):
        wanted = {"vcc": 10.0, "e": e, "c1": c1, "c2": c2, "b2": b2, "b1": b1}
        start = [wanted[name] if kind == "net" else 0.0 for kind, name in system.unknowns]
        x = solve(system, start)
        for name, volts in wanted.items():
            assert _at(system, x, name) == pytest.approx(volts, rel=1e-11)
        signs.append(np.sign(np.linalg.det(system.jacobian(x))))
    # signs of the determinant +, -, + as in the source
    assert signs == [1.0, -1.0, 1.0]


def test_two_tunnel_diodes_in_series_as_bare_arrays():
    # L. O. Chua, A. Ushida 1976; coefficients from memory; point 1 recomputed to 40 digits
    system = lurie(
        G=[[1 / 13.3, 1 / 13.3], [0.0, 0.0]],
        s=[30.0 / 13.3, 0.0],
        B=[[1.0, 0.0], [1.0, -1.0]],
        kinds=[5, 5],
        parameters=[[11.8, -10.5, 2.5], [4.56, -2.69, 0.43]],
        names=["v1", "v2"],
    )
    x = solve(system, [0.2, 3.7])
    assert x == pytest.approx([0.1997905925274603932428, 3.754217099940904957274], rel=1e-13)
    assert system.index["net", "v2"] == 1


def test_bare_arrays_of_the_wrong_shape_are_refused():
    with pytest.raises(ValueError, match="shape"):
        lurie(G=np.eye(2), s=[1.0, 2.0, 3.0])
    with pytest.raises(ValueError, match="shape"):
        lurie(G=np.eye(2), kinds=[0], W=[[1.0, 0.0, 0.0]], B=[[1.0], [0.0]])
    plain = lurie(G=[[2.0]], s=[4.0])
    assert solve(plain) == pytest.approx([2.0])
