"""Circuit files as tests: one item per requirement, switched on by `--loopsim` or `loopsim = true` in the ini.

Collection parses and computes nothing. The fixture `circuit` loads a circuit for tests in Python.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

if TYPE_CHECKING:
    from loopsim.circuit import Circuit, Requirement
    from loopsim.requirements.outcomes import RequirementOutcome

_EXPECT = re.compile(rb"^[ \t]*expect\b", re.MULTILINE)
SPREAD = ("load", "worksteal", "each")  # ways of handing out items that tear those of a file apart
DEFAULT_BUDGET = "60"  # [s] for each file


class RequirementFailure(Exception):
    """A requirement that is not met, with the short message."""


def pytest_addoption(parser: pytest.Parser) -> None:
    """The switch, and what `loopsim verify` takes as options."""
    parser.getgroup("loopsim").addoption("--loopsim", action="store_true", help="run the requirements of *.loop files")
    parser.addini("loopsim", "run the requirements of *.loop files", type="bool", default=False)
    parser.addini("loopsim_budget", "seconds that the requirements of one circuit file may take", default=DEFAULT_BUDGET)
    parser.addini("loopsim_require_proof", "a requirement is met only by what is proved", type="bool", default=False)


def pytest_configure(config: pytest.Config) -> None:
    """Refuse a budget that is none before anything runs."""
    if _wanted(config):
        _budget(config)


def _wanted(config: pytest.Config) -> bool:
    return bool(config.getoption("loopsim") or config.getini("loopsim"))


def _budget(config: pytest.Config) -> float:
    from loopsim.cli.values import positive_seconds

    text = str(config.getini("loopsim_budget"))
    try:
        return positive_seconds(text)
    except ValueError as reason:
        raise pytest.UsageError(f"loopsim_budget = {text}: {reason}") from None


def pytest_collect_file(file_path: Path, parent: pytest.Collector) -> CircuitFile | None:
    """A collector for a circuit file that holds an `expect`."""
    if not _wanted(parent.config) or file_path.suffix != ".loop":
        return None
    try:
        content = file_path.read_bytes()
    except OSError:
        content = b"expect"  # reading it tells why it cannot be read
    return CircuitFile.from_parent(parent, path=file_path) if _EXPECT.search(content) else None


@pytest.fixture
def circuit(request: pytest.FixtureRequest) -> Callable[[str | Path], Circuit]:
    """`circuit("pump.loop")`: the circuit in a file, whose path is seen from the folder of the test."""
    folder = request.path.parent

    def read(path: str | Path) -> Circuit:
        from loopsim.language.load import load

        __tracebackhide__ = True
        return load(folder / path)

    return read


class CircuitFile(pytest.File):
    """One circuit file; collection reads it and computes nothing."""

    known: dict[str, RequirementOutcome]

    def collect(self) -> Iterator[RequirementItem]:
        """An item for each requirement."""
        from loopsim.errors import CircuitError
        from loopsim.language.load import load

        self.known = {}
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
        outcome = self._outcome()
        for name, value in (("margin", outcome.margin), ("proof", outcome.proof)):
            if value not in (None, ""):
                self.user_properties.append((name, value))
        if outcome.outcome != "met":
            raise RequirementFailure(self._message(outcome))

    def _outcome(self) -> RequirementOutcome:
        """Its outcome, judged together with those of its file that run in this process: they share the operating points."""
        from dataclasses import replace

        from loopsim.requirements.verify import verify

        file = self.parent
        assert isinstance(file, CircuitFile)
        if self.name not in file.known:
            together = [self.requirement]
            if self.config.getoption("dist", "no") not in SPREAD:
                together = [item.requirement for item in self.session.items if isinstance(item, RequirementItem) and item.parent is file]
            outcomes = verify(
                replace(self.circuit, requirements=tuple(together)),
                budget=_budget(self.config),
                require_proof=bool(self.config.getini("loopsim_require_proof")),
            )
            file.known.update({outcome.label: outcome for outcome in outcomes})
        return file.known[self.name]

    def _message(self, outcome: RequirementOutcome) -> str:
        from loopsim.output.engineering import engineering
        from loopsim.printable import printable

        measured = ", ".join(engineering(value, self.requirement.unit) for value in outcome.measured)
        told = "; ".join(part for part in (f"measured {measured}" if measured else "", outcome.note) if part)
        place = f"{self.location[0]}:{outcome.line}" if outcome.line else self.location[0]
        return printable(f"{place}: {outcome.outcome}: {outcome.text}" + (f" ({told})" if told else ""))

    def repr_failure(self, excinfo: pytest.ExceptionInfo[BaseException], style: Any = None) -> Any:
        """The short message, no traceback; whatever else went wrong keeps its own."""
        from loopsim.errors import InternalError, LoopsimError

        error = excinfo.value
        if isinstance(error, RequirementFailure | LoopsimError) and not isinstance(error, InternalError):
            return str(error)
        return super().repr_failure(excinfo, style)

    def reportinfo(self) -> tuple[Path, int | None, str]:
        """Place of the `expect`."""
        span = self.requirement.span
        return self.path, span.line - 1 if span else None, self.name
