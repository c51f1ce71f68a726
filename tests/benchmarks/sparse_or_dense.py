"""From how many unknowns sparse arrays pay: one Newton step, dense against sparse, on ladders and grids of diodes.

    python tests/benchmarks/sparse_or_dense.py

Prints microseconds, the best of several runs, and the ratio; the size where the ratio passes one is what
`loopsim.equations.sparse.SPARSE_FROM` holds. Run with one linear-algebra thread.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any

import numpy as np

from loopsim.build import CircuitBuilder
from loopsim.circuit import Circuit
from loopsim.equations.assemble import assemble
from loopsim.equations.sparse import assemble_sparse


def ladder(size: int) -> Circuit:
    """A chain of resistors with a diode from each net to gnd."""
    b = CircuitBuilder("ladder")
    b.chain("gnd", "v", "n0", device="voltage_source", voltage=5.0)
    for j in range(size):
        b.chain(f"n{j}", f"r{j}", f"n{j + 1}", device="resistor", resistance=1e3)
        b.chain(f"n{j + 1}", f"d{j}", "gnd", device="diode")
    return b.circuit()


def grid(side: int) -> Circuit:
    """A square of resistors with a diode from each net to gnd."""
    b = CircuitBuilder("grid")
    b.chain("gnd", "v", "n0_0", device="voltage_source", voltage=5.0)
    for i in range(side):
        for j in range(side):
            b.chain(f"n{i}_{j}", f"d{i}_{j}", "gnd", device="diode")
            if i + 1 < side:
                b.chain(f"n{i}_{j}", f"a{i}_{j}", f"n{i + 1}_{j}", device="resistor", resistance=1e3)
            if j + 1 < side:
                b.chain(f"n{i}_{j}", f"b{i}_{j}", f"n{i}_{j + 1}", device="resistor", resistance=1e3)
    return b.circuit()


def best(call: Callable[[], Any], runs: int = 9) -> float:
    """Shortest of several runs [us]."""
    call()
    times = []
    for _ in range(runs):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return 1e6 * min(times)


def main() -> None:
    for name, make, sizes in (("ladder", ladder, (20, 50, 80, 120, 200, 400)), ("grid", grid, (5, 7, 9, 11, 14, 20))):
        for size in sizes:
            circuit = make(size)
            dense, thin = assemble(circuit), assemble_sparse(circuit)
            x = np.full(dense.n, 0.4)

            def dense_step(system: Any = dense, x: Any = x) -> Any:
                return np.linalg.solve(system.jacobian(x), system.residual(x))

            def sparse_step(system: Any = thin, x: Any = x) -> Any:
                return system.factor(x).solve(system.residual(x))

            full, few = best(dense_step), best(sparse_step)
            print(f"{name:7s} {dense.n:5d} unknowns: dense {full:9.0f} us, sparse {few:7.0f} us, ratio {full / few:6.2f}")


if __name__ == "__main__":
    main()
