"""What can be solved before what: groups of unknowns, in an order in which each needs only earlier ones."""

import numpy as np
import pytest
from array_systems import Kind, Row, system_of, unit

import loopsim
from loopsim.equations.assemble import assemble
from loopsim.equations.ordering import blocks, groups, pattern
from loopsim.errors import AnalysisError


def names(text):
    """The groups of a circuit as sets of the names of their unknowns, in order."""
    system = assemble(loopsim.parse(f'circuit probe "Probe"\n{text}'))
    return [{system.unknowns[j][1] for j in block.unknowns} for block in blocks(system)]


def test_independent_cells_are_groups_of_their_own():
    cells = "\n".join(f"a{k} -- r{k}: 1 kohm -- gnd\na{k} -> f{k}: -2 mA * tanh(a{k} / 1 V) -> gnd" for k in range(4))
    assert names(cells) == [{"a0"}, {"a1"}, {"a2"}, {"a3"}]


def test_two_stages_that_drive_each_other_are_one_group():
    ring = "\n".join(f"x{k} -- r{k}: 1 kohm -- gnd\nx{k} -> f{k}: 2 mA * tanh(x{1 - k} / 1 V) -> gnd" for k in range(2))
    assert names(ring) == [{"x0", "x1"}]


def test_what_follows_a_loop_comes_after_it():
    text = """last -- r3: 1 kohm -- gnd
last -> f3: 1 mA * tanh(a / 1 V) -> gnd
a -- r1: 1 kohm -- gnd
a -> f1: -2 mA * tanh(a / 1 V) -> gnd
"""
    assert names(text) == [{"a"}, {"last"}]


def test_the_current_of_a_source_follows_from_the_nets():
    found = names("gnd -> source: 5 V -> top -- r1: 1 kohm -- out -- r2: 1 kohm -- gnd\n")
    assert found.index({"top"}) < found.index({"source"})
    assert found.index({"out"}) < found.index({"source"})


def test_each_row_answers_for_one_unknown_and_needs_only_earlier_ones():
    """Seeded random systems: the order is a block triangular form."""
    random = np.random.default_rng(71)
    for _ in range(60):
        n = int(random.integers(2, 9))
        G = random.normal(size=(n, n)) * (random.random((n, n)) < 0.25) + np.diag(random.normal(size=n))
        G = G[random.permutation(n)]
        rows = [Row(Kind.SATURATION, unit(n, int(random.integers(n))), unit(n, int(random.integers(n)))) for _ in range(n // 2)]
        system = system_of(G, np.zeros(n), rows)
        order = blocks(system)
        assert sorted(np.concatenate([block.unknowns for block in order]).tolist()) == list(range(n))
        assert sorted(np.concatenate([block.rows for block in order]).tolist()) == list(range(n))
        known: set[int] = set()
        for block in order:
            assert set(block.needs.tolist()) <= known
            held = np.flatnonzero(np.any(pattern(system)[block.rows], axis=0))
            known |= set(block.unknowns.tolist())
            assert set(held.tolist()) <= known


def test_an_unknown_that_no_row_answers_for_is_named():
    with pytest.raises(AnalysisError, match="no equation determines net x2"):
        groups(system_of([[1.0, 0.0], [2.0, 0.0]], [1.0, 2.0], []), np.array([[True, False], [True, False]]))
