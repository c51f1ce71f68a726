"""Outcomes as JUnit XML: a suite per circuit, a case per requirement; undecided is a failure of its own type."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import groupby
from xml.etree.ElementTree import Element, SubElement, tostring

from loopsim.errors import CircuitError
from loopsim.printable import printable, printable_lines
from loopsim.requirements.outcomes import RequirementOutcome


def junit_text(outcomes: Sequence[RequirementOutcome], mistakes: Sequence[CircuitError] = (), *, timings: bool = False) -> str:
    """The whole document; names are escaped, so that nothing in them is markup or a character that XML cannot
    hold.

    mistakes: files that could not be read, a suite with an error each; timings: with the wall time of each
    requirement, which differs between runs.
    """
    root = Element("testsuites")
    for mistake in mistakes:
        _mistaken(root, mistake)
    for (file, circuit), group in groupby(outcomes, key=lambda o: (o.file or "", o.circuit)):
        cases = list(group)
        failed = sum(case.outcome != "met" for case in cases)
        suite = _suite(root, circuit, file, len(cases), failed, 0)
        for case in cases:
            _case(suite, case, timings)
    return '<?xml version="1.0" encoding="utf-8"?>\n' + tostring(root, encoding="unicode") + "\n"


def _suite(root: Element, name: str, file: str, tests: int, failures: int, errors: int) -> Element:
    counts = {"tests": str(tests), "failures": str(failures), "errors": str(errors), "skipped": "0"}
    suite = SubElement(root, "testsuite", {"name": printable(name), **counts})
    if file:
        suite.set("file", printable(file))
    return suite


def _case(suite: Element, case: RequirementOutcome, timings: bool) -> None:
    node = SubElement(suite, "testcase", classname=printable(case.file or case.circuit), name=printable(case.label))
    if timings:
        node.set("time", f"{case.seconds:.3f}")
    if case.file is not None:
        node.set("file", printable(case.file))
    if case.line is not None:
        node.set("line", str(case.line))
    given = {"margin": None if case.margin is None else repr(case.margin), "proof": printable(case.proof) or None}
    found = {name: value for name, value in given.items() if value is not None}
    if found:
        properties = SubElement(node, "properties")
        for name, value in found.items():
            SubElement(properties, "property", name=name, value=value)
    if case.outcome != "met":
        message = printable(f"{case.text}: {case.note}" if case.note else case.text)
        SubElement(node, "failure", type=case.outcome, message=message).text = message


def _mistaken(root: Element, mistake: CircuitError) -> None:
    file = printable(mistake.file or "")
    suite = _suite(root, file, file, 1, 0, 1)
    node = SubElement(suite, "testcase", classname=file, name="read")
    if file:
        node.set("file", file)
    if mistake.line is not None:
        node.set("line", str(mistake.line))
    SubElement(node, "error", type=mistake.code, message=mistake.head()).text = printable_lines(str(mistake))
