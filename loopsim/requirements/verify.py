"""Judge the requirements of a circuit: measure, compare, say where. What is not known is undecided, never met."""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable, Mapping
from dataclasses import replace

from loopsim.circuit import Circuit, Requirement
from loopsim.equations.assemble import parameter_values
from loopsim.equations.parameters import number
from loopsim.equations.structure import check
from loopsim.errors import AnalysisError, CircuitError, MissingExtra
from loopsim.requirements.computed import Computed
from loopsim.requirements.corners import place
from loopsim.requirements.judged import Judged, open_question
from loopsim.requirements.measures import measure
from loopsim.requirements.outcomes import RequirementOutcome
from loopsim.requirements.proof import ENOUGH, weakest


def verify(
    circuit: Circuit,
    settings: Mapping[str, float] | None = None,
    *,
    box: float = 1e3,
    budget: float = 60.0,
    require_proof: bool = False,
    hear: Callable[[RequirementOutcome], None] | None = None,
) -> tuple[RequirementOutcome, ...]:
    """Every requirement of the circuit, in order.

    box [V] as for `states`; budget: wall time for all of them [s]; require_proof: a requirement is met only by
    what is proved, so that one that rests on stations, a simulation or corners is undecided; hear: is told
    each outcome as soon as it is there. CircuitError for a circuit that is wrong in itself; what goes wrong in
    one requirement makes that one undecided. InternalError is not caught.
    """
    given = dict(settings or {})
    if circuit.requirements:
        check(circuit)
        parameter_values(circuit, given)
    computed = Computed(circuit, box, budget, require_proof)
    outcomes = []
    for requirement in circuit.requirements:
        outcomes.append(_outcome(computed, requirement, given))
        if hear:
            hear(outcomes[-1])
    return tuple(outcomes)


def _outcome(computed: Computed, requirement: Requirement, settings: Mapping[str, float]) -> RequirementOutcome:
    began = time.monotonic()
    judged = _over_bindings(computed, requirement, settings)
    if judged.outcome == "met" and computed.require_proof and judged.proof not in ENOUGH:
        more = f"; {judged.note}" if judged.note else ""
        judged = replace(judged, outcome="undecided", note=f"met, but only {judged.proof}: not proved{more}")
    span = requirement.span
    return RequirementOutcome(
        circuit=computed.circuit.name,
        label=requirement.label,
        text=requirement.text,
        outcome=judged.outcome,
        measured=judged.measured,
        limits=judged.limits,
        margin=judged.margin,
        seconds=time.monotonic() - began,
        note=judged.note,
        file=span.file if span else computed.circuit.file,
        line=span.line if span else None,
        proof=judged.proof,
    )


def _over_bindings(computed: Computed, requirement: Requirement, settings: Mapping[str, float]) -> Judged:
    """The worst of all combinations of the `at` values; met by the weakest label among them."""
    try:
        bindings = _bindings(computed.circuit, requirement, settings)
    except CircuitError as error:
        return open_question(error.message)
    found = []
    for bound in bindings:
        where = place(computed.circuit, bound) if len(bindings) > 1 else ""
        found.append(_at(computed, requirement, {**settings, **bound}).at(where))
    worst = min(found, key=lambda judged: judged.badness)
    return replace(worst, proof=weakest([judged.proof for judged in found])) if worst.outcome == "met" else worst


def _bindings(circuit: Circuit, requirement: Requirement, settings: Mapping[str, float]) -> list[dict[str, float]]:
    """Every combination of the `at` values [SI]."""
    values = parameter_values(circuit, settings)
    choices = [
        [float(number(formula, values, {}, "a binding", requirement.span)) for formula in formulas]
        for _, formulas in requirement.at
    ]
    names = [let for let, _ in requirement.at]
    return [dict(zip(names, chosen, strict=True)) for chosen in itertools.product(*choices)]


def _at(computed: Computed, requirement: Requirement, settings: Mapping[str, float]) -> Judged:
    """One requirement at one choice of its lets, with what an analysis could not do as the reason for a doubt."""
    try:
        return measure(computed, requirement, settings)
    except (AnalysisError, CircuitError) as error:
        return open_question(f"{error.code}: {error.message}")
    except MissingExtra as error:
        return open_question(str(error))
