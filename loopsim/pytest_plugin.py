"""Circuit files as tests: one item per requirement, switched on by `--loopsim` or `loopsim = true` in the ini."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

if TYPE_CHECKING:
    from loopsim.circuit import Circuit, Requirement


class RequirementFailure(Exception):
    """A requirement that is not met, with the short message."""


def pytest_addoption(parser: pytest.Parser) -> None:
    """The switch."""
    parser.getgroup("loopsim").addoption("--loopsim", action="store_true", help="run the requirements of *.loop files")
    parser.addini("loopsim", "run the requirements of *.loop files", type="bool", default=False)


def pytest_collect_file(file_path: Path, parent: pytest.Collector) -> CircuitFile | None:
    """A collector for a circuit file that holds an `expect`."""
    wanted = parent.config.getoption("loopsim") or parent.config.getini("loopsim")
    if not wanted or file_path.suffix != ".loop" or b"expect" not in file_path.read_bytes():
        return None
    return CircuitFile.from_parent(parent, path=file_path)


class CircuitFile(pytest.File):
    """One circuit file; collection reads it and computes nothing."""

    def collect(self) -> Iterator[RequirementItem]:
        """An item for each requirement."""
        from loopsim.errors import CircuitError
        from loopsim.language.load import load

        try:
            circuit = load(self.path)
        except CircuitError as error:
            raise self.CollectError(str(error)) from None
        for requirement in circuit.requirements:
            yield RequirementItem.from_parent(self, name=requirement.label, circuit=circuit, requirement=requirement)


class RequirementItem(pytest.Item):
    """One requirement."""

    def __init__(self, *, circuit: Circuit, requirement: Requirement, **more: Any) -> None:
        super().__init__(**more)
        self.circuit = circuit
        self.requirement = requirement

    def runtest(self) -> None:
        """Judge it; undecided fails too."""
        from dataclasses import replace

        from loopsim.printable import printable

        (outcome,) = replace(self.circuit, requirements=(self.requirement,)).verify()
        if outcome.outcome != "met":
            line = f"{self.path}:{outcome.line}: {outcome.outcome}: {outcome.text} ({outcome.note})"
            raise RequirementFailure(printable(line))

    def repr_failure(self, excinfo: pytest.ExceptionInfo[BaseException], style: Any = None) -> Any:
        """The short message, no traceback."""
        if isinstance(excinfo.value, RequirementFailure):
            return str(excinfo.value)
        return super().repr_failure(excinfo, style)

    def reportinfo(self) -> tuple[Path, int | None, str]:
        """Place of the `expect`."""
        span = self.requirement.span
        return self.path, span.line - 1 if span else None, self.name
