"""What the analyses of operating points return: frozen, printable, honest about doubt."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, overload

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, eq=False)
class Verdict:
    """How a state answers a small disturbance.

    text: one of the verdict sentences of docs/reference/words.md ("stable", "unstable, whatever the strays", ...).
    stable: True, False, or None where undecided. any_strays: the verdict holds for every positive stray (or for all tried).
    eigenvalues: (k,) complex [1/s], finite ones, largest real part first. growth_rate: largest real part [1/s], None where the
    circuit has no dynamics at all. damping: smallest damping ratio of the complex pairs, None where all are real.
    frequency: of the fastest growing pair [Hz], or None. swings: nets that move most in it. note: assumed strays, flips, doubts.
    """

    text: str
    stable: bool | None
    any_strays: bool
    eigenvalues: NDArray[np.complex128]
    growth_rate: float | None = None
    damping: float | None = None
    frequency: float | None = None
    swings: tuple[str, ...] = ()
    note: str = ""


@dataclass(frozen=True, eq=False)
class State:
    """One DC operating point. nets: name to volts; currents: part to amperes; x: (n,) unknowns of the System;
    certified_radius: half width of the box [V or A, largest unknown] in which it is proved to be the only one, 0 where only found."""

    name: str
    nets: Mapping[str, float]
    currents: Mapping[str, float]
    verdict_full: Verdict
    certified_radius: float
    x: NDArray[np.float64]

    @property
    def verdict(self) -> str:
        """The verdict sentence."""
        return self.verdict_full.text

    @property
    def stable(self) -> bool | None:
        """True, False, or None where undecided."""
        return self.verdict_full.stable

    @property
    def eigenvalues(self) -> NDArray[np.complex128]:
        """Finite eigenvalues [1/s], largest real part first."""
        return self.verdict_full.eigenvalues

    @property
    def growth_rate(self) -> float | None:
        """Largest real part of an eigenvalue [1/s]."""
        return self.verdict_full.growth_rate

    @property
    def damping(self) -> float | None:
        """Smallest damping ratio."""
        return self.verdict_full.damping

    def __getitem__(self, net: str) -> float:
        """Voltage of a net to gnd [V]."""
        return 0.0 if net == "gnd" else self.nets[net]

    def __repr__(self) -> str:
        shown = ", ".join(f"{net}={volts:.6g} V" for net, volts in list(self.nets.items())[:4])
        return f"State({self.name}: {self.verdict}; {shown})"

    def to_dict(self) -> dict[str, Any]:
        """The JSON form."""
        v = self.verdict_full
        return {
            "name": self.name,
            "verdict": v.text,
            "stable": v.stable,
            "any_strays": v.any_strays,
            "nets": dict(self.nets),
            "currents": dict(self.currents),
            "eigenvalues": [[float(e.real), float(e.imag)] for e in v.eigenvalues],
            "growth_rate": v.growth_rate,
            "damping": v.damping,
            "certified_radius": self.certified_radius,
        }


@dataclass(frozen=True, eq=False)
class States(Sequence[State]):
    """Every operating point of a circuit, in ascending order of the watched nets.

    complete: proved that there are no others within `box` [V]. undecided: clusters or boxes left (0 when complete); remainder: a line
    each on where. boxes: how many were examined. seconds: wall time. settings: lets as used [SI]. watch: nets shown first.
    chosen: the settings worth printing; units: of the settings, for printing. States known but not proved unique have
    certified_radius 0.
    """

    circuit: str
    file: str | None
    settings: Mapping[str, float]
    states: tuple[State, ...]
    complete: bool
    undecided: int
    box: float
    boxes: int
    seconds: float
    watch: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()
    remainder: tuple[str, ...] = field(default=())
    chosen: tuple[str, ...] = ()
    units: Mapping[str, str] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.states)

    @overload
    def __getitem__(self, key: int) -> State: ...
    @overload
    def __getitem__(self, key: slice) -> tuple[State, ...]: ...
    @overload
    def __getitem__(self, key: str) -> State: ...
    def __getitem__(self, key: int | slice | str) -> State | tuple[State, ...]:
        """By letter, position or slice."""
        if isinstance(key, str):
            for state in self.states:
                if state.name == key:
                    return state
            raise KeyError(key)
        return self.states[key]

    def __iter__(self) -> Iterator[State]:
        return iter(self.states)

    @property
    def word(self) -> str:
        """complete, found or undecided: what is known about the list."""
        if self.complete:
            return "complete"
        return "undecided" if self.undecided else "found"

    def __repr__(self) -> str:
        return f"States({self.circuit}: {len(self.states)} operating points, {self.word})"

    def __str__(self) -> str:
        """The answer as `loopsim states` prints it."""
        from loopsim.output.text import states_text

        return states_text(self).rstrip("\n")

    def _repr_html_(self) -> str:
        from loopsim.output.text import states_html

        return states_html(self)

    def to_dataframe(self) -> Any:
        """One row a state, indexed by its letter: verdict, stable, growth_rate, then every net [V]. Needs pandas."""
        from loopsim.output.frames import states_frame

        return states_frame(self)

    def to_dict(self) -> dict[str, Any]:
        """The JSON form, without the frame that every verb shares."""
        return {
            "complete": self.complete,
            "undecided": self.undecided,
            "box": self.box,
            "boxes": self.boxes,
            "seconds": self.seconds,
            "states": [state.to_dict() for state in self.states],
            "notes": [*self.notes, *self.remainder],
        }
