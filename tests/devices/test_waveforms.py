"""Sources in time: values and corners."""

from itertools import pairwise

import numpy as np
import pytest

from loopsim.devices.waveforms import WAVEFORMS, waveform, waveform_specs
from loopsim.errors import CircuitError


def test_a_sine_rests_at_its_phase_before_the_delay():
    wave = waveform("sine", {"amplitude": 2.0, "frequency": 50.0, "offset": 1.0, "phase": 0.5, "delay": 0.01})
    assert wave.value(0.0) == wave.value(0.01) == pytest.approx(1.0 + 2.0 * np.sin(0.5), rel=1e-15)
    assert wave.value(0.013) == pytest.approx(1.0 + 2.0 * np.sin(2 * np.pi * 50 * 0.003 + 0.5), rel=1e-14)
    assert wave.corners(0.0, 1.0) == [0.01]
    assert wave.corners(0.02, 1.0) == []


def test_a_square_wave_keeps_its_times():
    wave = waveform(
        "square",
        {"low": -1.0, "high": 3.0, "period": 10.0, "width": 4.0, "rise": 1.0, "fall": 2.0, "delay": 5.0},
    )
    times = [0.0, 5.0, 5.5, 6.0, 9.9, 10.0, 11.0, 12.0, 14.9, 15.5, 26.5]
    values = [-1.0, -1.0, 1.0, 3.0, 3.0, 3.0, 1.0, -1.0, -1.0, 1.0, 3.0]
    assert [float(wave.value(t)) for t in times] == pytest.approx(values, abs=1e-12)
    assert wave.corners(0.0, 16.0) == pytest.approx([5.0, 6.0, 10.0, 12.0, 15.0, 16.0])
    assert wave.corners(25.5, 36.0) == pytest.approx([26.0, 30.0, 32.0, 35.0, 36.0])


def test_a_square_wave_of_half_duty_unless_told():
    wave = waveform("square", {"high": 1.0, "period": 1e-3})
    t = np.linspace(0.0, 1e-3, 200_001)[:-1]
    assert np.mean([float(wave.value(v)) for v in t[::50]]) == pytest.approx(0.5, abs=2e-3)
    with pytest.raises(CircuitError, match="longer than its period"):
        waveform("square", {"high": 1.0, "period": 1.0, "width": 0.9, "rise": 0.1, "fall": 0.1})


def test_a_ramp_and_points_are_straight_between_and_constant_outside():
    ramp = waveform("ramp", {"from": 1.0, "to": 5.0, "start": 2.0, "duration": 4.0})
    assert [float(ramp.value(t)) for t in (0.0, 2.0, 3.0, 6.0, 9.0)] == [1.0, 1.0, 2.0, 5.0, 5.0]
    assert ramp.corners(0.0, 10.0) == [2.0, 6.0]
    line = waveform("points", {}, [(1.0, 0.0), (2.0, 4.0), (4.0, -2.0)])
    assert [float(line.value(t)) for t in (0.0, 1.5, 2.0, 3.0, 5.0)] == pytest.approx(
        [0.0, 2.0, 4.0, 1.0, -2.0]
    )
    assert line.corners(0.0, 3.0) == [1.0, 2.0]
    with pytest.raises(CircuitError, match="ascend"):
        waveform("points", {}, [(1.0, 0.0), (1.0, 4.0)])


def test_between_its_corners_a_waveform_of_lines_is_straight():
    rng = np.random.default_rng(5)
    for _ in range(50):
        shape = rng.uniform(0.05, 0.3, 3)
        wave = waveform(
            "square",
            {
                "high": 2.0,
                "low": -1.0,
                "period": 1.0,
                "rise": shape[0],
                "width": shape[1],
                "fall": shape[2],
                "delay": rng.uniform(0, 2),
            },
        )
        start = rng.uniform(0, 3)
        corners = [start, *wave.corners(start, start + 2.5), start + 2.5]
        for a, b in pairwise(corners):
            if b - a > 1e-9:
                middle = wave.value(0.5 * (a + b))
                ends = wave.value(a + 1e-12), wave.value(b - 1e-12)
                assert middle == pytest.approx(0.5 * (ends[0] + ends[1]), abs=1e-9)


def test_a_batch_of_waveforms_is_a_row_of_single_ones():
    amplitude = np.array([1.0, 2.0, -0.5])
    delay = np.array([0.0, 0.1, 0.2])
    together = waveform("sine", {"amplitude": amplitude, "frequency": 3.0, "delay": delay})
    for t in (0.0, 0.05, 0.15, 0.7):
        singles = [
            waveform("sine", {"amplitude": a, "frequency": 3.0, "delay": d}).value(t)
            for a, d in zip(amplitude, delay, strict=True)
        ]
        assert np.array_equal(together.value(t), singles)
    assert together.corners(0.0, 1.0) == [0.0, 0.1, 0.2]
    assert list(WAVEFORMS) == ["sine", "square", "ramp", "points"]
    assert list(waveform_specs("ramp")) == ["to", "duration", "from", "start"]


def test_too_many_corners_are_refused():
    with pytest.raises(CircuitError, match="corners"):
        waveform("square", {"high": 1.0, "period": 1e-9}).corners(0.0, 1.0)
