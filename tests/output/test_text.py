"""What `states` prints."""

import dataclasses

import pytest
from result_sample import THREE, points, state

from loopsim.output.terminal import Palette
from loopsim.output.text import states_html, states_text, table


def test_the_sample_of_the_manual_is_printed_line_by_line() -> None:
    assert states_text(points()).splitlines() == [
        "cistern_pump, level = 4.5 V",
        "3 operating points: complete (all nets within +/- 1 kV, 11 boxes, 9 ms)",
        "",
        "state   verdict                         out        plus      fastest growth",
        "A       stable                          20.00 mV   3.714 V   -310 k/s",
        "B       unstable, whatever the strays   4.500 V    4.500 V   +1.2 M/s",
        "C       stable                          8.980 V    5.286 V   -310 k/s",
    ]


def test_str_is_the_same_text_and_repr_is_one_line() -> None:
    assert str(points()) + "\n" == states_text(points())
    assert repr(points()) == "States(cistern_pump: 3 operating points, complete)"


def test_one_point_and_no_point_are_said_in_good_grammar() -> None:
    assert "\n1 operating point: complete (" in states_text(points(THREE[:1]))
    nothing = states_text(points((), complete=True))
    assert "\nno operating points: complete (" in nothing
    assert "verdict" not in nothing


def test_an_undecided_remainder_is_never_called_complete() -> None:
    text = states_text(points(complete=False, undecided=2, remainder=("a cluster at level = 5.4 V, 3 uV wide",)))
    assert "3 operating points: undecided (2 places left, all nets within +/- 1 kV, 11 boxes, 9 ms)" in text
    assert "\na cluster at level = 5.4 V, 3 uV wide\n" in text
    assert "complete" not in text


def test_points_of_a_search_are_called_found_and_marked() -> None:
    searched = tuple(dataclasses.replace(one, certified_radius=0.0) for one in THREE[:2])
    text = states_text(points(searched, complete=False))
    assert "2 operating points: found (by search; that there are no others is not proved" in text
    assert "A, B: found by search, not proved to be the only one in its place" in text


def test_an_oscillation_that_states_share_is_said_once_and_notes_stand_below() -> None:
    noted = (
        state("A", 0.0, 1.0, -1e3),
        state("B", 1.0, 1.0, 2e3, "unstable with these dynamics", frequency=1591.2, damping=-0.2, swings=("out", "plus")),
        state("C", 2.0, 1.0, 1e3, "unstable with these dynamics", frequency=1591.2, damping=-0.3, swings=("out", "plus")),
    )
    lines = states_text(points(noted, notes=("1 pF assumed on every net",))).splitlines()
    assert "B, C: oscillation near 1.591 kHz, swinging most at out, plus" in lines
    assert "1 pF assumed on every net" in lines
    assert lines[3].split() == ["state", "verdict", "out", "plus", "fastest", "growth", "damping"]
    assert lines[5].split()[-1] == "-0.20"


def test_many_watched_nets_are_cut_and_the_cut_is_said() -> None:
    one = state("A", 0.0, 1.0, -1.0)
    wide = dataclasses.replace(one, nets={f"n{i}": 1.0 * i for i in range(9)})
    text = states_text(points((wide,), watch=()))
    assert "n5" in text
    assert "n6" not in text
    assert "3 more watched nets in --json and --csv" in text


def test_rounding_noise_is_shown_as_zero() -> None:
    assert "3e-17" not in states_text(points((state("A", 3e-17, 1.0, -1.0),)))


def test_colour_changes_no_letter_and_no_column() -> None:
    coloured = states_text(points(), palette=Palette(active=True))
    assert "\x1b[" in coloured
    bare = coloured
    for code in ("\x1b[1m", "\x1b[2m", "\x1b[34m", "\x1b[38;5;166m", "\x1b[0m"):
        bare = bare.replace(code, "")
    assert bare == states_text(points())


def test_nothing_of_a_circuit_reaches_the_terminal_unescaped() -> None:
    evil = state("A", 0.0, 1.0, -1.0, "stable\x1b[2J", note="\x1b]0;title\x07", swings=("\x9bnet",), frequency=1.0)
    odd = dataclasses.replace(evil, nets={"a\x1b[31m": 1.0, "b\u202e\r\n": 2.0})
    strange = {"circuit": "c\x1b[5m", "settings": {"l\x08": 1.0}, "chosen": ("l\x08",)}
    text = states_text(points((odd,), watch=(), notes=("n\x1b",), remainder=("\x00",), **strange))
    assert all(c == "\n" or c.isprintable() for c in text)


def test_html_is_escaped() -> None:
    one = dataclasses.replace(state("A", 0.0, 1.0, -1.0), nets={"<script>": 1.0})
    shown = states_html(points((one,), circuit="<b>&", watch=("<script>",), notes=("<i>",)))
    assert "<script>" not in shown
    assert "<b>" not in shown
    assert "<i>" not in shown
    assert "&lt;script&gt;" in shown
    assert points()._repr_html_().count("<tr>") == 4


def test_columns_line_up_with_wide_characters() -> None:
    lines = table([["a", "b"], ["\u6c34\u69fd", "x"], ["long name", "y"]])
    assert lines == ["a           b", "\u6c34\u69fd        x", "long name   y"]


def test_a_data_frame_has_one_row_a_state() -> None:
    pytest.importorskip("pandas")
    frame = points().to_dataframe()
    assert list(frame.index) == ["A", "B", "C"]
    assert frame.loc["C", "out"] == 8.98
