"""How long the proof of all operating points takes, beside two general-purpose ways to the same equations. Prints a table.

    OMP_NUM_THREADS=1 python tests/benchmarks/states.py [--quick]

Every contender gets the same System, written for it: `scipy.optimize.fsolve` from 1,000 random starts (finds, proves
nothing), and codac 2.x, a rigorous interval library in C++, with its inverse contractor's centred form switched off (with
it points were lost), once in a search loop written here (contract, Krawczyk, bisect) and once with its own paver (which
encloses and does not count). Times are processor time of one process on one thread; compare the columns of one run, not
runs. codac is needed for this script alone.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
import time
import warnings
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.optimize import fsolve

sys.path[:0] = [str(Path(__file__).parents[2]), str(Path(__file__).parents[1])]

from array_systems import Kind, Row, solve, system_of, unit
from clock import median_time

import loopsim
from loopsim.equations.system import System

BOX = 1e3  # V, the box that `states` starts from, for all
LIMIT = 30.0  # s, after which a search loop gives up
STARTS = 1000
TUNNEL = (11.8, -10.5, 2.5)


@dataclass(frozen=True)
class Problem:
    """name, equations, true count, reach of the random starts [V]."""

    name: str
    system: System
    count: int
    reach: float


def two_diodes() -> System:
    rows = [Row(Kind.POLYNOMIAL, unit(2, j), unit(2, j), c) for j, c in enumerate((TUNNEL, (4.56, -2.69, 0.43)))]
    return system_of(np.full((2, 2), 1 / 13.3), np.full(2, 30 / 13.3), rows)


def comparators(k: int) -> System:
    """k comparators with hysteresis in one system: unknowns plus and out of each, out = rail tanh(gain plus / rail).
    (The op-amp's model
    clamps with ln(1 + exp), whose inverse contractor ends codac 2.1.2's process.)"""
    n = 2 * k
    gain, rail, r_in, r_fb, drive = 1e5, 8.95, 12.0, 33.0, 0.1
    G, s, rows = np.zeros((n, n)), np.zeros(n), []
    for j in range(0, n, 2):
        G[j, j] = 1 / r_in + 1 / r_fb
        G[j, j + 1] = -1 / r_fb
        s[j] = drive / r_in
        G[j + 1, j + 1] = 1.0
        rows.append(Row(Kind.SATURATION, unit(n, j, gain / rail), unit(n, j + 1, -rail)))
    return system_of(G, s, rows)


def latch() -> System:
    """Cross-coupled bipolar pair: c1, c2, b1, b2; 1 kohm, 10 kohm, 5 V; currents in mA."""
    thermal, saturation, forward, reverse = 0.0256925791210858, 1e-11, 100.0, 2.0
    G, s, rows = np.zeros((4, 4)), np.zeros(4), []
    for c, other_b in ((0, 3), (1, 2)):
        G[c, c] += 1.0 + 0.1
        G[c, other_b] -= 0.1
        G[other_b, other_b] += 0.1
        G[other_b, c] -= 0.1
        s[c] = 5.0
    for c, b in ((0, 2), (1, 3)):
        rows.append(Row(Kind.EXPONENTIAL, unit(4, b, 1 / thermal), saturation * (unit(4, c) + unit(4, b, 1 / forward))))
        line = unit(4, b, 1 / thermal) - unit(4, c, 1 / thermal)
        rows.append(Row(Kind.EXPONENTIAL, line, saturation * (unit(4, c, -1 - 1 / reverse) + unit(4, b, 1 / reverse))))
    return system_of(G, s, rows)


def chain(n: int) -> System:
    """n tunnel diodes, each fed from 35 V through 13.3 kohm, 10 mS between neighbours; mA."""
    G = np.eye(n) / 13.3
    for k in range(n - 1):
        step = unit(n, k) - unit(n, k + 1)
        G += 10.0 * np.outer(step, step)
    return system_of(G, np.full(n, 35 / 13.3), [Row(Kind.POLYNOMIAL, unit(n, j), unit(n, j), TUNNEL) for j in range(n)])


def problems(quick: bool) -> list[Problem]:
    listed = [
        Problem("two tunnel diodes", two_diodes(), 9, 5.0),
        Problem("hysteresis comparator", comparators(1), 3, 10.0),
        Problem("3 comparators", comparators(3), 27, 10.0),
        Problem("bipolar latch", latch(), 3, 6.0),
        Problem("chain of 4 diodes", chain(4), 3, 5.0),
        Problem("chain of 6 diodes", chain(6), 5, 5.0),
        Problem("chain of 8 diodes", chain(8), 5, 5.0),
    ]
    if not quick:
        listed.insert(3, Problem("5 comparators", comparators(5), 243, 10.0))
        listed.insert(4, Problem("6 comparators", comparators(6), 729, 10.0))
    return listed


def from_random_starts(problem: Problem, known: np.ndarray) -> tuple[float, int]:
    """(time, how many of the known points it reaches) of fsolve with the Jacobian given."""
    system = problem.system
    starts = np.random.default_rng(1).uniform(-problem.reach, problem.reach, (STARTS, system.n))
    ends = []
    began = time.process_time()
    with np.errstate(all="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for start in starts:
            x, _, code, _ = fsolve(system.residual, start, fprime=system.jacobian, full_output=True, xtol=1e-12)
            if code == 1 and np.all(np.isfinite(x)):
                ends.append(x)
    took = time.process_time() - began
    distance = np.max(np.abs(np.array(ends)[:, None] - known[None]), axis=2) if ends else np.full((1, len(known)), np.inf)
    return took, int(np.count_nonzero(distance.min(axis=0) < 1e-6))


def as_codac(system: System):
    """The equations as vector functions of codac, which takes ten rows at most in one."""
    import codac

    x = codac.VectorVar(system.n)

    def combine(coefficients, terms, constant):
        total = None
        for a, t in zip(coefficients, terms, strict=True):
            if a != 0.0:
                part = float(a) * t
                total = part if total is None else total + part
        return total if constant == 0.0 else total + float(constant)

    unknowns = [x[j] for j in range(system.n)]
    psi = []
    for k in range(system.m):
        w = combine(system.W[k], unknowns, system.c[k])
        kind = Kind(int(system.kinds[k]))
        if kind is Kind.POLYNOMIAL:
            p = [float(a) for a in system.parameters[k]]
            total = p[-1] * w
            for a in reversed(p[:-1]):
                total = (total + a) * w if a != 0.0 else total * w
            psi.append(total)
        elif kind is Kind.EXPONENTIAL:
            psi.append(codac.exp(w) - 1.0)
        elif kind is Kind.SATURATION:
            psi.append(codac.tanh(w))
        else:
            raise ValueError(kind)
    rows = []
    for i in range(system.n):
        linear = combine(system.G[i], unknowns, -system.s[i])
        for a, p in zip(system.B[i], psi, strict=True):
            if a != 0.0:
                linear = linear + float(a) * p
        rows.append(linear)
    return [codac.AnalyticFunction([x], codac.vec(*rows[i : i + 10])) for i in range(0, len(rows), 10)]


def contractor_of(functions, size: int):
    """Contracts to where all of them are zero; centred form off."""
    import codac

    def zero(function):
        return codac.IntervalVector([[0.0, 0.0]] * function.output_size())

    listed = [codac.CtcInverse(f, zero(f), with_centered_form=False) for f in functions]
    found = listed[0]
    for other in listed[1:]:
        found = found & other
    return found


def middle_of(box) -> np.ndarray:
    """(n,) doubles."""
    middle = box.mid()
    return np.array([middle[j] for j in range(box.size())])


def stacked(matrices, n: int):
    """One interval matrix from its row blocks."""
    import codac

    if len(matrices) == 1:
        return matrices[0]
    return codac.IntervalMatrix([[m[i, j] for j in range(n)] for m in matrices for i in range(m.rows())])


def joined(vectors):
    """One interval vector from its parts."""
    import codac

    return vectors[0] if len(vectors) == 1 else codac.IntervalVector([v[i] for v in vectors for i in range(v.size())])


def codac_loop(system: System, limit: float) -> tuple[float, int, int, bool]:
    """(time, points, boxes, finished): contract, Krawczyk on what is left, bisect the widest side."""
    import codac

    n = system.n
    functions = as_codac(system)
    contractor = contractor_of(functions, n)
    identity = codac.IntervalMatrix(codac.Matrix(np.eye(n)))
    began = time.process_time()
    stack = [codac.IntervalVector([[-BOX, BOX]] * n)]
    points: list[np.ndarray] = []
    boxes = 0
    while stack:
        if time.process_time() - began > limit:
            return time.process_time() - began, len(points), boxes, False
        box = stack.pop()
        boxes += 1
        settled = False
        for _ in range(50):
            before = box.max_diam()
            box = contractor.contract(box)
            if box.is_empty():
                settled = True
                break
            if box.max_diam() < 1.0:
                middle = middle_of(box)
                slope = stacked([f.diff(box) for f in functions], n)
                mid = slope.mid()
                centre = np.array([[mid[i, j] for j in range(n)] for i in range(n)])
                if np.all(np.isfinite(centre)) and np.linalg.cond(centre) < 1e14:
                    inverse = codac.IntervalMatrix(codac.Matrix(np.linalg.inv(centre)))
                    point = codac.IntervalVector([[m, m] for m in middle])
                    image = point - inverse * joined([f.eval(point) for f in functions]) + (identity - inverse * slope) * (box - point)
                    if image.is_strict_interior_subset(box):
                        points.append(middle)
                        settled = True
                        break
                    box = box & image
                    if box.is_empty():
                        settled = True
                        break
            if box.max_diam() > 0.8 * before:
                break
        if settled:
            continue
        if box.max_diam() < 1e-9:
            points.append(middle_of(box))
            continue
        stack += list(box.bisect_largest())
    return time.process_time() - began, len(points), boxes, True


def codac_paver(name: str, limit: float) -> tuple[float, bool]:
    """(time, finished) of codac's own paver down to boxes of 1e-3 V, in a process of its own that is ended at the limit."""
    code = (
        "import sys, time; sys.path[:0] = sys.argv[2:]; import states; import codac\n"
        "name = sys.argv[1]\n"
        "system = next(p.system for p in states.problems(False) if p.name == name)\n"
        "n = system.n; c = states.contractor_of(states.as_codac(system), n)\n"
        "t = time.process_time(); codac.pave(codac.IntervalVector([[-states.BOX, states.BOX]] * n), c, 1e-3)\n"
        "print(time.process_time() - t)\n"
    )
    try:
        done = subprocess.run(
            [sys.executable, "-c", code, name, str(Path(__file__).parent)],
            capture_output=True, text=True, timeout=limit + 5, check=True,
        )  # fmt: skip
    except subprocess.TimeoutExpired:
        return limit, False
    return float(done.stdout.split()[-1]), True


def milliseconds(seconds: float, finished: bool = True) -> str:
    shown = f"{1e3 * seconds:,.0f}" if seconds >= 0.0095 else f"{1e3 * seconds:.1f}"
    return shown if finished else f"> {shown}"


def peers(quick: bool) -> None:
    """The table against the general-purpose libraries."""
    print(
        "| equations | points | loopsim, ms (boxes) | codac, loop here, ms (boxes) | codac, its paver, ms "
        "| 1,000 fsolve starts, ms: found |"
    )
    print("| --- | --- | --- | --- | --- | --- |")
    for problem in problems(quick):
        result = solve(problem.system, BOX)
        if not result.complete or len(result.x) != problem.count:
            raise SystemExit(f"{problem.name}: {len(result.x)} points, complete {result.complete}")
        ours = median_time(lambda p=problem: solve(p.system, BOX), 5)
        loop, points, boxes, finished = codac_loop(problem.system, LIMIT)
        paver, paved = codac_paver(problem.name, LIMIT)
        searched, hits = from_random_starts(problem, result.x)
        print(
            f"| {problem.name} | {problem.count} | {milliseconds(ours)} ({result.boxes})"
            f" | {milliseconds(loop, finished)} ({boxes}){'' if points == problem.count else f', {points} points'}"
            f" | {milliseconds(paver, paved)} | {milliseconds(searched)}: {hits} |",
            flush=True,
        )


def inverters(n: int) -> str:
    stages = "\n".join(
        f"up{i}: pull_up(drain = x{(i + 1) % n}, gate = x{i}, source = vdd, body = vdd)\n"
        f"down{i}: pull_down(drain = x{(i + 1) % n}, gate = x{i}, source = gnd, body = gnd)"
        for i in range(n)
    )
    return f"""circuit ring "Ring of inverters"
kind pull_down = mosfet_n(threshold = 0.5 V, transconductance = 0.4 mA/V^2, slope_factor = 1.3)
kind pull_up = mosfet_p(threshold = 0.5 V, transconductance = 0.2 mA/V^2, slope_factor = 1.3)
gnd -> rail: 1.8 V -> vdd
{stages}
"""


def many_comparators(k: int) -> str:
    cells = "\n".join(
        f"sense -- r_in{i}: 12 kohm -- plus{i} -- r_fb{i}: 33 kohm -- out{i}\n"
        f"u{i}: opamp(plus = plus{i}, minus = gnd, out = out{i}, high = vpos, low = vneg, gain = 100000, headroom = 50 mV)"
        for i in range(k)
    )
    return f"""circuit comparators "Independent comparators"
gnd -> upper: 9 V -> vpos
vneg -> lower: 9 V -> gnd
gnd -> input: 0.1 V -> sense
{cells}
"""


def whole_circuits() -> None:
    """`Circuit.states` from circuit to judged list, inside one process."""
    library = Path(__file__).parents[2] / "circuits"
    listed: list[tuple[str, loopsim.Circuit, float | None]] = [
        ("hysteresis comparator", loopsim.load(str(library / "comparators/cistern_pump.loop")), 20.0),
        ("bipolar latch", loopsim.load(str(library / "latches/frost_alarm.loop")), 30.0),
        ("nine-point tunnel circuit", loopsim.load(str(library / "curves/curve_pair.loop")), 40.0),
        ("5 comparators", loopsim.parse(many_comparators(5)), 200.0),
        ("ring of 4 inverters", loopsim.parse(inverters(4)), None),
        ("ring of 8 inverters", loopsim.parse(inverters(8)), None),
        ("ring of 16 inverters", loopsim.parse(inverters(16)), 3000.0),
    ]
    print("| circuit | points | boxes | `states`, ms | aim, ms |")
    print("| --- | --- | --- | --- | --- |")
    for name, circuit, aim in listed:
        result = circuit.states()
        took = median_time(circuit.states, 5)
        doubt = "" if result.complete else ", not complete"
        wanted = "" if aim is None else f"{aim:,.0f}"
        print(f"| {name} | {len(result)}{doubt} | {result.boxes} | {milliseconds(took)} | {wanted} |", flush=True)


def main() -> None:
    options = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    options.add_argument("--quick", action="store_true", help="leave out the five and six comparators")
    options.add_argument("--only", choices=["circuits", "peers"], help="one of the two tables")
    given = options.parse_args()
    if given.only != "peers":
        whole_circuits()
        print()
    if given.only != "circuits":
        peers(given.quick)


if __name__ == "__main__":
    main()
