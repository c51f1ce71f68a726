"""JSON and CSV: plain, complete, inert."""

import csv
import io
import json
import math

import numpy as np
import pytest
from result_sample import points

from loopsim import __version__
from loopsim.output.csv import cell, csv_text, states_csv
from loopsim.output.document import document, document_text, plain


def test_the_frame_comes_first_and_is_the_same_for_every_verb() -> None:
    whole = document("states", {"complete": True}, circuit="c", file="c.loop", settings={"level": 4.5})
    assert list(whole) == ["schema", "verb", "circuit", "file", "settings", "version", "complete"]
    assert whole["schema"] == "loopsim/1"
    assert whole["version"] == __version__


def test_arrays_and_complex_numbers_become_plain_lists() -> None:
    assert plain(np.array([1.5, 2.0])) == [1.5, 2.0]
    assert plain(np.array([1 + 2j])) == [[1.0, 2.0]]
    assert plain({"a": np.float64(1.0), "b": (np.int64(3), True)}) == {"a": 1.0, "b": [3, True]}


def test_what_is_not_finite_becomes_null() -> None:
    text = document_text(document("states", {"x": [math.nan, math.inf, np.float64("-inf")]}))
    assert json.loads(text)["x"] == [None, None, None]
    assert "NaN" not in text
    assert "Infinity" not in text


def test_a_type_without_a_json_form_is_refused() -> None:
    with pytest.raises(TypeError, match="object"):
        plain(object())


def test_no_name_can_act_on_a_terminal_through_json() -> None:
    text = document_text(document("states", {"n\x1b[2J\x7f\x9b": "\u202e\u2028"}))
    assert all(c == "\n" or " " <= c <= "~" for c in text)
    assert json.loads(text)["n\x1b[2J\x7f\x9b"] == "\u202e\u2028"


@pytest.mark.parametrize("text", ["=1+1", "+cmd", "-x", "@sum"])
def test_a_formula_sign_stays_inert_in_csv(text: str) -> None:
    assert cell(text).startswith("'")


def test_numbers_keep_their_sign_and_every_digit() -> None:
    assert cell(-0.1) == "-0.1"
    assert float(cell(np.float64(1) / 3)) == 1 / 3
    assert [cell(None), cell(True), cell(False), cell(7)] == ["", "true", "false", "7"]


def test_commas_quotes_and_line_ends_stay_in_their_cell() -> None:
    rows = list(csv.reader(io.StringIO(csv_text(["a", "b"], [['x,"y', "line\nend"]]))))
    assert rows == [["a", "b"], ['x,"y', "line\\nend"]]


def test_states_make_one_row_each_with_every_net() -> None:
    rows = list(csv.DictReader(io.StringIO(states_csv(points()))))
    assert [row["state"] for row in rows] == ["A", "B", "C"]
    assert float(rows[2]["out [V]"]) == 8.98
    assert rows[1]["verdict"] == "unstable, whatever the strays"
    assert rows[1]["stable"] == "false"
