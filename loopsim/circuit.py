"""A circuit as plain frozen data: what the author wrote, checked, in SI units, with blocks expanded. No arithmetic here.

The language layer builds it from text; programs may build it from data. Analyses take it and never change it.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

from loopsim.errors import Span
from loopsim.expressions import Expression

if TYPE_CHECKING:
    from loopsim.analyses.cycle import Cycle
    from loopsim.analyses.results import States
    from loopsim.analyses.trace import Trace
    from loopsim.analyses.transient import Transient
    from loopsim.analyses.trip_points import TripPoints
    from loopsim.requirements.outcomes import RequirementOutcome


@dataclass(frozen=True, slots=True)
class Tolerance:
    """Hard limits of what a good part may be: value + low .. value + high, or value * (1 + low) .. value * (1 + high).

    low <= 0 <= high; relative: the two are fractions of the nominal value, else they are in its SI unit.
    """

    low: float
    high: float
    relative: bool

    def limits(self, nominal: float) -> tuple[float, float]:
        """Smallest and largest value of a good part whose nominal value is `nominal`."""
        if self.relative:
            ends = (nominal * (1.0 + self.low), nominal * (1.0 + self.high))
        else:
            ends = (nominal + self.low, nominal + self.high)
        return min(ends), max(ends)


@dataclass(frozen=True, slots=True)
class Parameter:
    """A named quantity that may be set from outside, traced or spread.

    name: a `let` name, or `part.field` for a literal written with a tolerance in a chain or device (never clashes: it has a dot).
    value: its formula over other parameters [SI]; unit: text of its dimension ("V", "ohm", ... for printing);
    low, high: its traced range (`in LO .. HI`), formulas, or None; tolerance: None where exact.
    """

    name: str
    value: Expression
    unit: str = ""
    low: Expression | None = None
    high: Expression | None = None
    tolerance: Tolerance | None = None
    span: Span | None = None


@dataclass(frozen=True, slots=True)
class Curve:
    """A static characteristic y(x).

    form: "polynomial" (values: a1, a2, ... of y = a1 x + a2 x^2 + ...) or "points" (values: x0, y0, x1, y1, ... with x ascending;
    piecewise linear, extended by its end slopes). input_unit, output_unit: "V" or "A" or "" as the units say.
    """

    name: str
    form: str
    values: tuple[Expression, ...]
    input_unit: str = "V"
    output_unit: str = "A"
    span: Span | None = None


@dataclass(frozen=True, slots=True)
class Waveform:
    """A source in time. form: sine, square, ramp or points; fields: the words of the language page to formulas [SI];
    points: (time, value) formula pairs of `points(...)`."""

    form: str
    fields: Mapping[str, Expression] = field(default_factory=dict)
    points: tuple[tuple[Expression, Expression], ...] = ()


FieldValue = Expression | Curve | Waveform | str


@dataclass(frozen=True, slots=True)
class Part:
    """One element.

    name: as written, `instance.part` inside a block. device: its entry in `loopsim.devices.catalogue`.
    pins: pin name to net name; two-terminal parts use the pins `from` and `to` (current is positive from `from` through the part to
    `to`; a voltage source lifts `to` above `from` by its value).
    fields: field name to formula [SI], or a word (as `output = open_collector`), a Curve or a Waveform; only what the author gave,
    kinds already resolved; a field that is absent takes the device's default.
    """

    name: str
    device: str
    pins: Mapping[str, str]
    fields: Mapping[str, FieldValue] = field(default_factory=dict)
    span: Span | None = None


@dataclass(frozen=True, slots=True)
class Coupling:
    """Mutual inductance of the inductors `first` and `second` by coupling coefficient (-1 .. 1)."""

    first: str
    second: str
    coefficient: Expression
    span: Span | None = None


@dataclass(frozen=True, slots=True)
class Relation:
    """What a measure is compared with.

    form: "equal" (targets: one (value, low, high)), "range" (one entry with value None), "below", "above" (limit in value),
    or "set" (several entries). low and high are absolute limits as formulas [SI]; for a bare `= v` both equal the value.
    """

    form: str
    targets: tuple[tuple[Expression | None, Expression | None, Expression | None], ...]


@dataclass(frozen=True, slots=True)
class Requirement:
    """One `expect` line.

    label: as written, else made from the text, unique in the circuit; measure: the words ("stable states", "rising threshold", ...);
    target: the net or formula after `of`, or None; target_text: as written; along: let name or None; in_stable_states: as written;
    relation; at: let name to one or more formulas (each combination is checked); start: the word after `from`, or None;
    over_tolerances; text: the whole line as written; span: its place.
    """

    label: str
    measure: str
    relation: Relation
    text: str
    target: Expression | None = None
    target_text: str = ""
    unit: str = ""
    along: str | None = None
    in_stable_states: bool = False
    at: tuple[tuple[str, tuple[Expression, ...]], ...] = ()
    start: str | None = None
    over_tolerances: bool = False
    span: Span | None = None


@dataclass(frozen=True)
class Circuit:
    """A whole circuit, blocks expanded.

    nets: all nets but gnd, in order of first mention. parameters: by name, in order, `ambient` [K offset: degC] always present.
    sources: the text of every file that went into it, by name as used (for cache keys and messages).
    """

    name: str
    title: str = ""
    file: str | None = None
    nets: tuple[str, ...] = ()
    parameters: Mapping[str, Parameter] = field(default_factory=dict)
    curves: Mapping[str, Curve] = field(default_factory=dict)
    parts: tuple[Part, ...] = ()
    couplings: tuple[Coupling, ...] = ()
    requirements: tuple[Requirement, ...] = ()
    sources: Mapping[str, str] = field(default_factory=dict)

    def trace(self, along: str, *, watch: Any = None, over: tuple[float, float] | None = None, stations: int = 9, box: float = 1e3,
              budget: float = 60.0, range_budget: float = 10.0, **lets: Any) -> Trace:  # fmt: skip
        """The whole static characteristic along a let, through its folds; see `loopsim.analyses.trace.trace`."""
        from loopsim.analyses.trace import trace

        return trace(
            self,
            along,
            watch=watch,
            over=over,
            stations=stations,
            box=box,
            budget=budget,
            range_budget=range_budget,
            settings=lets,
        )

    def trip_points(self, along: str, *, samples: Any = 1000, seed: int = 0, over: tuple[float, float] | None = None, watch: Any = None,
                    nominal: Trace | None = None, **lets: Any) -> TripPoints:  # fmt: skip
        """Where the folds along a let lie for many samples of the parts; see `loopsim.analyses.trip_points.trip_points`."""
        from loopsim.analyses.trip_points import trip_points

        return trip_points(self, along, samples=samples, seed=seed, over=over, watch=watch, nominal=nominal, settings=lets)

    def states(self, *, box: float = 1e3, budget: float = 60.0, **lets: Any) -> States:
        """Every DC operating point with the named lets set [SI]; see `loopsim.analyses.states.states`."""
        from loopsim.analyses.states import states

        return states(self, settings=lets, box=box, budget=budget)

    def verify(
        self, *, box: float = 1e3, budget: float = 60.0, require_proof: bool = False, **lets: Any
    ) -> tuple[RequirementOutcome, ...]:
        """What became of every requirement, in order; see `loopsim.requirements.verify.verify`."""
        from loopsim.requirements.verify import verify

        return verify(self, lets, box=box, budget=budget, require_proof=require_proof)

    def transient(
        self,
        duration: float,
        *,
        start: Any = "off",
        watch: Any = (),
        nudge: float = 0.0,
        tolerance: float = 1e-5,
        ramp: float | None = None,
        max_step: float | None = None,
        progress: Callable[[float], None] | None = None,
        tell: Callable[[str], None] | None = None,
        **lets: Any,
    ) -> Transient:
        """How it moves for `duration` [s] with the named lets set [SI]; see `loopsim.analyses.transient.transient`."""
        from loopsim.analyses.transient import transient

        return transient(
            self, duration, start=start, watch=watch, nudge=nudge, tolerance=tolerance, ramp=ramp, settings=lets,
            max_step=max_step, progress=progress, tell=tell,
        )  # fmt: skip

    def cycle(
        self,
        *,
        start: Any = "off",
        nudge: float = 0.0,
        watch: Any = (),
        tolerance: float = 1e-8,
        duration: float | None = None,
        budget: float = 60.0,
        progress: Callable[[float], None] | None = None,
        tell: Callable[[str], None] | None = None,
        **lets: Any,
    ) -> Cycle:
        """The oscillation that a start leads to, with the named lets set [SI]; see `loopsim.analyses.cycle.cycle`."""
        from loopsim.analyses.cycle import cycle

        return cycle(
            self, start=start, nudge=nudge, watch=watch, tolerance=tolerance, duration=duration, settings=lets, budget=budget,
            progress=progress, tell=tell,
        )  # fmt: skip
