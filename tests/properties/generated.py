"""Systems whose number of solutions is known from how they were made. Each maker takes a seeded generator and gives a Case.

Makers: roots of polynomials hidden in random linear networks; products of independent cells; monotone networks with
exactly one solution;
saturating rings with gain below and above one; a load of constant power behind a resistance.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import mpmath
import numpy as np
from array_systems import Kind, Row, system_of, unit
from exact_roots import real_roots

from loopsim.equations.system import System

GAP = 0.05  # smallest distance of chosen roots: far above what rounding blurs, small enough to be work


@dataclass(frozen=True, eq=False)
class Case:
    """family: which maker; points: (k, n) where they are known, else None; count: how many there are, anywhere."""

    family: str
    system: System
    count: int
    points: np.ndarray | None


def spread_roots(random: np.random.Generator, count: int) -> np.ndarray:
    """(count,) ascending, within +/- 4, at least GAP apart."""
    while True:
        roots = np.sort(random.uniform(-4.0, 4.0, count))
        if count < 2 or np.min(np.diff(roots)) > GAP:
            return roots


def polynomial_cell(random: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """(roots, ascending coefficients) of a polynomial of degree 1 to 5 with some complex pairs mixed in; now and then
    no root is real."""
    real = int(random.choice([0, 1, 2, 2, 3, 3, 3, 4, 5, 5]))
    pairs = 1 + int(random.integers(0, 2)) if real == 0 else int(random.choice([0, 0, 1])) if real <= 3 else 0
    roots = spread_roots(random, real)
    found = np.array([1.0])
    for r in roots:
        found = np.convolve(found, [-r, 1.0])
    for _ in range(pairs):
        a, b = random.uniform(-2, 2), random.uniform(0.5, 2)
        found = np.convolve(found, [a * a + b * b, -2 * a, 1.0])
    return roots, found * random.choice([-1.0, 1.0]) * 10 ** random.uniform(-2, 1)


def mixing(random: np.random.Generator, n: int) -> np.ndarray:
    """A random invertible matrix of moderate condition."""
    while True:
        matrix = random.normal(size=(n, n))
        if np.linalg.cond(matrix) < 50.0:
            return matrix


def hidden_roots(random: np.random.Generator) -> Case:
    """Polynomials p_k(w_k) = 0 with w = W x, rows mixed by R: as many solutions as the product of their real roots."""
    n = int(random.integers(1, 4))
    cells = [polynomial_cell(random) for _ in range(n)]
    W, R = mixing(random, n), mixing(random, n) * 10 ** random.uniform(-6, 2)
    constants = np.array([c[0] for _, c in cells])
    linear = np.array([c[1] for _, c in cells])
    # part of each linear term is moved into the linear network, so that cell and network cannot be told apart
    moved = linear * random.uniform(-1, 2, n)
    rows = [
        Row(Kind.POLYNOMIAL, W[k], R[:, k], (cells[k][1][1] - moved[k], *cells[k][1][2:])) for k in range(n)
    ]
    system = system_of(R @ np.diag(moved) @ W, -R @ constants, rows)
    grid = np.stack(np.meshgrid(*[roots for roots, _ in cells], indexing="ij"), axis=-1)
    grid = grid.reshape(int(np.prod(grid.shape[:-1])), n)
    # the coefficients were rounded: the true roots are those of the rounded polynomials
    exact = [np.array([float(r) for r in real_roots([float(a) for a in c])]) for _, c in cells]
    assert all(len(e) == len(roots) for e, (roots, _) in zip(exact, cells, strict=True))
    return Case("hidden roots", system, len(grid), np.linalg.solve(W, grid.T).T)


def product_of_cells(random: np.random.Generator) -> Case:
    """Independent latches x = a tanh(b x + c), mixed by a random network of the outputs: 1 or 3 points each by the
    closed form of the
    fold (folds of a saturating amplifier with positive feedback)."""
    n = int(random.integers(2, 5))
    counts, rows, drives = [], [], []
    R = mixing(random, n)
    for k in range(n):
        gain = random.uniform(1.3, 30.0) if random.random() < 0.75 else random.uniform(0.2, 0.8)
        fold = np.sqrt(1 - 1 / gain) - np.arccosh(np.sqrt(gain)) / gain if gain > 1 else 0.0
        share = random.choice([0.0, 0.5, 0.9, 1.2])
        counts.append(3 if gain > 1 and share < 1 else 1)
        drives.append(random.choice([-1.0, 1.0]) * (share * fold if gain > 1 else share))
        rows.append(Row(Kind.SATURATION, unit(n, k, gain), -R[:, k]))
    return Case("product of cells", system_of(R, R @ np.array(drives), rows), int(np.prod(counts)), None)


def monotone_network(random: np.random.Generator) -> Case:
    """Resistors, junctions and increasing curves between random nets, every net tied to ground by a resistor: exactly
    one operating point
    (R. J. Duffin 1947, from memory)."""
    n = int(random.integers(2, 8))
    G = np.diag(10 ** random.uniform(-6, -3, n))
    rows = []
    for _ in range(int(random.integers(n, 3 * n))):
        a, b = (int(j) for j in random.choice(n + 1, 2, replace=False))
        line = (unit(n + 1, a) - unit(n + 1, b))[:n]
        what = random.integers(0, 4)
        if what == 0:
            G += 10 ** random.uniform(-6, -2) * np.outer(line, line)
        elif what == 1:
            rows.append(Row(Kind.EXPONENTIAL, line * random.uniform(20, 40), line * 10 ** random.uniform(-16, -8)))
        elif what == 2:
            p = tuple(10 ** random.uniform(-6, -3) * np.array([1.0, 0.0, random.uniform(0, 1)]))
            rows.append(Row(Kind.POLYNOMIAL, line, line, p))
        else:
            rows.append(Row(Kind.SATURATION, line * random.uniform(1, 50), line * 10 ** random.uniform(-5, -2)))
    s = random.normal(size=n) * 10 ** random.uniform(-5, -2, n)
    # bounded by passivity: |x| below sum |s| / smallest conductance to ground; scaled so that 10 V is enough
    bound = np.sum(np.abs(s)) / np.min(np.diag(G))
    return Case("monotone network", system_of(G, s * min(1.0, 5.0 / bound), rows), 1, None)


def saturating_ring(random: np.random.Generator) -> Case:
    """x_(k+1) = sign_k tanh(gain_k x_k) round a ring: three points where the product of the signs is positive and that
    of the gains
    exceeds one, else one (the composed curve is concave on one side of zero)."""
    n = int(random.integers(2, 7))
    target = random.choice([random.uniform(0.2, 0.9), random.uniform(1.15, 400.0)])
    shares = random.dirichlet(np.full(n, 3.0))
    gains = target**shares
    signs = random.choice([-1.0, 1.0], n)
    rows = [
        Row(Kind.SATURATION, unit(n, k, signs[k] * gains[k]), unit(n, (k + 1) % n, -1.0)) for k in range(n)
    ]
    count = 3 if target > 1 and np.prod(signs) > 0 else 1
    return Case("saturating ring", system_of(np.eye(n), np.zeros(n), rows), count, None)


def constant_power(random: np.random.Generator) -> Case:
    """(V - v) / R = i(v), i the smooth law of a load of constant power: P / v above its drop-out, (P / V0) (2 u - u^3)
    below. Counted on
    each piece by the roots of its polynomial: 0, 1 or 2 above drop-out, 1 to 3 below it."""
    while True:
        supply = random.uniform(2.0, 9.0)
        dropout = random.uniform(0.1, 0.6) * supply
        ohms = 10 ** random.uniform(-1, 3)
        power = random.uniform(0.05, 1.5) * supply**2 / (4 * ohms)
        with mpmath.workdps(40):
            V, D, R, P = (mpmath.mpf(a) for a in (supply, dropout, ohms, power))
            apart = abs(V * V - 4 * P * R) > V * V / 1000
            above = [v for v in real_roots([P * R, -V, mpmath.mpf(1)]) if v > D] if apart else None
            # u = v / D: (V - D u) / R = (P / D) (2 u - u^3), within |u| <= 1; odd for negative v
            cubic = [V / R, -D / R - 2 * P / D, mpmath.mpf(0), P / D]
            try:
                below = [u * D for u in real_roots(cubic) if abs(u) <= 1]
            except AssertionError:
                continue
            edges = [abs(abs(v) - D) for v in [*(above or []), *below]]
        if above is None or min(edges, default=1) < dropout * 1e-3:
            continue
        roots = np.array([[float(v)] for v in [*below, *above]])
        # a double root of the cubic nearby would be a fold in disguise
        slopes = [abs(-1 / ohms - power / dropout**2 * (2 - 3 * (v / dropout) ** 2)) for v in (float(b) for b in below)]
        if slopes and min(slopes) < 1e-3 / ohms:
            continue
        row = Row(Kind.RECIPROCAL, [1 / dropout], [power / dropout])
        return Case("constant power", system_of([[1 / ohms]], [supply / ohms], [row]), len(roots), roots)


MAKERS: tuple[Callable[[np.random.Generator], Case], ...] = (
    hidden_roots,
    product_of_cells,
    monotone_network,
    saturating_ring,
    constant_power,
)


def case(seed: int) -> tuple[Case, float]:
    """The case of a seed, and a start box for it from 10 V to 1 MV."""
    random = np.random.default_rng([2024, seed])
    made = MAKERS[seed % len(MAKERS)](random)
    box = 10 ** random.uniform(1, 6)
    if made.points is not None and len(made.points):
        # a hidden root may lie outside 10 V: the box is what is asked about, so it must hold them all to count them all
        box = max(box, 2.0 * float(np.max(np.abs(made.points))))
    return made, box
