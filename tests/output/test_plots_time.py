"""Pictures of runs and cycles: written in every form, the same twice, and only of what was recorded."""

from pathlib import Path

import pytest
from moving_circuits import blinker, charging, negative_conductance

from loopsim.errors import AnalysisError
from loopsim.output.plots_time import plot_cycle, plot_transient
from loopsim.output.time_text import cycle_csv, transient_csv

STARTS = {"svg": b"<?xml", "png": b"\x89PNG", "pdf": b"%PDF"}


@pytest.mark.parametrize("suffix", STARTS)
def test_the_suffix_decides_the_form(suffix: str, tmp_path: Path) -> None:
    path = tmp_path / f"run.{suffix}"
    charging().transient(5e-3).plot(str(path))
    assert path.read_bytes().startswith(STARTS[suffix])


def test_a_panel_stands_for_each_net_over_one_axis(tmp_path: Path) -> None:
    path = tmp_path / "run.svg"
    run = blinker().transient(5e-3, watch=["out", "minus"])
    plot_transient(run, str(path), levels=[("minus", 2.9, "upper")])
    text = path.read_text(encoding="utf-8")
    assert text.count('id="axes_') == 2
    assert "time in ms" in text and "upper" in text


def test_two_periods_of_a_cycle_are_drawn(tmp_path: Path) -> None:
    path = tmp_path / "cycle.svg"
    plot_cycle(negative_conductance(1.0).cycle(), str(path))
    assert "stable cycle" in path.read_text(encoding="utf-8")


def test_other_suffixes_and_unknown_nets_are_refused(tmp_path: Path) -> None:
    run = charging().transient(5e-3)
    with pytest.raises(AnalysisError, match="no picture"):
        run.plot(str(tmp_path / "run.bmp"))
    with pytest.raises(AnalysisError, match="no net nowhere"):
        run.plot(str(tmp_path / "run.svg"), ["nowhere"])


def test_tables_keep_every_digit() -> None:
    run = charging().transient(5e-3, start={"out": 0.0})
    lines = transient_csv(run).splitlines()
    assert lines[0] == "time [s],feed [V],out [V]" and len(lines) == run.steps + 2
    assert float(lines[-1].split(",")[2]) == run.final("out")
    assert len(transient_csv(run, samples=11).splitlines()) == 12
    found = negative_conductance(1.0).cycle()
    assert float(cycle_csv(found).splitlines()[-1].split(",")[0]) == pytest.approx(found.period)
