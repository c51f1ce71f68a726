"""What the devices put into the balances: currents that add up, power that adds up."""

import numpy as np
import pytest
from probing import solve
from test_assemble import KILN

from loopsim.build import CircuitBuilder
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble, pin_currents


def random_circuit(seed: int) -> Circuit:
    """A resistive grid with diodes, transistors and sources at random places."""
    rng = np.random.default_rng(seed)
    b = CircuitBuilder(f"random{seed}")
    nets = ["gnd", *(f"n{j}" for j in range(6))]
    b.chain("gnd", "supply", "top", device="voltage_source", voltage=float(rng.uniform(2.0, 9.0)))
    b.chain("top", "fuse", "n0", device="resistor", resistance=100.0)
    for j, name in enumerate(nets[2:]):
        b.chain(nets[j + 1], f"up{j}", name, device="resistor", resistance=float(10 ** rng.uniform(2, 4)))
        b.chain(name, f"down{j}", "gnd", device="resistor", resistance=float(10 ** rng.uniform(2, 4)))
    for j in range(3):
        a, c = rng.choice(nets, 2, replace=False)
        b.chain(a, f"d{j}", c, device="diode", saturation_current=float(10 ** rng.uniform(-15, -9)))
    for j in range(2):
        c, base, e = rng.choice(nets, 3, replace=False)
        device = str(rng.choice(["bipolar_npn", "bipolar_pnp"]))
        b.part(
            f"q{j}",
            device,
            {"collector": c, "base": base, "emitter": e},
            forward_gain=float(rng.uniform(20, 200)),
        )
    d, g, s = rng.choice(nets, 3, replace=False)
    b.part("m", "mosfet_n", {"drain": d, "gate": g, "source": s, "body": "gnd"})
    a, c = rng.choice(nets, 2, replace=False)
    b.chain(a, "bias", c, device="current_source", current=float(rng.normal(0, 1e-3)))
    return b.circuit()


def _pins(circuit, found):
    """(net, current into the part there) of every pin."""
    for part in circuit.parts:
        if set(part.pins) == {"from", "to"}:
            yield part.pins["from"], found[part.name]
            yield part.pins["to"], -found[part.name]
        else:
            for pin, net in part.pins.items():
                yield net, found[f"{part.name}.{pin}"]


@pytest.mark.parametrize("seed", range(12))
def test_currents_at_every_net_add_up_and_so_does_the_power(seed):
    # B. D. H. Tellegen 1952 (from memory): sum of v i over all parts is zero
    circuit = random_circuit(seed)
    system = assemble(circuit)
    x = solve(system)
    found = pin_currents(circuit, x)
    volts = {"gnd": 0.0} | {name: x[system.index["net", name]] for name in circuit.nets}
    sums, power, size = dict.fromkeys(volts, 0.0), 0.0, 0.0
    for net, current in _pins(circuit, found):
        sums[net] += current
        power += volts[net] * current
        size += abs(volts[net] * current)
    assert max(abs(value) for value in sums.values()) < 1e-10
    assert power == pytest.approx(0.0, abs=1e-9 * size)


def test_transistors_take_in_what_they_give_out():
    circuit = random_circuit(3)
    found = pin_currents(circuit, solve(assemble(circuit)))
    for part in ("q0", "q1", "m"):
        total = sum(value for name, value in found.items() if name.startswith(f"{part}."))
        assert total == pytest.approx(0.0, abs=1e-15)


def test_passive_parts_take_power_only():
    for seed in range(12):
        circuit = random_circuit(seed)
        system = assemble(circuit)
        x = solve(system)
        found = pin_currents(circuit, x)
        for part in circuit.parts:
            if part.device in ("resistor", "diode"):
                a, b = (
                    0.0 if net == "gnd" else x[system.index["net", net]]
                    for net in (part.pins["from"], part.pins["to"])
                )
                assert (a - b) * found[part.name] >= -1e-18


def test_currents_of_a_batch_are_those_of_its_members():
    settings = {"supply": np.array([8.0, 9.0]), "ohms": np.array([1e3, 2e3])}
    singles = []
    for j in range(2):
        one = {name: values[j] for name, values in settings.items()}
        singles.append((one, np.linspace(0.1, 0.4, assemble(KILN).n) * (j + 1)))
    together = pin_currents(KILN, np.array([x for _, x in singles]), settings)
    for j, (one, x) in enumerate(singles):
        alone = pin_currents(KILN, x, one)
        for name, value in together.items():
            assert np.broadcast_to(value, 2)[j] == pytest.approx(alone[name], rel=1e-12, abs=1e-18), name


def test_a_passive_circuit_has_a_positive_determinant_with_any_strays():
    # branch rows are minus the transpose of branch columns, so det(J + s C) > 0 for s >= 0 (network theory, from memory)
    b = CircuitBuilder("passive")
    b.chain("gnd", "v", "a", device="voltage_source", voltage=1.0)
    b.chain("a", "l", "b", device="inductor", inductance=1e-3)
    b.chain("b", "r", "c", device="resistor", resistance=10.0)
    b.chain("c", "d", "gnd", device="diode")
    b.chain("c", "k", "gnd", device="capacitor", capacitance=1e-6)
    system = assemble(b.circuit())
    jacobian = system.jacobian(solve(system))
    for rate in (0.0, 1.0, 1e3, 1e6):
        assert np.linalg.det(jacobian + rate * system.C) > 0.0
