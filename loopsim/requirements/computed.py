"""Analyses of one circuit, each done once for the same settings however many requirements ask for it."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from loopsim.analyses.results import States
from loopsim.analyses.states import states
from loopsim.circuit import Circuit
from loopsim.equations.assemble import parameter_values
from loopsim.equations.plan import plan
from loopsim.errors import AnalysisError
from loopsim.requirements.at_rest import run_to_rest

if TYPE_CHECKING:
    from loopsim.analyses.cycle import Cycle
    from loopsim.analyses.trace import Trace
    from loopsim.analyses.transient import Transient

Settings = Mapping[str, float]
Found = TypeVar("Found")

RANGE_SHARE = 0.5  # of the time left: what the proof over a trace's whole range may take, where proof is required


@dataclass
class Computed:
    """box [V] as for `states`; budget [s]: for everything together; deadline [s] of the monotonic clock; require_proof: traces are proved
    over their range, which takes seconds to minutes, only where that is asked for."""

    circuit: Circuit
    box: float
    budget: float
    require_proof: bool = False
    deadline: float = field(init=False)
    _known: dict[tuple[Any, ...], Any] = field(default_factory=dict, init=False)

    def __post_init__(self) -> None:
        self.deadline = time.monotonic() + self.budget

    def left(self) -> float:
        """Time left [s]; AnalysisError `budget` where there is none."""
        seconds = self.deadline - time.monotonic()
        if seconds <= 0.0:
            raise AnalysisError("budget", f"the {self.budget:g} s for this circuit were used up before it was measured")
        return seconds

    def values(self, settings: Settings) -> Mapping[str, Any]:
        """Every let at `settings` [SI]."""
        return parameter_values(self.circuit, settings)

    def nets(self, x: NDArray[np.float64]) -> dict[str, float]:
        """Voltage of every net [V] of unknowns x (n,)."""
        return {name: float(x[j]) for (kind, name), j in plan(self.circuit).index.items() if kind == "net"}

    def states(self, settings: Settings) -> States:
        """The operating points at `settings`."""
        chosen = self._plain(settings)
        return self._once(
            ("states", _key(chosen)), lambda: states(self.circuit, chosen, box=self.box, budget=self.left())
        )

    def trace(self, along: str, settings: Settings) -> Trace:
        """The characteristic along a let over its own range, every net of it; not proved between its stations."""
        chosen = self._along(along, settings)
        proved: Trace | AnalysisError | None = self._known.get(("proved trace", along, _key(chosen)))
        if proved is not None and not isinstance(proved, AnalysisError):
            return proved
        return self._once(("trace", along, _key(chosen)), lambda: self._traced(along, chosen, 0.0))

    def proved_trace(self, along: str, settings: Settings) -> Trace:
        """The same with the proof over its whole range tried."""
        chosen = self._along(along, settings)
        return self._once(
            ("proved trace", along, _key(chosen)), lambda: self._traced(along, chosen, RANGE_SHARE * self.left())
        )

    def _along(self, along: str, settings: Settings) -> dict[str, float]:
        return self._plain({name: value for name, value in settings.items() if name != along})

    def _traced(self, along: str, chosen: Settings, range_budget: float) -> Trace:
        from loopsim.analyses.trace import trace

        left = self.left()
        return trace(self.circuit, along, box=self.box, budget=left, range_budget=range_budget, settings=chosen)

    def cycle(self, start: str, settings: Settings) -> Cycle:
        """The oscillation that a start leads to."""
        from loopsim.analyses.cycle import cycle

        chosen = self._plain(settings)
        return self._once(
            ("cycle", start, _key(chosen)),
            lambda: cycle(self.circuit, start=start, settings=chosen, budget=self.left(), progress=self._tick),
        )

    def run(self, start: str, settings: Settings, pace: float) -> Transient:
        """A run in time from a start until the circuit is at rest or repeats itself, or is still moving after a long time; pace: of
        supplies that come up, as for `run_to_rest`."""
        chosen = self._plain(settings)
        return self._once(
            ("run", start, pace, _key(chosen)),
            lambda: run_to_rest(self.circuit, self.states(chosen), start, chosen, pace, self._tick),
        )

    def _tick(self, share: float) -> None:
        """Called during a run: ends it when the time is up."""
        self.left()

    def _plain(self, settings: Settings) -> dict[str, float]:
        """Settings without those that set a let to what it is anyway: equal questions are then asked once."""
        kept = dict(settings)
        for name in settings:
            others = {other: value for other, value in kept.items() if other != name}
            if self.values(others).get(name) == kept[name]:
                kept = others
        return kept

    def _once(self, key: tuple[Any, ...], run: Callable[[], Found]) -> Found:
        """What `run` gives, or the AnalysisError it ended in, kept under `key`."""
        if key not in self._known:
            try:
                self._known[key] = run()
            except AnalysisError as error:
                if error.code == "budget":
                    raise
                self._known[key] = error
        found: Found | AnalysisError = self._known[key]
        if isinstance(found, AnalysisError):
            raise found
        return found


def _key(settings: Settings) -> tuple[tuple[str, float], ...]:
    return tuple(sorted(settings.items()))
