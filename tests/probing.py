"""Parts between ideal sources, and plain Newton: what device and equation tests measure with."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from loopsim.build import CircuitBuilder, let
from loopsim.circuit import Circuit
from loopsim.devices.catalogue import DEVICES
from loopsim.equations.assemble import assemble, pin_currents
from loopsim.equations.system import System


def solve(system: System, x: Any = None) -> np.ndarray:
    """One operating point by Newton with halved steps from x; without x from zero with all sources ramped up in steps."""
    if x is not None:
        return _newton(system, np.array(x, dtype=float))
    x = np.zeros(system.n)
    for share in np.linspace(0.0, 1.0, 26):
        x = _newton(replace(system, s=share * system.s), x)
    return x


def _newton(system: System, x: np.ndarray) -> np.ndarray:
    value = system.residual(x)
    for _ in range(300):
        step = np.linalg.solve(system.jacobian(x), -value)
        share = 1.0
        while True:
            candidate = system.residual(x + share * step)
            if np.linalg.norm(candidate) <= np.linalg.norm(value) * (1 - 0.1 * share) or share < 1e-6:
                break
            share *= 0.5
        x, value = x + share * step, candidate
        if np.max(np.abs(step), initial=0.0) <= 1e-14 * max(1.0, np.max(np.abs(x), initial=0.0)):
            return x
    # the last digits may go round in a circle
    assert np.max(np.abs(step)) < 1e-9, "no operating point was found"
    return x


def probed(device: str, volts: Mapping[str, float], **fields: Any) -> Circuit:
    """The part `x` with every pin held at a voltage by a source of its own (a let of the pin's name)."""
    bench = CircuitBuilder("bench")
    for pin, value in volts.items():
        bench.let(pin, value)
        bench.chain("gnd", f"hold_{pin}", f"at_{pin}", device="voltage_source", voltage=let(pin))
    bench.part("x", device, {pin: f"at_{pin}" for pin in DEVICES[device].pins}, **fields)
    return bench.circuit()


def currents(
    device: str, volts: Mapping[str, float], ambient: float = 25.0, **fields: Any
) -> dict[str, float]:
    """Current into each pin of a part whose pins are held at `volts` [A]."""
    circuit = probed(device, volts, **fields)
    settings = {"ambient": ambient}
    system = assemble(circuit, settings)
    start = np.zeros(system.n)
    for pin, value in volts.items():
        start[system.index["net", f"at_{pin}"]] = value
    x = solve(system, start)
    found = pin_currents(circuit, x, settings)
    pins = DEVICES[device].pins
    if pins == ("from", "to"):
        return {"from": found["x"], "to": -found["x"]}
    return {pin: found[f"x.{pin}"] for pin in pins}
