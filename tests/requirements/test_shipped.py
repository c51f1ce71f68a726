"""The shipped circuits hold what they say of themselves, and no sample of their parts lies outside the corners."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import loopsim
from loopsim.requirements.jumps import JUMPS

FILES = sorted(path for path in (Path(__file__).parents[2] / "circuits").rglob("*.loop") if path.parent.name != "parts")
SPREAD = [
    (path, requirement.label)
    for path in FILES
    for requirement in loopsim.load(path).requirements
    if requirement.over_tolerances and requirement.measure in JUMPS and not requirement.at
]


@pytest.mark.slow
@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_every_requirement_is_met(path):
    outcomes = loopsim.load(path).verify()
    assert [(o.text, o.note) for o in outcomes if o.outcome != "met"] == []
    assert all(o.proof for o in outcomes)


@pytest.mark.slow
@pytest.mark.parametrize(("path", "label"), SPREAD, ids=lambda value: getattr(value, "stem", value))
def test_no_sample_of_the_parts_lies_outside_the_corners(path, label):
    circuit = loopsim.load(path)
    (requirement,) = (r for r in circuit.requirements if r.label == label)
    (outcome,) = replace(circuit, requirements=(requirement,)).verify()
    points = circuit.trip_points(requirement.along, samples=2000, seed=5)
    ways = ("rising", "falling") if requirement.measure == "hysteresis" else (JUMPS[requirement.measure],)
    first, *more = (points.threshold(requirement.target.name, way) for way in ways)
    values = first - more[0] if more else first
    assert np.all(np.isfinite(values))
    low, high = outcome.measured
    slack = 1e-9 * (high - low)
    assert low - slack <= values.min()
    assert values.max() <= high + slack
    # corners that were far outside the samples would be corners of something else
    assert np.ptp(values) > 0.4 * (high - low)
