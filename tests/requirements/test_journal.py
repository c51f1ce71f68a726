"""The journal: a killed run goes on with nothing lost, done twice or differing; what is damaged is left out."""

import json
import os
import random
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import pytest
from dividers import circuit_text, write_library

from loopsim.requirements import fingerprint
from loopsim.requirements import journal as module
from loopsim.requirements.journal import HEAD, Journal, JournalError, key_of, read_lines
from loopsim.requirements.judging import Options, Record, Trouble, record_text
from loopsim.requirements.library import LibraryRun, verify_library
from loopsim.requirements.outcomes import RequirementOutcome

ROOT = Path(__file__).parents[2]


@pytest.fixture
def library(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    write_library(tmp_path / "lib", 4)
    return tmp_path / "lib"


def run_with(path: Path | str, **more) -> LibraryRun:
    """A run over the library with a journal at `path`."""
    journal = Journal.resume(str(path))
    try:
        with ThreadPoolExecutor(1) as threads:
            return verify_library(["lib"], executor=threads, journal=journal, **more)
    finally:
        journal.close()


def text_of(run: LibraryRun) -> str:
    return json.dumps([o.to_dict() for o in run.outcomes])


def record(outcome: str = "met") -> str:
    return record_text(Record((RequirementOutcome("c", "l", "t", outcome),)))


def filled(path: Path, count: int) -> None:
    journal = Journal.resume(str(path))
    for number in range(count):
        journal.add(f"key{number}", record())
    journal.close()


def test_a_second_run_takes_everything_from_the_journal_to_the_last_digit(library: Path) -> None:
    first = run_with("j")
    size = os.path.getsize("j")
    second = run_with("j")
    assert (first.remembered, second.remembered) == (0, 4)
    assert text_of(first) == text_of(second)  # even the wall times are those of the first
    assert os.path.getsize("j") - size < 100  # the end of the run, no circuit again


def test_a_changed_text_option_tool_or_choice_is_judged_anew(library: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    run_with("j")
    (library / "d0.loop").write_text(circuit_text("d0", 6.0), encoding="utf-8")
    assert run_with("j").remembered == 3
    assert run_with("j", options=Options(box=500.0)).remembered == 0
    assert run_with("j", options=Options(require_proof=True)).remembered == 0
    assert run_with("j", select=["half"]).remembered == 0
    assert run_with("j", select=["half"]).remembered == 4
    monkeypatch.setattr(module, "tool", lambda: "another version")
    assert run_with("j").remembered == 0


def test_the_key_holds_the_text_of_a_used_file(library: Path) -> None:
    (library / "parts").mkdir()
    (library / "parts" / "p.loop").write_text("kind ohms = resistor(resistance = 1 kohm)\n", encoding="utf-8")
    text = circuit_text("d0").replace("let supply", 'use "parts/p.loop"\nlet supply')
    (library / "d0.loop").write_text(text, encoding="utf-8")
    run_with("j")
    assert run_with("j").remembered == 4
    (library / "parts" / "p.loop").write_text("kind ohms = resistor(resistance = 2 kohm)\n", encoding="utf-8")
    assert run_with("j").remembered == 3


def test_the_tool_is_its_code_and_not_only_its_version(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    shutil.copytree(ROOT / "loopsim" / "requirements", tmp_path / "loopsim" / "requirements")
    before = fingerprint.code()
    assert key_of("a") != key_of("b")
    monkeypatch.setattr(fingerprint, "__file__", str(tmp_path / "loopsim" / "requirements" / "fingerprint.py"))
    fingerprint.code.cache_clear()
    copied = fingerprint.code()
    (tmp_path / "loopsim" / "requirements" / "proof.py").write_text("CHANGED = True\n", encoding="utf-8")
    fingerprint.code.cache_clear()
    try:
        assert len({before, copied, fingerprint.code()}) == 3
    finally:
        fingerprint.code.cache_clear()


def test_what_stayed_undecided_is_kept_within_a_run_and_tried_again_by_the_next(tmp_path: Path) -> None:
    path = tmp_path / "j"
    journal = Journal.resume(str(path))
    journal.add("good", record())
    journal.add("open", record("undecided"))
    journal.add("dead", record_text(Record(trouble=Trouble("died", "no answer"))))
    journal.close()
    broken_off = Journal.resume(str(path))
    assert set(broken_off.known) == {"good", "open", "dead"}
    broken_off.finish()
    broken_off.close()
    assert set(read_lines(path.read_bytes())[0]) == {"good"}


@pytest.mark.parametrize(
    ("damage", "kept", "damaged"),
    [
        (lambda b: b[:-1], 3, 0),  # the last line end is missing: the line is whole
        (lambda b: b[:-9], 2, 1),  # torn
        (lambda b: b.replace(b"met", b"bad", 1), 2, 1),  # changed within
        (lambda b: b[: len(HEAD)] + b"\xff\x00nonsense\n" + b[len(HEAD) :], 3, 1),
        (lambda b: b[: len(HEAD)] + b"[" * 100_000 + b"\n" + b[len(HEAD) :], 3, 1),
        (lambda b: b.replace(b"loopsim journal 1", b"l????im journal 1", 1), 3, 1),  # the head itself
    ],
)
def test_damaged_lines_are_left_out_and_counted_and_the_journal_goes_on(tmp_path: Path, damage, kept: int, damaged: int) -> None:
    path = tmp_path / "j"
    filled(path, 3)
    path.write_bytes(damage(path.read_bytes()))
    journal = Journal.resume(str(path))
    assert (len(journal.known), journal.damaged) == (kept, damaged)
    journal.add("more", record())
    journal.close()
    known, _, good = read_lines(path.read_bytes())
    assert "more" in known and good == kept + 1


def test_a_journal_that_was_killed_while_it_was_begun_is_begun_again(tmp_path: Path) -> None:
    path = tmp_path / "j"
    path.write_bytes(HEAD[:9])
    Journal.resume(str(path)).close()
    assert path.read_bytes() == HEAD


def test_two_runs_do_not_write_one_journal(tmp_path: Path) -> None:
    path = str(tmp_path / "j")
    journal = Journal.resume(path)
    with pytest.raises(JournalError, match="another run"):
        Journal.resume(path)
    journal.close()
    Journal.resume(path).close()


@pytest.mark.parametrize("opened", [Journal.resume, Journal.afresh])
def test_a_file_of_another_kind_is_left_as_it_is(tmp_path: Path, opened) -> None:
    path = tmp_path / "circuit.loop"
    path.write_text(circuit_text("precious"), encoding="utf-8")
    with pytest.raises(JournalError, match="is no journal"):
        opened(str(path))
    assert path.read_text(encoding="utf-8") == circuit_text("precious")
    for wrong in (tmp_path, tmp_path / "no" / "folder", "/dev/zero"):
        with pytest.raises(JournalError, match="cannot"):
            opened(str(wrong))


def test_afresh_forgets(tmp_path: Path) -> None:
    path = tmp_path / "j"
    filled(path, 3)
    journal = Journal.afresh(str(path))
    journal.close()
    assert journal.known == {} and path.read_bytes() == HEAD


def test_a_full_disk_costs_the_journal_and_not_the_run(library: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def full(self, key: str, record: str) -> None:
        raise JournalError("the disk is full")

    monkeypatch.setattr(Journal, "add", full)
    run = run_with("j")
    assert run.journal_trouble == "the disk is full" and run.summary["met"] == 7


COMMAND = [sys.executable, "-m", "loopsim", "verify", "lib", "--json", "--junit", "out.xml", "--csv", "out.csv", "--jobs"]
ENVIRONMENT = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}
JOURNAL = Path(".loopsim-journal")


def finished(jobs: str) -> tuple[bytes, bytes, bytes]:
    """What a run that nobody kills says and writes."""
    done = subprocess.run([*COMMAND, jobs], capture_output=True, env=ENVIRONMENT, check=False)
    assert done.returncode == 1, done.stderr
    return done.stdout, Path("out.xml").read_bytes(), Path("out.csv").read_bytes()


def killed(jobs: str, moment: Callable[[], None]) -> int:
    """Kill a run at a moment; how many circuits it has put down."""
    JOURNAL.unlink()
    with subprocess.Popen([*COMMAND, jobs], stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, env=ENVIRONMENT) as run:
        moment()
        run.send_signal(signal.SIGKILL)
    return len(read_lines(JOURNAL.read_bytes())[0]) if JOURNAL.exists() else 0


def put_down(circuits: int) -> None:
    """Wait until a run has put down so many."""
    deadline = time.monotonic() + 60.0
    while not (JOURNAL.exists() and JOURNAL.read_bytes().count(b"\n") > circuits) and time.monotonic() < deadline:
        time.sleep(0.001)


def put_down_once(circuits: int) -> bool:
    """Whether the journal holds every circuit once."""
    content = JOURNAL.read_bytes()
    return content.count(b"\n") == 1 + circuits + content.count(b'"run finished"')


needs_kill = pytest.mark.skipif(not hasattr(signal, "SIGKILL"), reason="needs SIGKILL")


@needs_kill
def test_a_killed_run_goes_on_to_the_same_report(library: Path) -> None:
    whole = finished("1")

    assert 1 <= killed("1", lambda: put_down(1)) < 4
    assert finished("1") == whole
    assert put_down_once(4)


@needs_kill
@pytest.mark.slow
def test_runs_killed_fifty_times_at_random_moments_go_on_to_the_same_report(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    write_library(tmp_path / "lib", 12)
    began = time.monotonic()
    whole = finished("2")
    lasts = time.monotonic() - began
    draw = random.Random(20)
    within = 0
    for number in range(50):

        def moment(number: int = number) -> None:
            if number % 2:
                time.sleep(draw.uniform(0.2, 1.0) * lasts)
            else:
                put_down(draw.randrange(12))
                time.sleep(draw.uniform(0.0, 0.02))

        done = killed("2", moment)
        within += 0 < done < 12
        assert finished("2") == whole
        assert put_down_once(12)
    assert within > 12  # else the moments show nothing
