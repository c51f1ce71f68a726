"""Time to a given error in transients, beside general-purpose integrators on the same equations. Prints tables in Markdown.

    OMP_NUM_THREADS=1 python tests/benchmarks/transient.py [--quick]

Error: largest over 1,001 equally spaced outputs of the named unknown, over its amplitude. For each contender the tolerance is tightened by
tens; the time for an error is that of the loosest tolerance from which all tighter ones also reach it. Times are CPU times of the process,
best of a few repeats, one thread, dense output at all 1,001 times included; compare the columns of one run, not runs. Contenders get
NumPy callbacks written for the problem, each with its analytic Jacobian where it takes one (IDA and odeint use their own differences).
"""

from __future__ import annotations

import argparse
import sys
import time
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import scipy.sparse
import scipy.sparse.linalg
import sksundae
from numpy.typing import NDArray
from scipy.integrate import odeint, solve_ivp

sys.path[:0] = [str(Path(__file__).parents[2]), str(Path(__file__).parents[1]), str(Path(__file__).parents[1] / "published")]

from test_transistor_amplifier import START as AMPLIFIER_START
from test_transistor_amplifier import amplifier

from loopsim.devices.phi import SLOPE, VALUE, Kind
from loopsim.numerics import kernel, radau

Array = NDArray[np.float64]

ERRORS = (1e-4, 1e-6, 1e-8)
OUTPUTS = 1001
LIMIT = 30.0  # s for one run of a contender; beyond it the contender is out


@dataclass(frozen=True)
class Problem:
    """C x' = f(t, x): our arrays, the same as functions; mass None where C is the identity; column and amplitude: of the error."""

    name: str
    equations: radau.Equations
    x0: Array
    end: float
    source: Array
    waves: radau.Waves
    rate: Callable[[float, Array], Array]
    jacobian: Callable[[float, Array], Array]
    mass: Array | None
    column: int
    amplitude: float


def van_der_pol() -> Problem:
    mu = 1000.0
    eq = radau.equations(
        np.eye(2), np.array([[0.0, -1.0], [1.0, 0.0]]), np.array([[1.0], [0.0]]), np.array([[1.0, 0.0]]), [0.0], [Kind.POLYNOMIAL],
        np.array([[-mu, 0.0, mu / 3.0]]),
    )  # fmt: skip

    def rate(t: float, x: Array) -> Array:
        return np.array([x[1] + mu * (x[0] - x[0] ** 3 / 3.0), -x[0]])

    def jacobian(t: float, x: Array) -> Array:
        return np.array([[mu * (1.0 - x[0] ** 2), 1.0], [-1.0, 0.0]])

    start = np.array([2.0, mu * 2.0 / 3.0])
    return Problem("van der Pol, mu = 1000", eq, start, 2000.0, np.zeros(2), radau.NO_WAVES, rate, jacobian, None, 0, 2.0)


def clamped() -> Problem:
    """vo' = w (vo/2 - vn) - vo/tau - 2.5 w (exp((vo - 5)/0.1) - exp(-(vo + 5)/0.1)), vn' = (vo - vn)/1 ms."""
    w = 2e6 * np.pi
    tau = 1e5 / w
    G = -np.array([[w / 2.0 - 1.0 / tau, -w], [1e3, -1e3]])
    B = np.array([[2.5 * w, -2.5 * w], [0.0, 0.0]])
    W = np.array([[10.0, 0.0], [-10.0, 0.0]])
    eq = radau.equations(np.eye(2), G, B, W, [-50.0, -50.0], [Kind.EXPONENTIAL] * 2)

    def rate(t: float, x: Array) -> Array:
        out, minus = x
        clamp = np.exp(min((out - 5.0) / 0.1, 300.0)) - np.exp(min(-(out + 5.0) / 0.1, 300.0))
        return np.array([w * (out / 2.0 - minus) - out / tau - 2.5 * w * clamp, (out - minus) * 1e3])

    def jacobian(t: float, x: Array) -> Array:
        out = x[0]
        slope = 10.0 * (np.exp(min((out - 5.0) / 0.1, 300.0)) + np.exp(min(-(out + 5.0) / 0.1, 300.0)))
        return np.array([[w / 2.0 - 1.0 / tau - 2.5 * w * slope, -w], [1e3, -1e3]])

    start = np.array([0.1, 0.0])
    return Problem("rail-clamped oscillator, 50 periods", eq, start, 0.1, np.zeros(2), radau.NO_WAVES, rate, jacobian, None, 1, 2.5)


def _functions(
    C: Array, G: Array, B: Array, W: Array, kinds: Array, source: Callable[[float], Array]
) -> tuple[Callable[[float, Array], Array], Callable[[float, Array], Array]]:
    """f = s(t) - G x - B psi(W x) and its Jacobian, one kind for all rows."""
    kind = int(kinds[0])
    none = np.zeros((1, len(kinds)))

    def rate(t: float, x: Array) -> Array:
        return source(t) - G @ x - B @ VALUE[kind](W @ x, none)

    def jacobian(t: float, x: Array) -> Array:
        return -G - (B * SLOPE[kind](W @ x, none)) @ W

    return rate, jacobian


def two_transistors() -> Problem:
    eq, s, waves = amplifier()

    def dense(rows: tuple[Array, Array, Array], width: int) -> Array:
        return scipy.sparse.csr_array((rows[2], rows[1], rows[0]), shape=(len(rows[0]) - 1, width)).toarray()

    joined = dense(eq.rows, 10)
    C, G, B, W = dense(eq.storage, 8), joined[:, :8], joined[:, 8:], dense(eq.control, 8)

    def source(t: float) -> Array:
        return s + waves.columns[1] * 0.1 * np.sin(200.0 * np.pi * t)

    rate, jacobian = _functions(C, G, B, W, np.array([Kind.EXPONENTIAL] * 2), source)
    return Problem("two-transistor amplifier (singular C)", eq, AMPLIFIER_START, 0.2, s, waves, rate, jacobian, C, 7, 3.0)


def fifty_nets() -> Problem:
    """A line of 50 nets with a resistor between neighbours, a capacitor at each and a diode at every second, driven by 5 V at 1 kHz."""
    n, g, c = 50, 1e-3, 1e-9
    G = np.diag(np.full(n, 2.0 * g)) - g * (np.eye(n, k=1) + np.eye(n, k=-1))
    C = np.eye(n) * c
    every = np.arange(0, n, 2)
    B, W = np.zeros((n, len(every))), np.zeros((len(every), n))
    B[every, np.arange(len(every))], W[np.arange(len(every)), every] = 1e-12, 1.0 / 0.05
    kinds = np.array([Kind.EXPONENTIAL] * len(every))
    eq = radau.equations(C, G, B, W, np.zeros(len(every)), kinds)
    column = np.zeros(n)
    column[0] = g
    waves = radau.Waves(
        np.array([kernel.LINEAR, kernel.SINE]),
        (np.array([0.0, 0.0, 0.0, 1.0]), np.array([0.0, 5.0, 2e3 * np.pi, 0.0, 0.0])),
        np.array([np.zeros(n), column]),
        fastest=1e-3,
    )

    def source(t: float) -> Array:
        return column * 5.0 * np.sin(2e3 * np.pi * t)

    raw_rate, raw_jacobian = _functions(C, G, B, W, kinds, source)
    return Problem(
        "line of 50 nets with 25 diodes", eq, np.zeros(n), 5e-3, np.zeros(n), waves, lambda t, x: raw_rate(t, x) / c,
        lambda t, x: raw_jacobian(t, x) / c, None, 4, 1.5,
    )  # fmt: skip


Solver = Callable[[Problem, Array, float], Array]


def ours(problem: Problem, times: Array, tolerance: float) -> Array:
    path = radau.integrate(
        problem.equations, problem.x0, 0.0, problem.end, problem.source, waves=problem.waves, rtol=tolerance, atol=tolerance,
        kept=[problem.column],
    )  # fmt: skip
    return path.at(times)[:, 0]


def ida(problem: Problem, times: Array, tolerance: float) -> Array:
    mass = problem.mass

    def residual(t: float, y: Array, yp: Array, res: Array) -> None:
        res[:] = (yp if mass is None else mass @ yp) - problem.rate(t, y)

    options = {"rtol": tolerance, "atol": tolerance * 1e-2, "max_num_steps": 10_000_000}
    slope = problem.rate(0.0, problem.x0)
    if mass is not None:  # the consistent slopes that the problem's page gives
        slope = np.array([51.338775, 51.338775, -500.0 / 3.0, -24.9757667, -24.9757667, -250.0 / 3.0, -10.00564453, -10.00564453])
    found = sksundae.ida.IDA(residual, **options).solve(times, problem.x0, slope)
    return found.y[:, problem.column]


def ode_pack(problem: Problem, times: Array, tolerance: float) -> Array:
    found = odeint(problem.rate, problem.x0, times, tfirst=True, rtol=tolerance, atol=tolerance * 1e-2, mxstep=10_000_000)
    return found[:, problem.column]


def ivp(method: str) -> Solver:
    def solve(problem: Problem, times: Array, tolerance: float) -> Array:
        found = solve_ivp(
            problem.rate, (0.0, problem.end), problem.x0, method, times, rtol=max(tolerance, 1e-13), atol=tolerance * 1e-2,
            jac=problem.jacobian,
        )  # fmt: skip
        return found.y[problem.column] if found.success else np.full(len(times), np.nan)

    return solve


CONTENDERS: dict[str, Solver] = {
    "IDA (scikit-sundae)": ida, "odeint": ode_pack, "solve_ivp LSODA": ivp("LSODA"), "solve_ivp Radau": ivp("Radau")
}  # fmt: skip


def measured(solver: Solver, problem: Problem, reference: Array, repeats: int, tolerances: Array) -> list[tuple[float, float]]:
    """(error, seconds) for each tolerance, until one run takes longer than LIMIT."""
    times = np.linspace(0.0, problem.end, OUTPUTS)
    found = []
    for tolerance in tolerances:
        best, error = np.inf, np.inf
        for _ in range(repeats):
            began = time.process_time()
            try:
                with warnings.catch_warnings(), np.errstate(all="ignore"):
                    warnings.simplefilter("ignore")
                    values = solver(problem, times, float(tolerance))
            except Exception:  # a contender that gives up has no answer
                values = np.full(OUTPUTS, np.nan)
            best = min(best, time.process_time() - began)
            error = float(np.max(np.abs(values - reference))) / problem.amplitude if len(values) == OUTPUTS else np.inf
            if best > 1.0:
                break
        found.append((error if np.isfinite(error) else np.inf, best))
        if best > LIMIT:
            break
    return found


def time_for(points: list[tuple[float, float]], error: float) -> float | None:
    """Least time among the tolerances from which all tighter ones reach `error`: the loosest of them."""
    good = None
    for reached, seconds in reversed(points):
        if not reached <= error:
            break
        good = seconds
    return good


def table(problem: Problem, quick: bool) -> str:
    times = np.linspace(0.0, problem.end, OUTPUTS)
    tight = 1e-10 if problem.mass is None else 1e-9
    reference = radau.integrate(  # every output is the end of a step: there the method is far better than in between
        problem.equations, problem.x0, 0.0, problem.end, problem.source, waves=problem.waves, rtol=tight, atol=tight,
        kept=[problem.column], stages=5, corners=times[1:].tolist(),
    ).at(times)[:, 0]  # fmt: skip
    tolerances = np.array([factor * 10.0**-k for k in range(2, 11) for factor in (3.0, 1.0)])
    mine = measured(ours, problem, reference, 2 if quick else 9, tolerances)
    own = {error: time_for(mine, error) for error in ERRORS}
    lines = [f"| {problem.name} | " + " | ".join(f"{error:.0e}" for error in ERRORS) + " |", "| --- |" + " --- |" * len(ERRORS)]
    lines.append("| loopsim, ms | " + " | ".join("-" if own[e] is None else f"{1e3 * own[e]:.3g}" for e in ERRORS) + " |")
    for name, solver in CONTENDERS.items():
        if problem.mass is not None and solver is not ida:
            continue
        if "Radau" in name and (quick or "clamped" in problem.name):
            continue
        points = measured(solver, problem, reference, 1 if quick else 3, 10.0 ** -np.arange(3.0, 13.0))
        cells = []
        for error in ERRORS:
            seconds = time_for(points, error)
            mine_seconds = own[error]
            cells.append("-" if seconds is None or mine_seconds is None else f"{1e3 * seconds:.3g} ({seconds / mine_seconds:.0f}x)")
        lines.append(f"| {name}, ms (times ours) | " + " | ".join(cells) + " |")
    return "\n".join(lines)


def ladder(n: int) -> str:
    """Time per step of a resistor-capacitor ladder with a diode at every tenth net, over SuperLU's factor-and-solve of its matrix."""
    g = 1e-3
    G = scipy.sparse.diags_array([np.full(n, 2.0 * g), np.full(n - 1, -g), np.full(n - 1, -g)], offsets=[0, 1, -1]).tocsr()
    C = scipy.sparse.diags_array([np.full(n, 1e-9)], offsets=[0]).tocsr()
    m = n // 10
    at = np.arange(m) * 10
    B = scipy.sparse.csr_array((np.full(m, 1e-12), (at, np.arange(m))), shape=(n, m))
    W = scipy.sparse.csr_array((np.full(m, 40.0), (np.arange(m), at)), shape=(m, n))
    eq = radau.equations(C, G, B, W, np.zeros(m), np.full(m, Kind.EXPONENTIAL))
    source = np.zeros(n)
    source[0] = 5e-3
    began = time.process_time()
    path = radau.integrate(eq, np.zeros(n), 0.0, 1e-3, source, rtol=1e-4, atol=1e-6, kept=[0])
    step = (time.process_time() - began) / (path.accepted + path.rejected)
    values = 3.6 / float(np.median(path.steps)) * eq.mass + radau.jacobian_values(eq, path.end_x)
    matrix = scipy.sparse.csc_array((values, eq.pattern), shape=(n, n))
    began = time.process_time()
    for _ in range(5):
        scipy.sparse.linalg.splu(matrix).solve(source)
    peer = (time.process_time() - began) / 5
    return f"ladder of {n} nets: {1e3 * step:.2f} ms a step, SuperLU factor-and-solve {1e3 * peer:.2f} ms, ratio {step / peer:.2f}"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="fewer repeats, no slow contenders")
    quick = parser.parse_args().quick
    began = time.perf_counter()
    radau.prepare(lambda text: print(text, file=sys.stderr))
    print(f"kernel ready after {time.perf_counter() - began:.1f} s\n")
    for problem in (van_der_pol(), clamped(), two_transistors(), fifty_nets()):
        print(table(problem, quick), "\n", flush=True)
    print(ladder(10_000))


if __name__ == "__main__":
    main()
