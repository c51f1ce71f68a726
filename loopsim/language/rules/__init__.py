"""Every mistake that a circuit file, a command or a program can make: one table that gives the hints, their tests and their page."""

from __future__ import annotations

from collections.abc import Mapping

from loopsim.errors import CircuitError
from loopsim.language.rules.connections import CONNECTIONS
from loopsim.language.rules.definitions import DEFINITIONS
from loopsim.language.rules.entry import Example, Mistake
from loopsim.language.rules.files import FILES
from loopsim.language.rules.formulas import FORMULAS
from loopsim.language.rules.outside import OUTSIDE
from loopsim.language.rules.quantities import QUANTITIES
from loopsim.language.rules.requirements import REQUIREMENTS
from loopsim.language.rules.structure import STRUCTURE
from loopsim.language.rules.text import TEXT

GROUPS: Mapping[str, tuple[Mistake, ...]] = {
    "The text": TEXT,
    "Files": FILES,
    "Quantities": QUANTITIES,
    "Names and definitions": DEFINITIONS,
    "Formulas": FORMULAS,
    "Parts": CONNECTIONS,
    "Requirements": REQUIREMENTS,
    "The structure of the circuit": STRUCTURE,
    "Commands and programs": OUTSIDE,
}
MISTAKES: Mapping[str, Mistake] = {entry.code: entry for group in GROUPS.values() for entry in group}


def with_way_out(error: CircuitError) -> CircuitError:
    """The same error; what helps against such a mistake in general becomes its hint where it has none of its own."""
    if not error.hint and error.code in MISTAKES:
        error.hint = MISTAKES[error.code].way_out
    return error


__all__ = ["GROUPS", "MISTAKES", "Example", "Mistake", "with_way_out"]
