"""Reports of requirements: worst first, and nothing from a circuit file acts on what reads them."""

import csv
import io
import json
import re
import xml.etree.ElementTree as ET
from dataclasses import replace

import pytest

from loopsim.errors import CircuitError, Span
from loopsim.output.annotations import annotation_lines
from loopsim.output.document import document_text
from loopsim.output.junit import junit_text
from loopsim.output.terminal import Palette
from loopsim.output.verify_text import (
    baseline_section,
    listing_text,
    markdown_cell,
    shortage,
    verify_csv,
    verify_markdown,
    verify_text,
)
from loopsim.requirements.baseline import Moved
from loopsim.requirements.library import CircuitRun, LibraryRun
from loopsim.requirements.outcomes import RequirementOutcome

MET = RequirementOutcome(
    "pump", "high", "expect high: values of out = 5 V", "met", (4.9,), ((4.5, 5.5),), 0.4, 0.1, "", "p.loop", 7, "proved"
)  # fmt: skip
VIOLATED = replace(MET, label="low", outcome="violated", margin=-0.2, note="state B")
UNDECIDED = replace(MET, label="when", outcome="undecided", margin=None, measured=(), note="2 places left", proof="")

NASTY = (
    "<b>&amp;\"'</b>",
    "a | b\n| c | d |",
    "\x1b[31mred\x1b[2J\x07",
    "=cmd()+1",
    "@sum(1)",
    "::error file=x::y",
    "%0A::error::z",
    "]]>",
    "{0} {x!r:>99999} %s %(x)s $HOME `id`",
    "\u202eevil\u2066\u200b\ufffe\ud800",
    "line\r\nbreak\u2028\u2029\x85",
    "[link](javascript:x) ![i](http://e/x) www.e.example",
    "\x00",
)


def dressed(text: str) -> RequirementOutcome:
    """An outcome with `text` in every place that a file can fill."""
    return replace(VIOLATED, circuit=text, label=text, text=text, note=text, file=text)


def plain_line(line: str) -> bool:
    return all(c.isprintable() for c in line)


def test_rows_are_worst_first_with_the_reason_below() -> None:
    tight = replace(MET, label="tight", text="expect tight: values of out = 3 MV", measured=(3e6,), limits=((0.0, 3.1e6),), margin=1e5)
    exact = replace(MET, label="states", text="expect states = 3", measured=(3.0,), limits=((3.0, 3.0),), margin=0.0)
    order = sorted([exact, MET, tight, UNDECIDED, VIOLATED], key=shortage)
    assert [o.label for o in order] == ["low", "when", "tight", "high", "states"]
    text = verify_text([exact, MET, tight, UNDECIDED, VIOLATED], {("p.loop", "high"): "V"})
    lines = text.splitlines()
    assert lines[0].split() == ["outcome", "circuit", "requirement", "measured", "margin", "by"]
    assert lines[1].startswith("violated") and lines[2] == "    why: state B"
    assert re.search(r"4\.900 V +400\.0 mV +proved", text) and re.search(r"states = 3 +3 +- ", text)
    assert lines[-1] == "5 requirements of 1 circuit: 3 met, 1 violated, 1 undecided"
    assert verify_text([]) == "no requirements\n"


def test_colour_marks_the_outcome_alone() -> None:
    assert "\x1b[38;5;166mviolated\x1b[0m" in verify_text([VIOLATED], palette=Palette(active=True))


@pytest.mark.parametrize("text", NASTY)
def test_text_and_lists_stay_lines_of_printable_characters(text: str) -> None:
    shown = verify_text([dressed(text)])
    shown += listing_text([(text, 3, text, text, text)])
    shown += baseline_section([Moved("moved", text, text, text, text), Moved("vanished", text, text, text)], text)
    for line in shown.splitlines():
        assert plain_line(line)
        assert not line.lstrip().startswith(("::", "##"))  # a CI server takes such a line of a log for an order


@pytest.mark.parametrize("text", NASTY)
def test_csv_holds_no_formula_and_one_row_a_requirement(text: str) -> None:
    rows = list(csv.reader(io.StringIO(verify_csv([dressed(text), MET]))))
    assert len(rows) == 3 and len(set(map(len, rows))) == 1
    for cell in rows[1]:
        assert plain_line(cell) and not re.match(r"[=+\-@\t\r](?![\d.])", cell)


@pytest.mark.parametrize("text", NASTY)
def test_junit_is_xml_with_the_names_as_text(text: str) -> None:
    mistake = CircuitError("wrong", text, Span(text, 3, 1, 2, text), text)
    whole = junit_text([dressed(text), replace(dressed(text), outcome="undecided")], [mistake])
    root = ET.fromstring(whole.encode("utf-8"))
    assert [element.tag for element in root.iter()] == ["testsuites", "testsuite", "testcase", "error", "testsuite",
        *["testcase", "properties", "property", "property", "failure"] * 2]  # fmt: skip
    assert [failure.get("type") for failure in root.iter("failure")] == ["violated", "undecided"]
    assert all(plain_line(value) for element in root.iter() for value in element.attrib.values())


@pytest.mark.parametrize("text", NASTY)
def test_annotations_are_one_line_each_whatever_the_names_hold(text: str) -> None:
    mistake = CircuitError("wrong", text, Span(text, 3, 1, 2, text), text)
    lines = annotation_lines([dressed(text), MET], [mistake]).splitlines()
    assert len(lines) == 2
    for line in lines:
        assert plain_line(line)
        head, _, message = line.removeprefix("::error ").partition("::")
        assert [field.partition("=")[0] for field in head.split(",")] == ["file", "line", "col", "title"]
        assert "%" not in message.replace("%25", "")


def test_annotations_name_the_place_and_the_reason() -> None:
    assert annotation_lines([MET]) == ""
    assert annotation_lines([VIOLATED]) == (
        "::error file=p.loop,line=7,col=1,title=violated%3A pump%3A%3Alow::expect high: values of out = 5 V: state B\n"
    )


@pytest.mark.parametrize("text", NASTY)
def test_json_is_ascii_and_markdown_keeps_its_table(text: str) -> None:
    whole = document_text({"requirements": [dressed(text).to_dict()]})
    assert whole.isascii() and plain_line(whole.replace("\n", "")) and json.loads(whole)["requirements"][0]["label"] == text
    page = verify_markdown([dressed(text), MET])
    rows = [line for line in page.splitlines() if line.startswith("|")]
    assert len(rows) == 3 and {len(re.findall(r"(?<!\\)\|", row)) for row in rows} == {7}
    assert all(plain_line(line) for line in page.splitlines())
    cell = re.sub(r"\\.", "", markdown_cell(text)).replace("&amp;", "")
    assert not re.search(r"[<>`*_\[\]()&!@:#]|www\.", cell)


@pytest.mark.parametrize("text", NASTY)
def test_a_notebook_is_shown_text_and_no_markup(text: str) -> None:
    root = ET.fromstring(LibraryRun((CircuitRun("f", "c", (dressed(text), MET)),))._repr_html_())
    assert {element.tag for element in root.iter()} == {"table", "caption", "thead", "tbody", "tr", "th", "td"}
    assert len(root.findall("tbody/tr")) == 2


def test_a_run_shows_itself_as_table_line_and_frame() -> None:
    run = LibraryRun((CircuitRun("p.loop", "pump", (MET, VIOLATED)),))
    assert repr(run) == "LibraryRun(1 circuit, 1 violated, 0 undecided, 1 met)"
    assert str(run) == verify_text([MET, VIOLATED])
    frame = run.to_dataframe()
    assert list(frame["outcome"]) == ["met", "violated"] and list(frame["line"]) == [7, 7]


def test_junit_gives_counts_places_margins_and_proofs() -> None:
    other = replace(MET, circuit="other", file="o.loop")
    root = ET.fromstring(junit_text([MET, VIOLATED, UNDECIDED, other]))
    first, second = root.findall("testsuite")
    assert (first.get("name"), first.get("tests"), first.get("failures")) == ("pump", "3", "2")
    assert (second.get("name"), second.get("failures")) == ("other", "0")
    case = first.find("testcase")
    assert (case.get("name"), case.get("file"), case.get("line"), case.get("time")) == ("high", "p.loop", "7", None)
    assert {p.get("name"): p.get("value") for p in case.iter("property")} == {"margin": "0.4", "proof": "proved"}
    assert 'time="0.100"' in junit_text([MET], timings=True)


def test_csv_gives_numbers_with_all_their_digits() -> None:
    (head, row, empty) = csv.reader(io.StringIO(verify_csv([replace(MET, measured=(1 / 3, 4.9)), UNDECIDED])))
    found = dict(zip(head, row, strict=True))
    assert float(found["smallest"]) == 1 / 3 and float(found["margin"]) == 0.4 and found["limits"] == "[4.5, 5.5]"
    assert dict(zip(head, empty, strict=True))["smallest"] == ""
