"""What `trace` prints, writes and draws."""

import csv
import dataclasses
import io
import re
import sys
from pathlib import Path

import numpy as np
import pytest

import loopsim
from loopsim.analyses.trace import Trace
from loopsim.cli import main
from loopsim.errors import AnalysisError, CircuitError
from loopsim.output.overlay import Overlay, distance, overlay_text, read_overlay
from loopsim.output.plots_trace import Piece, _logarithmic, _path, pieces, plot_trace, stable_counts
from loopsim.output.trace_text import trace_csv, trace_text

PUMP = """circuit pump "a switch"
let supply = 9 V
let level = 4.5 V in 0 V .. 9 V
kind rail_amp = opamp(gain = 110 dB, gain_bandwidth = 2 MHz, headroom = 20 mV)
gnd -> battery: supply -> vcc
gnd -> probe: level -> sense
vcc -- r_top: 22 kohm -- mid -- r_bottom: 22 kohm -- gnd
sense -- r_in: 10 kohm -- plus -- r_fb: 47 kohm -- out
u1: rail_amp(plus = plus, minus = mid, out = out, high = vcc, low = gnd)
"""


@pytest.fixture(scope="module")
def pump() -> Trace:
    return loopsim.parse(PUMP).trace("level", watch=["out", "plus"], stations=3, range_budget=0.0)


@pytest.fixture
def file(tmp_path: Path) -> str:
    path = tmp_path / "pump.loop"
    path.write_text(PUMP, encoding="utf-8")
    return str(path)


def test_the_table_tells_folds_landings_and_thresholds(pump: Trace) -> None:
    lines = trace_text(pump).splitlines()
    assert lines[0] == "pump along level = 0 V .. 9 V"
    assert re.fullmatch(r"1 branch, 2 folds: complete at 5 stations, found between them \(.*\)", lines[1])
    assert lines[3].split("   ")[0] == "fold" and lines[3].endswith("plus after the jump")
    assert [line.split()[0] for line in lines[4:6]] == ["falling", "rising"]
    thresholds = next(line for line in lines if line.startswith("out "))
    known = pump.thresholds("out")
    assert f"{known.rising:.5f} V" in thresholds and f"{known.falling:.5f} V" in thresholds and f"{known.hysteresis:.5f} V" in thresholds
    assert str(pump) == trace_text(pump).rstrip("\n")


def test_a_list_that_is_not_proved_is_not_called_complete(pump: Trace) -> None:
    text = trace_text(dataclasses.replace(pump, complete_at=pump.complete_at[:2]))
    assert "undecided: complete at 2 of 5 stations" in text


def test_every_point_has_a_row_and_keeps_its_digits(pump: Trace) -> None:
    rows = list(csv.DictReader(io.StringIO(trace_csv(pump))))
    assert len(rows) == sum(len(branch.values) for branch in pump.branches)
    assert list(rows[0])[:4] == ["branch", "arclength", "level [V]", "stable"]
    branch = pump.branches[0]
    assert [float(row["out [V]"]) for row in rows] == branch.nets["out"].tolist()
    assert {row["stable"] for row in rows} >= {"true", "false"}
    frame = pump.to_dataframe()
    assert len(frame) == len(rows) and frame["level"].tolist() == branch.values.tolist()


def test_pieces_change_where_stability_changes_and_meet_in_the_folds(pump: Trace) -> None:
    found = list(pieces(pump, "out"))
    assert [piece.stable for piece in found if piece.stable is not None] == [True, False, True]
    ends = {round(float(piece.x[-1]), 9) for piece in found[:-1]}
    assert {round(f.at, 9) for f in pump.folds} <= ends


def test_the_strip_counts_stable_states(pump: Trace) -> None:
    edges, counts = stable_counts(pump)
    assert counts == [1, 2, 1]
    assert edges.tolist() == pytest.approx([0.0, *sorted(f.at for f in pump.folds), 9.0])


@pytest.mark.parametrize(("suffix", "head"), [("svg", b"<?xml"), ("png", b"\x89PNG"), ("pdf", b"%PDF")])
def test_the_suffix_decides_the_form_and_equal_pictures_are_equal_files(pump: Trace, suffix: str, head: bytes, tmp_path: Path) -> None:
    first, second = tmp_path / f"a.{suffix}", tmp_path / f"b.{suffix}"
    pump.plot(str(first))
    pump.plot(str(second))
    assert first.read_bytes().startswith(head)
    assert first.read_bytes() == second.read_bytes()


def test_stable_is_solid_unstable_dashed_thinner_and_of_another_colour(pump: Trace, tmp_path: Path) -> None:
    path = tmp_path / "a.svg"
    pump.plot(str(path))
    text = path.read_text(encoding="utf-8")
    styles = re.findall(r'style="fill: none; stroke-dasharray: ([^;"]+);[^"]*stroke: (#\w+); stroke-width: ([\d.]+)"', text)
    assert any(colour == "#b8860b" and float(width) < 2.0 for _, colour, width in styles)
    assert re.search(r'style="fill: none; stroke: #1b3a6b; stroke-width: 2', text)
    for words in ("level in V", "out in V", "unstable", "fold", "jump", "stable"):
        assert f"<!-- {words} -->" in text, words


def test_a_load_line_picture_has_a_net_across_and_no_strip(pump: Trace, tmp_path: Path) -> None:
    path = tmp_path / "a.svg"
    plot_trace(pump, str(path), ["out"], versus="plus")
    text = path.read_text(encoding="utf-8")
    assert "<!-- plus in V -->" in text and text.count('id="axes_') == 1
    with pytest.raises(AnalysisError, match="no net nowhere was traced"):
        pump.plot(str(path), versus="nowhere")


def test_measured_points_are_compared_with_the_nearest_stable_branch(pump: Trace, tmp_path: Path) -> None:
    path = tmp_path / "bench.csv"
    flat = float(np.interp(1.0, pump.branches[0].values[:10], pump.branches[0].nets["out"][:10]))
    path.write_text(f"# a bench in a shed\nlevel; out [V]\n1 V; {flat}\n4.5; 8.8\n\n12; 1\n", encoding="utf-8")
    overlay = read_overlay(str(path), "V", ("out", "plus"), "plus")
    assert overlay.net == "out" and overlay.values.tolist() == [1.0, 4.5, 12.0]
    found = distance(pump, overlay)
    assert (found.at, found.measured, found.beyond, found.points) == (4.5, 8.8, 1, 3)
    high = loopsim.parse(PUMP).states(level=4.5)["C"]["out"]
    assert found.largest == pytest.approx(high - 8.8, abs=1e-3)  # straight between points of the curve
    assert "1 lies where no stable branch was traced" in overlay_text(pump, overlay)


@pytest.mark.parametrize(
    ("text", "place", "said"),
    [
        ("1, 2\n3\n", ":2:", "two columns"),
        ("1, 2\n3, four\n", ":2:", "not a number"),
        ("1, 2\n3 A, 4\n", ":2:", "is not in V"),
        ("1, 2 kohms\n", ":1:", "not a unit"),
        ("level, out\n", "", "no measured points"),
        ("", "", "no measured points"),
        ("1, 1e999\n", ":1:", "1e999"),
        ("level, out\n4,5,0,02\n", ":2:", "not 4"),
        ("4,5; 0.02\n5; 1\n", ":1:", "4,5"),
        ("out, level\n8, 4\n", ":1:", "first column"),
    ],
)
def test_a_table_that_cannot_be_read_says_where(text: str, place: str, said: str, tmp_path: Path) -> None:
    path = tmp_path / "bench.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(CircuitError) as caught:
        read_overlay(str(path), "V", ("out",), "out", "level")
    assert said in str(caught.value) and place in str(caught.value)


def test_the_command_prints_writes_and_draws(file: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    bench = tmp_path / "bench.csv"
    bench.write_text("1, 0.02\n", encoding="utf-8")
    words = ["trace", file, "--along", "level", "--over", "1V..2V", "--stations", "1", "--overlay", str(bench)]
    assert main([*words, "--csv", str(tmp_path / "c.csv"), "--plot", str(tmp_path / "p.svg")]) == 0
    out, err = capsys.readouterr()
    assert out.startswith("pump along level = 1 V .. 2 V\n1 branch, no folds: complete")
    assert "largest distance to the nearest stable branch" in out
    assert "c.csv" in err and "p.svg" in err and (tmp_path / "p.svg").stat().st_size > 1000


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ([], "trace needs a let"),
        (["--along", "levle"], "did you mean `level`?"),
        (["--along", "supply"], "--over LO..HI"),
        (["--along", "level", "--over", "9V..1V"], "has to rise"),
        (["--along", "level", "--over", "1V"], "LO..HI"),
        (["--along", "level", "--over", "1A..2A"], "is in V"),
        (["--along", "level", "--watch", "outt"], "did you mean `out`?"),
        (["--along", "level", "--set", "level=3V"], "is traced"),
        (["--along", "level", "--versus", "out"], "--plot"),
        (["--along", "level", "--overlay", "nowhere.csv"], "cannot be read"),
        (["--along", "level", "--plot", "a.bmp"], "svg, png or pdf"),
        (["--along", "level", "--plot", "nowhere/a.svg"], "no folder `nowhere`"),
        (["--along", "level", "--csv", "nowhere/a.csv"], "no folder `nowhere`"),
        (["--along", "level", "--stations", "1000000"], "at most 1000"),
    ],
)
def test_what_cannot_be_traced_is_said_with_exit_code_2(words: list[str], said: str, file: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["trace", file, *words]) == 2
    out, err = capsys.readouterr()
    assert not out and said in err


def test_a_trace_without_a_branch_keeps_its_answer_and_tells_that_nothing_is_drawn(
    file: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    words = ["trace", file, "--along", "level", "--over", "4V..5V", "--stations", "1", "--box", "0.5", "--plot", str(tmp_path / "p.svg")]
    main(words)
    out, err = capsys.readouterr()
    assert "no branches, no folds" in out and "all nets within +/- 500 mV" in out
    assert "3 stations without a state within +/- 500 mV" in out
    assert "is not written: no branch was traced" in err and not (tmp_path / "p.svg").exists()


def test_a_net_that_is_named_twice_is_shown_once() -> None:
    assert loopsim.parse(PUMP).trace("level", watch=["out", "plus", "out"], stations=3, range_budget=0.0).watch == ("out", "plus")


def test_measured_points_of_a_net_that_is_not_watched_get_a_panel(pump: Trace, tmp_path: Path) -> None:
    measured = Overlay("bench.csv", "sense", np.array([1.0]), np.array([1.1]))
    path = tmp_path / "a.svg"
    pump.plot(str(path), ["out"], overlay=measured)
    text = path.read_text(encoding="utf-8")
    assert "<!-- sense in V -->" in text and "<!-- measured -->" in text


def test_a_fold_without_a_landing_is_pointed_out(pump: Trace) -> None:
    lost = dataclasses.replace(pump, folds=tuple(dataclasses.replace(f, lands=None) for f in pump.folds))
    assert "no state at rest was reached beyond" in trace_text(lost)
    assert "no state at rest" not in trace_text(pump)


def _curve(pump: Trace, values: list[float], rows: list[tuple[list[float], bool]]) -> Trace:
    """A trace of straight branches at `values`, one for each row of volts and verdict."""
    first = pump.branches[0]
    branches = tuple(
        dataclasses.replace(
            first, values=np.array(values), lengths=np.arange(len(values), dtype=float), nets={"out": np.array(volts)},
            stable=(stable,) * len(values), x=np.zeros((len(values), first.x.shape[1])),
        )
        for volts, stable in rows
    )  # fmt: skip
    return dataclasses.replace(pump, watch=("out",), branches=branches, folds=(), crossings=(), low=values[0], high=values[-1])


def test_curves_that_coincide_are_drawn_once_so_that_dashes_stay_dashes(pump: Trace, tmp_path: Path) -> None:
    both = _curve(pump, [0.0, 1.0, 2.0], [([0.0, 1.0, 2.0], False), ([0.0, 1.001, 2.0], False), ([5.0, 6.0, 8.0], False)])
    path = tmp_path / "a.svg"
    both.plot(str(path))
    # two lines and the legend's one
    assert path.read_text(encoding="utf-8").count("stroke: #b8860b") == 3


def test_values_over_decades_get_a_logarithmic_axis_on_which_lines_keep_their_course(pump: Trace) -> None:
    piece = Piece(True, np.array([1.0, 1001.0]), np.array([0.0, 10.0]))
    x, y = _path(piece, decades=True)
    assert x[[0, -1]].tolist() == [1.0, 1001.0]
    np.testing.assert_allclose(y, (x - 1.0) / 100.0, atol=1e-12)
    assert np.ptp(np.diff(np.log(x))) < 1e-12
    wide = _curve(pump, [10.0, 50.0, 1e5], [([0.0, 1.0, 2.0], True)])
    assert _logarithmic(wide) and not _logarithmic(pump)


def test_a_jump_of_no_length_has_no_arrow(pump: Trace, tmp_path: Path) -> None:
    path = tmp_path / "a.svg"
    pump.plot(str(path), ["sense"])  # held by the source: nothing jumps
    still = path.read_text(encoding="utf-8").count("stroke: #2a7f79")
    pump.plot(str(path), ["out"])
    assert path.read_text(encoding="utf-8").count("stroke: #2a7f79") > still


def test_a_missing_plot_library_is_told_before_the_work(
    file: str, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    monkeypatch.setattr("loopsim.analyses.trace.trace", lambda *_, **__: pytest.fail("traced in vain"))
    assert main(["trace", file, "--along", "level", "--plot", "a.svg"]) == 2
    assert "pip install 'loopsim[plot]'" in capsys.readouterr().err
