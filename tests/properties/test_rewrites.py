"""Rewrites that leave the physics alone leave the answer alone: counts, verdicts, values."""

from pathlib import Path

import numpy as np
import pytest
from rewrites import back, mirrored, renamed, reordered, scaled, split_resistors

import loopsim

LIBRARY = Path(__file__).parents[2] / "circuits"
SUBJECTS = (
    "comparators/cistern_pump.loop",
    "comparators/ferry_lamp_dusk.loop",
    "latches/frost_alarm.loop",
    "latches/hive_flag.loop",
    "references/hive_bias_asleep.loop",
    "curves/curve_pair.loop",
    "switches/kiln_trip.loop",
    "oscillators/tide_tone.loop",
    "amplifiers/lamp_current.loop",
    "supplies/deck_foldback.loop",
)


@pytest.fixture(scope="module", params=SUBJECTS)
def subject(request):
    circuit = loopsim.load(str(LIBRARY / request.param))
    return circuit, circuit.states()


def table(points, nets, sign=1.0):
    """(k, nets) voltages in ascending order, and the verdicts in the same order."""
    rows = np.array([[sign * p[n] for n in nets] for p in points]).reshape(len(points), len(nets))
    order = np.lexsort(np.round(rows, 6).T[::-1])
    return rows[order], [points[int(i)].stable for i in order], [points[int(i)].growth_rate for i in order]


def same(subject, other, names=None, sign=1.0):
    circuit, points = subject
    nets = circuit.nets
    assert points.complete
    assert other.complete
    assert len(other) == len(points)
    a, stable_a, rate_a = table(points, nets)
    b, stable_b, rate_b = table(other, names or nets, sign)
    assert np.allclose(a, b, rtol=1e-7, atol=1e-9)
    assert stable_a == stable_b
    for x, y in zip(rate_a, rate_b, strict=True):
        assert (x is None) == (y is None)
        assert x is None or x == pytest.approx(y, rel=1e-3)


def test_other_names(subject):
    other = renamed(subject[0]).states()
    same(subject, other, [back(n) for n in subject[0].nets])


def test_another_order(subject):
    same(subject, reordered(subject[0]).states())


def test_split_resistors(subject):
    circuit, points = subject
    other = split_resistors(circuit).states()
    assert other.complete
    assert len(other) == len(points)
    a, stable_a, _ = table(points, circuit.nets)
    b, stable_b, _ = table(other, circuit.nets)
    assert np.allclose(a, b, rtol=1e-7, atol=1e-9)
    assert stable_a == stable_b


def test_mirror_image(subject):
    same(subject, mirrored(subject[0]).states(), sign=-1.0)


@pytest.mark.parametrize("power", [-7, 10])
def test_impedance_scale(subject, power):
    same(subject, scaled(subject[0], power).states())


def test_scaling_there_and_back_changes_no_digit(subject):
    """Powers of two round nothing."""
    circuit, points = subject
    again = scaled(scaled(circuit, 9), -9).states()
    assert [[p[n] for n in circuit.nets] for p in again] == [[p[n] for n in circuit.nets] for p in points]


@pytest.mark.parametrize(("file", "let", "net"), [(SUBJECTS[0], "level", "out"), (SUBJECTS[1], "glow", "drive")])
def test_trip_points_survive_every_rewrite(file, let, net):
    """Located to 1e-10 of the range; a tenth of a millionth leaves room for the split resistors, which are rounded anew."""
    circuit = loopsim.load(str(LIBRARY / file))

    def trip_points(other, watched):
        found = other.trace(let, watch=watched, range_budget=0.0).thresholds(watched)
        return [found.rising, found.falling]

    expected = trip_points(circuit, net)
    for other, watched in (
        (renamed(circuit), back(net)),
        (reordered(circuit), net),
        (split_resistors(circuit), net),
        (scaled(circuit, 10), net),
        (mirrored(circuit), net),
    ):
        # in the mirror image the net falls where it rose, at the same value of the let
        assert trip_points(other, watched) == pytest.approx(expected, rel=1e-7)
