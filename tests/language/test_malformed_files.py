"""Damaged files: no traceback, no hang; a mistake with line and column and exit code 2, or a circuit that is still one."""

import contextlib
import io
import shutil
import time

import pytest
from mutations import CIRCUITS, mutants, sources

from loopsim import Circuit, CircuitError, parse
from loopsim.cli import main
from loopsim.equations.structure import check
from loopsim.language.tidy import tidy

SHIPPED = sources()
LONGEST = 2.0  # CPU seconds for one file


def outcome(name: str, text: str) -> Circuit | CircuitError:
    """What becomes of a text at its place in the library, structure included."""
    before = time.process_time()
    try:
        found = parse(text, name, sources={**SHIPPED, name: text})
        check(found)
    except CircuitError as error:
        found = error
    assert time.process_time() - before < LONGEST, text
    return found


def is_shown_well(error: CircuitError, name: str, text: str) -> None:
    assert error.line is not None, text
    assert 1 <= error.line <= text.count("\n") + 1 or error.file != name
    assert error.column >= 1
    assert f":{error.line}:{error.column}: {error.code}: " in str(error)
    assert error.hint
    assert "\x00" not in str(error)


def run_mutants(seed: int, each: int) -> tuple[int, int]:
    mistakes = valid = 0
    for name, text in mutants(seed, each):
        found = outcome(name, text)
        if isinstance(found, CircuitError):
            is_shown_well(found, name, text)
            mistakes += 1
        else:
            valid += 1
    return mistakes, valid


def test_five_hundred_damaged_files_are_read_or_refused_with_a_place():
    mistakes, valid = run_mutants(seed=20261201, each=13)
    assert mistakes + valid >= 500
    assert mistakes > 250


@pytest.mark.slow
def test_twenty_thousand_damaged_files_are_read_or_refused_with_a_place():
    mistakes, valid = run_mutants(seed=7, each=520)
    assert mistakes + valid >= 20_000


def test_the_command_ends_with_code_two_on_damaged_files(tmp_path):
    shutil.copytree(CIRCUITS, tmp_path / "circuits")
    told = 0
    for name, text in mutants(seed=3, each=2):
        if not isinstance(outcome(name, text), CircuitError):
            continue
        path = tmp_path / "circuits" / name
        kept = path.read_bytes()
        path.write_bytes(text.encode())
        answers, remarks = io.StringIO(), io.StringIO()
        with contextlib.redirect_stdout(answers), contextlib.redirect_stderr(remarks):
            code = main(["states", str(path)])
        path.write_bytes(kept)
        assert code == 2, text
        assert answers.getvalue() == ""
        assert "Traceback" not in remarks.getvalue()
        told += 1
    assert told > 30


def test_bytes_that_are_no_text_are_refused(tmp_path):
    text = (CIRCUITS / "comparators/cistern_pump.loop").read_bytes()
    path = tmp_path / "broken.loop"
    for k in range(0, len(text), max(1, len(text) // 25)):
        path.write_bytes(text[:k] + b"\xff\xfe" + text[k:])
        remarks = io.StringIO()
        with contextlib.redirect_stderr(remarks):
            assert main(["states", str(path)]) == 2
        assert ": not-text: " in remarks.getvalue()


def test_tidy_refuses_damaged_files_or_lays_them_out_once_and_for_all():
    for name, text in mutants(seed=11, each=4):
        try:
            once = tidy(text, name)
        except CircuitError:
            continue
        assert tidy(once, name) == once
