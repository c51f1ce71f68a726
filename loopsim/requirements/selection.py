"""Which requirements a pattern names."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from fnmatch import fnmatchcase

from loopsim.circuit import Circuit


def named(patterns: Sequence[str], circuit: str, label: str) -> bool:
    """Whether a pattern (`*` any text, `?` any character) stands for the label, for the circuit, or for both
    as circuit::label. True without any."""
    names = (label, circuit, f"{circuit}::{label}")
    return not patterns or any(fnmatchcase(name, pattern) for pattern in patterns for name in names)


def chosen(circuit: Circuit, patterns: Sequence[str]) -> Circuit:
    """The circuit with those of its requirements that are named."""
    return replace(circuit, requirements=tuple(r for r in circuit.requirements if named(patterns, circuit.name, r.label)))
