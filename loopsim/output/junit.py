"""Outcomes as JUnit XML: a suite per circuit, a case per requirement; undecided is a failure of its own type."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import groupby
from xml.etree.ElementTree import Element, SubElement, tostring

from loopsim.printable import printable
from loopsim.requirements.outcomes import RequirementOutcome


def junit_text(outcomes: Sequence[RequirementOutcome]) -> str:
    """The whole document; names are escaped, so that nothing in them is markup or a control character."""
    root = Element("testsuites")
    for (file, circuit), group in groupby(outcomes, key=lambda o: (o.file or "", o.circuit)):
        cases = list(group)
        failed = sum(case.outcome != "met" for case in cases)
        suite = SubElement(
            root, "testsuite", name=printable(circuit), tests=str(len(cases)), failures=str(failed), errors="0", skipped="0"
        )
        for case in cases:
            node = SubElement(
                suite, "testcase", classname=printable(file or circuit), name=printable(case.label), time=f"{case.seconds:.3f}"
            )
            if case.file is not None:
                node.set("file", printable(case.file))
            if case.line is not None:
                node.set("line", str(case.line))
            if case.margin is not None:
                properties = SubElement(node, "properties")
                SubElement(properties, "property", name="margin", value=repr(case.margin))
            if case.outcome != "met":
                message = printable(f"{case.text}: {case.note}")
                SubElement(node, "failure", type=case.outcome, message=message).text = message
    return '<?xml version="1.0" encoding="utf-8"?>\n' + tostring(root, encoding="unicode") + "\n"
