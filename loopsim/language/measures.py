"""The measures that a requirement may ask for, and what each of them needs. The analyses that serve them stand elsewhere."""

from __future__ import annotations

from dataclasses import dataclass

from loopsim.units import NUMBER, SECOND, Dimension

PER_SECOND: Dimension = (0, 0, -1, 0)


@dataclass(frozen=True, slots=True)
class MeasureForm:
    """dimension: of the value; "target" or "along" where it is that of the net or the let, "along difference" for a distance on it,
    "ratio" for target over along.
    target, along: "needed", "allowed" or "refused"."""

    dimension: Dimension | str
    target: str = "refused"
    along: str = "refused"


MEASURES: dict[str, MeasureForm] = {
    "states": MeasureForm(NUMBER),
    "stable states": MeasureForm(NUMBER),
    "unstable states": MeasureForm(NUMBER),
    "values": MeasureForm("target", "needed"),
    "rising threshold": MeasureForm("along", "needed", "needed"),
    "falling threshold": MeasureForm("along", "needed", "needed"),
    "hysteresis": MeasureForm("along difference", "needed", "needed"),
    "slope": MeasureForm("ratio", "needed", "needed"),
    "growth rate": MeasureForm(PER_SECOND),
    "damping": MeasureForm(NUMBER),
    "start state": MeasureForm("target", "needed"),
    "period": MeasureForm(SECOND, "allowed"),
    "frequency": MeasureForm(PER_SECOND, "allowed"),
    "duty": MeasureForm(NUMBER, "needed"),
    "swing": MeasureForm("target", "needed"),
    "settling time": MeasureForm(SECOND, "needed"),
    "final value": MeasureForm("target", "needed"),
    "loop gain": MeasureForm(NUMBER, "allowed"),
    "phase margin": MeasureForm(NUMBER, "allowed"),
}

COUNTS = ("states", "stable states", "unstable states")
# what is read at operating points, so that `in stable states` means something; and what begins somewhere, so that `from` does
AT_STATES = ("values", "slope", "growth rate", "damping", "loop gain", "phase margin")
FROM_A_START = ("start state", "period", "frequency", "duty", "swing", "settling time", "final value")
