"""Structure findings: a table of malformed circuits and what is said of them."""

import numpy as np
import pytest

from loopsim.build import CircuitBuilder, current, net, operation
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble
from loopsim.equations.structure import check, findings
from loopsim.errors import CircuitError


def _base() -> CircuitBuilder:
    """A sound divider: battery, two resistors."""
    b = CircuitBuilder("base")
    b.chain("gnd", "battery", "vcc", device="voltage_source", voltage=9.0)
    b.chain("vcc", "r1", "mid", device="resistor", resistance=1e3)
    b.chain("mid", "r2", "gnd", device="resistor", resistance=1e3)
    return b


def _r(b, name, start, end):
    b.chain(start, name, end, device="resistor", resistance=1e3)


def _only_capacitors(b):
    b.chain("mid", "c1", "x", device="capacitor", capacitance=1e-9)
    b.chain("x", "c2", "gnd", device="capacitor", capacitance=1e-9)


def _island(b):
    _r(b, "r3", "x", "y")
    _r(b, "r4", "x", "y")


def _gates(b):
    b.part("m1", "mosfet_n", {"drain": "vcc", "gate": "g", "source": "mid", "body": "gnd"})
    b.part("m2", "mosfet_p", {"drain": "mid", "gate": "g", "source": "vcc", "body": "vcc"})


def _gate_with_capacitance(b):
    b.part(
        "m1",
        "mosfet_n",
        {"drain": "vcc", "gate": "g", "source": "mid", "body": "gnd"},
        gate_source_capacitance=1e-15,
    )
    b.chain("g", "c1", "gnd", device="capacitor", capacitance=1e-9)


def _body_alone(b):
    b.part("m1", "mosfet_n", {"drain": "vcc", "gate": "mid", "source": "gnd", "body": "well"})


def _amplifier_input(b):
    b.part("u1", "opamp", {"plus": "p", "minus": "mid", "out": "o", "high": "vcc", "low": "gnd"})
    _r(b, "load", "o", "gnd")


def _current_into_capacitor(b):
    b.chain("vcc", "i1", "x", device="current_source", current=1e-3)
    b.chain("x", "c1", "gnd", device="capacitor", capacitance=1e-9)


def _currents_in_series(b):
    b.chain("vcc", "i1", "x", device="current_source", current=1e-3)
    b.chain("x", "i2", "gnd", device="current_source", current=1e-3)


def _sources_in_parallel(b):
    b.chain("gnd", "other", "vcc", device="voltage_source", voltage=9.0)


def _shorted_by_inductors(b):
    b.chain("vcc", "l1", "x", device="inductor", inductance=1e-3)
    b.chain("x", "l2", "gnd", device="inductor", inductance=1e-3)


def _outputs_tied(b):
    for name in ("u1", "u2"):
        b.part(name, "opamp", {"plus": "mid", "minus": "gnd", "out": "o", "high": "vcc", "low": "gnd"})
    _r(b, "load", "o", "gnd")


def _source_on_itself(b):
    b.chain("mid", "v", "mid", device="voltage_source", voltage=1.0)


# what is added to a sound circuit; code, nets, parts of the one fatal finding
FATAL = {
    "a net between capacitors": (_only_capacitors, "floating-net", ("x",), ("c1", "c2")),
    "an island of resistors": (_island, "floating-net", ("x", "y"), ("r3", "r4")),
    "a net of gates": (_gates, "floating-net", ("g",), ("m1", "m2")),
    "a gate behind a capacitor": (_gate_with_capacitance, "floating-net", ("g",), ("m1", "c1")),
    "a body that nothing holds": (_body_alone, "floating-net", ("well",), ("m1",)),
    "an input that nothing drives": (_amplifier_input, "floating-net", ("p",), ("u1",)),
    "a current into a capacitor": (_current_into_capacitor, "current-cut", ("x",), ("i1", "c1")),
    "currents in series": (_currents_in_series, "current-cut", ("x",), ("i1", "i2")),
    "voltage sources in parallel": (_sources_in_parallel, "voltage-loop", ("vcc",), ("battery", "other")),
    "a source shorted by inductors": (
        _shorted_by_inductors,
        "voltage-loop",
        ("vcc", "x"),
        ("battery", "l1", "l2"),
    ),
    "two ideal outputs tied together": (_outputs_tied, "voltage-loop", ("o",), ("u1", "u2")),
    "a voltage between a net and itself": (_source_on_itself, "voltage-loop", ("mid",), ("v",)),
}


@pytest.mark.parametrize("case", list(FATAL))
def test_fatal_faults_are_named_with_their_nets_and_parts(case):
    add, code, nets, parts = FATAL[case]
    b = _base()
    add(b)
    circuit = b.circuit()
    fatal = [finding for finding in findings(circuit) if finding.fatal]
    assert len(fatal) == 1
    assert fatal[0].code == code
    assert set(fatal[0].nets) == set(nets)
    assert fatal[0].parts == parts
    for name in (*nets, *parts):
        assert f"`{name}`" in fatal[0].message or code == "voltage-loop"
    with pytest.raises(CircuitError) as fault:
        check(circuit)
    assert fault.value.code == code


@pytest.mark.parametrize("case", list(FATAL))
def test_a_fatal_fault_makes_the_equations_singular(case):
    b = _base()
    FATAL[case][0](b)
    system = assemble(b.circuit())
    rng = np.random.default_rng(1)
    jacobian = system.jacobian(rng.normal(0.3, 0.1, system.n))
    # rows and columns to a like size first: conductances span many decades
    for _ in range(4):
        jacobian = jacobian / np.maximum(np.max(np.abs(jacobian), axis=1, keepdims=True), 1e-300)
        jacobian = jacobian / np.maximum(np.max(np.abs(jacobian), axis=0, keepdims=True), 1e-300)
    singular = np.linalg.svd(jacobian, compute_uv=False)
    assert singular[-1] < 1e-12 * singular[0]


def random_network(seed: int) -> Circuit:
    """Linear parts and op-amps at random places, with values of a like size, so that a singular Jacobian stands out."""
    rng = np.random.default_rng(seed)
    b = CircuitBuilder(f"network{seed}")
    nets = ["gnd", *(f"n{j}" for j in range(rng.integers(2, 6)))]
    b.chain("gnd", "first", "n0", device="resistor", resistance=1.0)
    for j in range(int(rng.integers(len(nets), 2 * len(nets) + 2))):
        start, end, x, y = (
            str(net) for net in (*rng.choice(nets, 2, replace=False), *rng.choice(nets, 2, replace=False))
        )
        device = str(rng.choice(DEVICES, p=SHARES))
        value = float(rng.uniform(0.5, 2.0))
        if device == "opamp":
            pins = {"plus": x, "minus": y, "out": end if end != "gnd" else start, "high": start, "low": end}
            b.part(f"p{j}", "opamp", pins, gain=3.0, knee=1.0, clamp_ratio=1.0)
        elif device.startswith("controlled"):
            reading = current("first") if rng.random() < 0.2 else operation("-", net(x), net(y))
            formula = operation("*", value, reading)
            if all(
                name in ("gnd", *(n for part in b.circuit().parts for n in part.pins.values()))
                for name in (x, y)
            ):
                b.chain(start, f"p{j}", end, device=device, formula=formula)
        else:
            b.chain(start, f"p{j}", end, device=device, **{FIELD[device]: value})
    return b.circuit()


FIELD = {
    "resistor": "resistance", "capacitor": "capacitance", "inductor": "inductance", "voltage_source": "voltage",
    "current_source": "current",
}  # fmt: skip
DEVICES = [*FIELD, "controlled_voltage_source", "controlled_current_source", "opamp"]
SHARES = [0.45, 0.13, 0.08, 0.1, 0.08, 0.05, 0.07, 0.04]


def test_findings_are_fatal_exactly_where_the_equations_are_singular():
    counts = {True: 0, False: 0}
    for seed in range(400):
        circuit = random_network(seed)
        system = assemble(circuit)
        rng = np.random.default_rng(seed + 10**6)
        regular = False
        for _ in range(3):
            values = np.linalg.svd(system.jacobian(rng.normal(0.0, 0.5, system.n)), compute_uv=False)
            regular = regular or bool(values[-1] > 1e-11 * values[0])
        fatal = [finding for finding in findings(circuit) if finding.fatal]
        assert bool(fatal) != regular, (
            seed,
            fatal,
            [(part.name, part.device, dict(part.pins)) for part in circuit.parts],
        )
        counts[regular] += 1
    assert min(counts.values()) > 50


def test_a_sound_circuit_has_no_findings():
    assert findings(_base().circuit()) == ()
    check(_base().circuit())


def test_a_circuit_without_ground_is_told_so_first():
    b = CircuitBuilder("loose")
    b.chain("a", "v", "b", device="voltage_source", voltage=1.0)
    b.chain("b", "r", "a", device="resistor", resistance=1.0)
    assert findings(b.circuit())[0].code == "missing-ground"


@pytest.mark.parametrize("text", ["", "gnd -- r1: 1 kohm -- gnd\n"])
def test_a_circuit_without_a_net_is_told_so(text):
    import loopsim

    circuit = loopsim.parse(f'circuit nothing "Nothing"\n{text}')
    assert findings(circuit)[0].code == "empty-circuit"
    with pytest.raises(CircuitError, match="no net beside gnd"):
        circuit.states()


def test_a_controlled_current_may_set_what_only_a_capacitor_holds():
    # transconductor, capacitor and follower in a loop: at rest the loop sets the voltage
    b = _base()
    b.chain(
        "gnd",
        "gm",
        "x",
        device="controlled_current_source",
        formula=operation("*", 1e-3, operation("-", net("mid"), net("x"))),
    )
    b.chain("x", "c", "gnd", device="capacitor", capacitance=1e-9)
    circuit = b.circuit()
    assert not any(finding.fatal for finding in findings(circuit))
    system = assemble(circuit)
    assert np.linalg.matrix_rank(system.jacobian(np.zeros(system.n))) == system.n


def test_a_loop_of_voltages_may_be_settled_by_a_current_that_is_read():
    b = _base()
    b.chain("gnd", "e", "vcc", device="controlled_voltage_source", formula=operation("*", 10.0, current("e")))
    circuit = b.circuit()
    assert not any(finding.fatal for finding in findings(circuit))
    system = assemble(circuit)
    assert np.linalg.matrix_rank(system.jacobian(np.zeros(system.n))) == system.n


def test_an_equation_that_holds_nothing_of_its_unknown_is_found_by_matching():
    b = _base()
    # v_x - v_gnd = v_x: the law of the source says nothing
    b.chain("gnd", "e", "x", device="controlled_voltage_source", formula=net("x"))
    circuit = b.circuit()
    fatal = [finding for finding in findings(circuit) if finding.fatal]
    assert [finding.code for finding in fatal] == ["undetermined"]


def test_a_part_joined_to_one_net_only_is_odd_but_no_fault():
    b = _base()
    _r(b, "r3", "mid", "mid")
    found = findings(b.circuit())
    assert [(f.code, f.parts, f.fatal) for f in found] == [("short-circuited", ("r3",), False)]
    check(b.circuit())


def test_a_net_used_once_is_told_and_that_no_current_flows_there():
    b = _base()
    _r(b, "r3", "mid", "x")
    found = {finding.code: finding for finding in findings(b.circuit())}
    assert found["single-connection"].nets == ("x",)
    assert found["no-current"].parts == ("r3",)
    assert not any(finding.fatal for finding in found.values())


def test_a_net_that_a_formula_or_a_switch_reads_is_used_there():
    b = _base()
    _r(b, "r3", "mid", "x")
    b.chain("gnd", "e", "y", device="controlled_voltage_source", formula=net("x"))
    _r(b, "r4", "y", "gnd")
    assert "single-connection" not in {finding.code for finding in findings(b.circuit())}
    b = _base()
    _r(b, "r3", "mid", "x")
    b.chain("vcc", "s", "gnd", device="switch", control="x")
    assert "single-connection" not in {finding.code for finding in findings(b.circuit())}
