"""How each operating point answers a small disturbance, and whether that rests on stray capacitance.

Linearised, C x' = -J x. Three things are kept apart:

- the sign of det J. Give every row with a balance of currents a capacitance and every branch law an inductance, all positive (D). Then
  p(s) = det(J + s (C + D)) has the sign of det(C + D) for large s, and where det J has the other one, p has a positive real root: the
  point grows whatever the strays (M. M. Green, A. N. Willson, IEEE Trans. CAS-I 39 (1992) 820-832, from memory). The sign for large s is
  evaluated, for D over many decades; unless it is always the same nothing is claimed. The other sign proves nothing.
- the eigenvalues with the dynamics the circuit declares.
- what strays on nets that have none declared would change: STRAY to gnd on each net, each varied over two decades.
"""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.results import Verdict
from loopsim.equations.ordering import groups, pattern
from loopsim.equations.system import System
from loopsim.numerics.spectrum import Spectrum, determinant_signs, ordered, spectra

Array: TypeAlias = NDArray[np.float64]
Groups: TypeAlias = list[tuple[NDArray[np.int64], NDArray[np.int64]]]

STABLE = "stable"
ANY_STRAYS = "unstable, whatever the strays"
THESE_DYNAMICS = "unstable with these dynamics"
ALL_TRIED = "stable for all strays tried"
NONE_TRIED = "unstable for all strays tried"
DEPENDS = "depends on strays"
UNDECIDED = "undecided"

STRAY = 1e-12  # [F] a net on a board has about a picofarad to ground (common practice)
TRIALS = 7  # sets of strays beside the equal one: each net by its own factor between 1/10 and 10
STRAY_SEED = 20_201
SIGN_TRIALS = 6
MOVING = 0.3  # a net swings when it moves by this share of the one that moves most


def judge(system: System, x: Array) -> list[Verdict]:
    """A verdict on each row of x: (batch, n), DC solutions of a system without batch axes."""
    if len(x) == 0:
        return []
    jacobians = np.broadcast_to(system.jacobian(x), (len(x), system.n, system.n))
    wrong = _wrong_sign(system, jacobians)
    candidates = _stray_nets(system)
    everything = pattern(system) | (system.C != 0.0)
    everything[candidates, candidates] = True
    order = groups(system, everything)
    dynamic = bool(np.any(system.C != 0.0))
    trials = _trials(system, candidates, TRIALS if not dynamic else 3)
    own, *strayed = _spectra(order, jacobians, np.stack([system.C, *trials]))
    grows = [_growing(one) for one in (own, *strayed)]
    return [
        _verdict(
            system,
            jacobians[i],
            bool(wrong[i]),
            own[i],
            [trial[i] for trial in strayed],
            [outcome[i] for outcome in grows],
            trials,
            candidates,
            dynamic,
        )
        for i in range(len(x))
    ]


def _spectra(order: Groups, jacobians: Array, dynamics: Array) -> list[list[Spectrum]]:
    """Eigenvalues of the whole circuit with each C of dynamics: (t, n, n), for each Jacobian: (batch, n, n); group by group of what needs
    what: nets that sources hold fixed then hide no constraint. Points that share the state of a group share its spectrum."""
    parts: list[tuple[list[list[Spectrum]], NDArray[np.int64]]] = []
    for unknowns, rows in order:
        blocks = dynamics[:, rows[:, None], unknowns]
        if not np.any(blocks):
            continue
        size = len(unknowns)
        different, which = np.unique(
            jacobians[:, rows[:, None], unknowns].reshape(len(jacobians), -1), axis=0, return_inverse=True
        )
        count = len(different)
        pairs = spectra(
            np.tile(different.reshape(count, size, size), (len(blocks), 1, 1)), np.repeat(blocks, count, axis=0)
        )
        parts.append(([pairs[t * count : (t + 1) * count] for t in range(len(blocks))], which.reshape(-1)))
    return [
        _joined([(found[t], which) for found, which in parts], len(jacobians)) for t in range(len(dynamics))
    ]


def _joined(parts: list[tuple[list[Spectrum], NDArray[np.int64]]], batch: int) -> list[Spectrum]:
    """The spectra of all groups of each point as one, largest real part first."""
    if not parts:
        return [Spectrum(np.zeros(0, dtype=complex), np.zeros(0))] * batch
    if all(len({len(s.values) for s in found}) == 1 for found, _ in parts):
        values = np.concatenate([np.array([s.values for s in found])[which] for found, which in parts], axis=1)
        errors = np.concatenate([np.array([s.errors for s in found])[which] for found, which in parts], axis=1)
        return ordered(values, errors)
    joined = []
    for i in range(batch):
        values = np.concatenate([found[which[i]].values for found, which in parts])
        errors = np.concatenate([found[which[i]].errors for found, which in parts])
        sequence = np.lexsort((-values.imag, -values.real))
        joined.append(Spectrum(values[sequence], errors[sequence]))
    return joined


def _growing(listed: list[Spectrum]) -> list[bool | None]:
    """Whether each grows: None when its largest real part is within its error bound of zero, or it has no values."""
    lengths = np.array([len(one.values) for one in listed], dtype=np.int64)
    full = np.flatnonzero(lengths)
    answers: list[bool | None] = [None] * len(listed)
    if len(full) == 0:
        return answers
    starts = np.concatenate([[0], np.cumsum(lengths[full])[:-1]])
    real = np.concatenate([listed[i].values for i in full]).real
    errors = np.concatenate([listed[i].errors for i in full])
    upper, lower = np.maximum.reduceat(real + errors, starts), np.maximum.reduceat(real - errors, starts)
    for i, above, below in zip(full.tolist(), upper.tolist(), lower.tolist(), strict=True):
        answers[i] = True if below > 0.0 else False if above < 0.0 else None
    return answers


def _branch_orientation(system: System) -> Array:
    """(n,) sign with which a series inductance enters each branch law; 0 for rows that are none or where it cannot be told."""
    signs = np.zeros(system.n)
    for r, unit in enumerate(system.row_units):
        if unit == "V":
            # the current leaves one net and enters the other with the signs opposite to those of their voltages in the law
            signs[r] = -np.sign(np.sum(system.G[r] * system.G[:, r]))
            if signs[r] == 0.0:
                signs[r] = np.sign(system.C[r, r]) or np.sign(system.G[r, r])
    return signs


def _wrong_sign(system: System, jacobians: Array) -> NDArray[np.bool_]:
    """(batch,) det J has certainly the sign opposite to that for large s with every positive stray."""
    n = system.n
    none = np.zeros(len(jacobians), dtype=bool)
    if len(system.row_units) != n or n == 0:
        return none
    balances = np.array([unit == "A" for unit in system.row_units])
    laws = np.array([unit == "V" for unit in system.row_units])
    orientation = _branch_orientation(system)
    if np.any(laws & (orientation == 0.0)):
        return none
    size = np.maximum(np.max(np.abs(jacobians), axis=(0, 2)), 1e-300)
    rng = np.random.default_rng(STRAY_SEED)
    matrices = []
    for _ in range(SIGN_TRIALS):
        spread = 10.0 ** rng.uniform(-2.0, 2.0, n)
        diagonal = np.where(balances, size * spread, np.where(laws, orientation * size * spread, 0.0))
        # the circuit's own dynamics at the same s, from far below to far above the strays
        own = system.C * 10.0 ** rng.uniform(-12.0, 12.0)
        matrices.append(jacobians[0] + 1e9 * (np.diag(diagonal) + own))
    far = determinant_signs(np.array(matrices))
    if far[0] == 0 or np.any(far != far[0]):
        return none
    here = determinant_signs(jacobians)
    return np.asarray((here != 0) & (here != far[0]))


def _stray_nets(system: System) -> NDArray[np.int64]:
    """Unknowns that can carry a stray capacitance and have none declared: nets and inner nodes with a balance of currents, not held by a
    source."""
    found = []
    declared = np.any(system.C != 0.0, axis=0)
    held = set()
    for unknowns, rows in groups(system, pattern(system)):
        # a law of voltages holds it; where the balance of another net does, the two only want strays to show how they move
        if len(unknowns) == 1 and system.row_units and system.row_units[rows[0]] == "V":
            held.add(int(unknowns[0]))
    for j, (kind, _) in enumerate(system.unknowns):
        balance = not system.row_units or system.row_units[j] == "A"
        if kind != "current" and balance and not declared[j] and j not in held:
            found.append(j)
    return np.array(found, dtype=np.int64)


def _trials(system: System, candidates: NDArray[np.int64], count: int) -> list[Array]:
    """C with strays: equal ones first, then each net by its own factor over two decades."""
    if len(candidates) == 0:
        return []
    rng = np.random.default_rng(STRAY_SEED)
    trials = []
    for i in range(count + 1):
        factor = np.ones(len(candidates)) if i == 0 else 10.0 ** rng.uniform(-1.0, 1.0, len(candidates))
        matrix = system.C.copy()
        matrix[candidates, candidates] += STRAY * factor
        trials.append(matrix)
    return trials


def _verdict(
    system: System, jacobian: Array, wrong: bool, own: Spectrum, strayed: list[Spectrum],
    growing: list[bool | None], trials: list[Array], candidates: NDArray[np.int64], dynamic: bool,
) -> Verdict:  # fmt: skip
    grows, *outcomes = growing
    assumed = (
        f"assumed {STRAY * 1e12:g} pF from each net without capacitance to gnd, each varied by 1/10 to 10"
    )
    if wrong:
        shown, note = own, ""
        if grows is not True and strayed:
            # the dynamics it declares do not carry the growth: a loop without delay; strays give it a rate
            shown, note = strayed[0], f"growth rate with {assumed.removeprefix('assumed ').split(',')[0]}"
        return _filled(
            system,
            jacobian,
            ANY_STRAYS,
            False,
            True,
            shown,
            trials[0] if shown is not own else system.C,
            note,
        )
    if dynamic and len(own.values):
        if grows is None:
            return _filled(
                system,
                jacobian,
                UNDECIDED,
                None,
                False,
                own,
                system.C,
                "a real part is within its rounding error of zero",
            )
        if grows:
            return _filled(system, jacobian, THESE_DYNAMICS, False, False, own, system.C, "")
        if any(outcome is not False for outcome in outcomes):
            at = next(k for k, outcome in enumerate(outcomes) if outcome is not False)
            note = f"grows with strays on nets that have none: {_strays_text(system, trials[at], candidates)}"
            return _filled(system, jacobian, STABLE, True, False, own, system.C, note)
        return _filled(
            system, jacobian, STABLE, True, bool(outcomes) or len(candidates) == 0, own, system.C, ""
        )
    if not outcomes:
        note = "no net can move: every one is held by a source"
        return _filled(
            system, jacobian, STABLE, True, True, own, system.C, note if len(own.values) == 0 else ""
        )
    if all(outcome is False for outcome in outcomes):
        return _filled(
            system, jacobian, ALL_TRIED, True, True, strayed[0], trials[0], f"no dynamics given: {assumed}"
        )
    if all(outcome is True for outcome in outcomes):
        return _filled(
            system, jacobian, NONE_TRIED, False, True, strayed[0], trials[0], f"no dynamics given: {assumed}"
        )
    if any(outcome is None for outcome in outcomes):
        return _filled(
            system,
            jacobian,
            UNDECIDED,
            None,
            False,
            strayed[0],
            trials[0],
            "a real part is within its rounding error of zero",
        )
    at = next(k for k, outcome in enumerate(outcomes) if outcome != outcomes[0])
    word = "grows" if outcomes[at] else "decays"
    note = f"no dynamics given: {assumed}; {word} with {_strays_text(system, trials[at], candidates)}"
    return _filled(system, jacobian, DEPENDS, None, False, strayed[0], trials[0], note)


def _strays_text(system: System, matrix: Array, candidates: NDArray[np.int64]) -> str:
    """The strays of one trial in words, the four largest."""
    added = (matrix - system.C)[candidates, candidates]
    order = np.argsort(-added)[:4]
    return ", ".join(f"{added[k] * 1e12:.3g} pF on {system.unknowns[candidates[k]][1]}" for k in order)


def _filled(
    system: System,
    jacobian: Array,
    text: str,
    stable: bool | None,
    any_strays: bool,
    spectrum: Spectrum,
    dynamics: Array,
    note: str,
) -> Verdict:
    values = spectrum.values
    pairs = values[values.imag > 0.0]
    growing = pairs[pairs.real > 0.0]
    frequency: float | None = None
    swings: tuple[str, ...] = ()
    if stable is False and len(values) and values[0].real > 0.0:
        swings = _swings(system, jacobian, dynamics, values[0])
    if len(growing):
        frequency = float(growing[np.argmax(growing.real)].imag / (2.0 * np.pi))
    return Verdict(
        text=text,
        stable=stable,
        any_strays=any_strays,
        eigenvalues=values,
        growth_rate=float(values[0].real) if len(values) else None,
        damping=float(np.min(-pairs.real / np.abs(pairs))) if len(pairs) else None,
        frequency=frequency,
        swings=swings,
        note=note,
    )


def growing_mode(jacobian: Array, dynamics: Array, value: complex) -> NDArray[np.complex128]:
    """The direction v with (J + value C) v = 0, largest entry 1: (n,)."""
    matrix = jacobian + (value if value.imag else value.real) * dynamics
    rows = np.max(np.abs(matrix), axis=1)
    _, _, right = np.linalg.svd(matrix / np.where(rows > 0.0, rows, 1.0)[:, None])
    mode = right[-1].conj()
    return np.asarray(mode / mode[np.argmax(np.abs(mode))])


def _swings(system: System, jacobian: Array, dynamics: Array, value: complex) -> tuple[str, ...]:
    """Nets that move most in the fastest growing mode."""
    size = np.abs(growing_mode(jacobian, dynamics, value))
    nets = [(float(size[j]), name) for j, (kind, name) in enumerate(system.unknowns) if kind == "net"]
    top = max((s for s, _ in nets), default=0.0)
    return (
        tuple(name for s, name in sorted(nets, key=lambda item: (-item[0], item[1])) if s > MOVING * top)[:6]
        if top > 0.0
        else ()
    )
