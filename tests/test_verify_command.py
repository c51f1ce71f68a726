"""`loopsim verify`: what it says, what it writes, its exit code, and what it makes of mistakes."""

import importlib.util
import json
import os
import subprocess
import sys
import time
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import jsonschema
import pytest

from loopsim.cli import main
from loopsim.requirements.judging import judge

ROOT = Path(__file__).parent.parent
SCHEMA = json.loads((ROOT / "docs/reference/schema/verify.json").read_text(encoding="utf-8"))
DIVIDER = """circuit {name} "divider"
let supply = {supply} V
gnd -> battery: supply -> top
top -- upper: 1 kohm -- middle -- lower: 1 kohm -- gnd
expect states = 1
expect half: values of middle = 2.5 V +/- 10 mV
"""


class Threads(ThreadPoolExecutor):
    """Stands in for the worker processes, which take a second to start."""

    def stop(self) -> None:
        self.shutdown(cancel_futures=True)


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """lib/good.loop and lib/off.loop, of which the second is off by a volt."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("loopsim.requirements.library.WorkerPool", Threads)
    monkeypatch.setattr("loopsim.requirements.library.judge_in_worker", judge)
    lib = tmp_path / "lib"
    lib.mkdir()
    for name, supply in (("good", 5), ("off", 7)):
        (lib / f"{name}.loop").write_text(DIVIDER.format(name=name, supply=supply), encoding="utf-8")
    return tmp_path


def said(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, str, str]:
    """(exit code, standard output, standard error) of `loopsim verify`."""
    capsys.readouterr()
    code = main(["verify", *words])
    out, err = capsys.readouterr()
    return code, out, err


def document(capsys: pytest.CaptureFixture[str], *words: str) -> dict:
    _, out, _ = said(capsys, *words, "--json")
    found = json.loads(out)
    jsonschema.validate(found, SCHEMA, cls=jsonschema.Draft202012Validator)
    return found


def test_the_exit_code_is_the_highest_ranked(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert said(capsys, "lib/good.loop")[0] == 0
    assert said(capsys, "lib")[0] == 1
    assert said(capsys, "lib/good.loop", "--budget", "1ps", "--require-proof", "--select", "states")[0] in (0, 3)
    (folder / "lib" / "hollow.loop").write_text("circuit hollow\nexpect states\n", encoding="utf-8")
    code, out, err = said(capsys, "lib")
    assert code == 2 and "hollow.loop:2:" in err and "3 met, 1 violated" in out
    (folder / "empty").mkdir()
    assert said(capsys, "empty")[0] == 5
    assert said(capsys, "empty", "lib/no.loop")[0] == 2


def test_undecided_alone_is_exit_code_3(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = DIVIDER.format(name="soft", supply=5) + "expect period of middle = 1 s\n"
    (folder / "soft.loop").write_text(text, encoding="utf-8")
    code, out, _ = said(capsys, "soft.loop")
    assert code in (1, 3)
    assert said(capsys, "soft.loop", "--select", "half")[0] == 0
    assert "period of middle" in out


def test_an_internal_error_outranks_all_and_asks_for_a_report(
    folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    from loopsim.requirements import verify as module

    real = module.verify

    def verify(circuit, **more):
        if circuit.name == "good":
            raise ZeroDivisionError("\x1b[2J")
        return real(circuit, **more)

    monkeypatch.setattr(module, "verify", verify)
    code, out, err = said(capsys, "lib")
    assert code == 4 and "1 met, 1 violated, 2 undecided" in out
    assert "This is a bug in loopsim" in err and "\x1b" not in err and "Traceback" not in err


def test_documents_keep_their_schema_in_every_situation(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    whole = document(capsys, "lib")
    assert [r["label"] for r in whole["requirements"]] == ["states", "half"] * 2 and whole["changes"] is None
    assert all(r["seconds"] is None for r in whole["requirements"])
    assert all(r["seconds"] >= 0.0 for r in document(capsys, "lib", "--timings", "--fresh")["requirements"])
    assert [r["line"] for r in document(capsys, "lib", "--list")["listed"]] == [5, 6, 5, 6]
    (folder / "lib" / "bad.loop").write_bytes(b"\x00")
    assert [m["code"] for m in document(capsys, "lib", "nowhere.loop")["mistakes"]] == ["not-text", "missing-file"]
    assert document(capsys, "lib/parts")["requirements"] == []


def test_equal_runs_say_and_write_equal_bytes_whether_judged_or_remembered(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    files = ("--csv", "o.csv", "--junit", "o.xml", "--summary", "o.md")
    first = said(capsys, "lib", "--json", *files)[1], *(Path(name).read_bytes() for name in files[1::2])
    _, out, err = said(capsys, "lib", "--json", *files)
    assert "2 of 2 circuits as the journal .loopsim-journal has it" in err
    assert (out, *(Path(name).read_bytes() for name in files[1::2])) == first
    _, out, err = said(capsys, "lib", "--json", "--fresh", "--jobs", "2", *files)
    assert "as the journal" not in err and (out, *(Path(name).read_bytes() for name in files[1::2])) == first


def test_a_let_that_is_set_is_set_in_every_circuit_and_judged_apart(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert said(capsys, "lib")[0] == 1
    found = document(capsys, "lib", "--set", "supply=5V")
    assert found["summary"]["met"] == 4 and found["settings"] == {"supply": "5V"}
    assert said(capsys, "lib", "--set", "supply=5V")[0] == 0 and said(capsys, "lib")[0] == 1  # each remembered under its own
    (folder / "lib" / "lone.loop").write_text(DIVIDER.format(name="lone", supply=5).replace("supply", "other"), encoding="utf-8")
    assert document(capsys, "lib", "--set", "supply=6V")["summary"]["met"] == 4


def test_one_circuit_leaves_no_journal_unless_it_is_named(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    said(capsys, "lib/good.loop")
    assert not Path(".loopsim-journal").exists()
    said(capsys, "lib/good.loop", "--journal", "mine")
    assert "1 of 1 circuit as the journal mine" in said(capsys, "lib/good.loop", "--journal", "mine")[2]


def test_a_journal_that_cannot_be_kept_is_told_and_one_that_was_named_is_a_mistake(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    Path(".loopsim-journal").mkdir()
    code, out, err = said(capsys, "lib")
    assert code == 1 and "this run keeps none" in err and "3 met" in out
    code, out, err = said(capsys, "lib", "--journal", "lib/good.loop")
    assert (code, out) == (2, "") and "is no journal" in err


def test_a_file_that_cannot_be_written_costs_neither_the_answer_nor_the_other_files(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    code, out, err = said(capsys, "lib", "--junit", "no/where.xml", "--csv", "o.csv")
    assert code == 2 and "cannot write `no/where.xml`" in err and "3 met" in out
    assert len(Path("o.csv").read_text(encoding="utf-8").splitlines()) == 5


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="needs pipes with a name")
def test_a_report_into_a_link_or_a_pipe_leaves_it_what_it_is(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    os.symlink("real.csv", "link.csv")
    assert said(capsys, "lib", "--csv", "link.csv")[0] == 1
    assert Path("link.csv").is_symlink() and Path("real.csv").read_text(encoding="utf-8").startswith("file,")
    os.mkfifo("pipe")
    with subprocess.Popen(["cat", "pipe"], stdout=subprocess.PIPE, text=True) as reader:
        assert said(capsys, "lib", "--csv", "pipe")[0] == 1
        assert reader.stdout is not None and reader.stdout.read().startswith("file,")
    assert Path("pipe").is_fifo()


def test_reports_hold_violations_and_broken_files(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "lib" / "bad.loop").write_text("circuit bad\nexpect x y\n", encoding="utf-8")
    _, out, _ = said(capsys, "lib", "--junit", "o.xml", "--annotations", "--summary", "o.md")
    lines = [line for line in out.splitlines() if line.startswith("::error ")]
    assert lines[0].startswith("::error file=lib/bad.loop,line=2,col=") and lines[1].startswith("::error file=lib/off.loop,line=6,")
    suites = ET.parse("o.xml").getroot().findall("testsuite")
    assert [(s.get("name"), s.get("errors"), s.get("failures")) for s in suites] == [
        ("lib/bad.loop", "1", "0"), ("good", "0", "0"), ("off", "0", "1"),
    ]  # fmt: skip
    assert "| violated | off |" in Path("o.md").read_text(encoding="utf-8")


def test_a_baseline_tells_what_changed_until_it_is_accepted(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert said(capsys, "lib", "--baseline", "b.json")[0] == 2
    code, out, _ = said(capsys, "lib", "--baseline", "b.json", "--accept")
    assert code == 1 and "baseline" not in out
    assert "as the baseline b.json has it" in said(capsys, "lib", "--baseline", "b.json")[1]
    good = DIVIDER.format(name="good", supply=5)
    (folder / "lib" / "good.loop").write_text(good.replace("expect states = 1\n", ""), encoding="utf-8")
    code, out, _ = said(capsys, "lib/good.loop", "--baseline", "b.json")
    assert code == 1 and "1 vanished" in out and "lib/good.loop::states" in out  # a check that got lost is not green
    (change,) = document(capsys, "lib/good.loop", "--baseline", "b.json")["changes"]
    assert change["kind"] == "vanished"
    assert said(capsys, "lib/good.loop", "--baseline", "b.json", "--accept")[0] == 1
    assert said(capsys, "lib/good.loop", "--baseline", "b.json")[0] == 0
    assert len(json.loads(Path("b.json").read_text(encoding="utf-8"))["requirements"]) == 3  # of both files still


def test_a_run_that_is_not_whole_is_not_accepted(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "lib" / "bad.loop").write_text("circuit bad\nexpect x y\n", encoding="utf-8")
    _, _, err = said(capsys, "lib", "--baseline", "b.json", "--accept")
    assert "not accepted" in err and not Path("b.json").exists()


@pytest.mark.parametrize(
    ("words", "text"),
    [
        (["lib", "--select", "haf"], "did you mean `half`?"),
        (["lib", "--select", "zzz*"], "--list shows their names"),
        (["lib", "--accept"], "--accept needs the baseline"),
        (["lib", "--json", "--annotations"], "both want standard output"),
        (["lib", "--jobs", "0"], "at least 1"),
        (["lib", "--set", "suply=3V"], "did you mean `supply`?"),
        (["lib", "--set", "supply=3A"], "`supply` is in V"),
        (["lib", "--junit", "lib/good.loop"], "a circuit file would be overwritten"),
        (["lib", "--baseline", "lib/good.loop", "--accept"], "a circuit file would be overwritten"),
        (["lib", "--journl", "x"], "did you mean `--journal`?"),
        (["nowhere"], "there is no file `nowhere`"),
        (["lib/god.loop"], "did you mean `lib/good.loop`?"),
    ],
)
def test_mistakes_of_the_command_line_name_a_way_out(
    folder: Path, capsys: pytest.CaptureFixture[str], words: list[str], text: str
) -> None:
    code, _, err = said(capsys, *words)
    assert code in (2, 5) and text in err and "Traceback" not in err


def test_a_missing_extra_is_named(folder: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    code, _, err = said(capsys, "lib", "--cluster", "tcp://127.0.0.1:1")
    assert code == 2 and "loopsim[cluster]" in err


def test_a_file_named_like_an_order_gives_none_to_a_ci_server(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    Path("::error::x.loop").write_text("circuit bad\nexpect x y\n", encoding="utf-8")
    _, out, err = said(capsys, "::error::x.loop", "lib/good.loop")
    assert "\\x3a:error" in err
    assert not any(line.lstrip().startswith("::") for line in (out + err).splitlines())


@pytest.mark.skipif(os.name != "posix", reason="sends SIGINT")
def test_an_interrupt_keeps_what_is_finished_and_says_how_to_go_on(folder: Path) -> None:
    program = (
        "import os, signal, sys\n"
        "from loopsim.requirements.journal import Journal\n"
        "put = Journal.add\n"
        "def add(self, key, record):\n"
        "    put(self, key, record)\n"
        "    os.kill(os.getpid(), signal.SIGINT)\n"
        "Journal.add = add\n"
        "from loopsim.cli import main\n"
        "sys.exit(main(['verify', 'lib', '--jobs', '1', '--junit', 'o.xml', '--baseline', 'b.json', '--accept']))\n"
    )
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, env=environment, check=False)
    assert done.returncode == 130 and "2 requirements of 1 circuit" in done.stdout
    assert "interrupted: 1 circuit judged, 1 not; the journal .loopsim-journal keeps them" in done.stderr
    assert "Traceback" not in done.stderr and "not accepted" in done.stderr
    assert len(ET.parse("o.xml").getroot()) == 1 and not Path("b.json").exists()


CLUSTER_ENVIRONMENT = {
    **os.environ, "PYTHONPATH": os.pathsep.join([str(ROOT), str(ROOT / "tests" / "requirements")]), "OMP_NUM_THREADS": "1"
}  # fmt: skip


@pytest.fixture(scope="module")
def scheduler() -> Iterator[str]:
    """The address of a scheduler with two workers of their own processes, on loopback."""
    program = (
        "import sys, distributed\n"
        "if __name__ == '__main__':\n"
        "    cluster = distributed.LocalCluster(n_workers=2, threads_per_worker=1, host='127.0.0.1', dashboard_address=None)\n"
        "    print(cluster.scheduler_address, flush=True)\n"
        "    sys.stdin.read()\n"
        "    cluster.close()\n"
    )
    with subprocess.Popen(
        [sys.executable, "-c", program], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=CLUSTER_ENVIRONMENT
    ) as server:
        assert server.stdin is not None and server.stdout is not None
        yield server.stdout.readline().strip()
        server.stdin.close()


@pytest.mark.slow
@pytest.mark.skipif(importlib.util.find_spec("distributed") is None, reason="needs the extra cluster")
def test_a_cluster_of_two_workers_gives_the_same_bytes(folder: Path, scheduler: str) -> None:
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}

    def run(*words: str) -> subprocess.CompletedProcess[str]:
        command = [sys.executable, "-m", "loopsim", "verify", "lib", "--json", "--fresh", *words]
        return subprocess.run(command, capture_output=True, text=True, env=environment, check=False, timeout=120)

    alone, together = run("--jobs", "1"), run("--cluster", scheduler)
    assert together.returncode == alone.returncode == 1, together.stderr
    assert together.stdout == alone.stdout


@pytest.mark.slow
@pytest.mark.skipif(importlib.util.find_spec("distributed") is None, reason="needs the extra cluster")
def test_a_circuit_that_kills_the_workers_of_a_cluster_costs_itself_alone(folder: Path, scheduler: str) -> None:
    program = (
        "import sys\n"
        "from concurrent.futures import Executor\n"
        "import distributed\n"
        "from dying import killed\n"
        "from loopsim.requirements.library import verify_library\n"
        "with distributed.Client(sys.argv[1]) as client:\n"
        "    inner = client.get_executor()\n"
        "    class Deadly(Executor):\n"
        "        def submit(self, fn, /, *values):\n"
        "            return inner.submit(killed if 'circuit off ' in values[0] else fn, *values)\n"
        "    run = verify_library(['lib'], executor=Deadly(), jobs=2)\n"
        "    print([(c.circuit, c.trouble and c.trouble.kind, *(o.outcome for o in c.outcomes)) for c in run.circuits])\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", program, scheduler], capture_output=True, text=True, env=CLUSTER_ENVIRONMENT, check=False, timeout=240
    )
    assert done.stdout.strip() == str([("good", None, "met", "met"), ("off", "died", "undecided", "undecided")]), done.stderr


@pytest.mark.slow
@pytest.mark.skipif(importlib.util.find_spec("distributed") is None, reason="needs the extra cluster")
def test_an_address_without_a_scheduler_is_a_mistake(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    began = time.monotonic()
    code, _, err = said(capsys, "lib", "--cluster", "tcp://127.0.0.1:1")
    assert code == 2 and "no scheduler answers there" in err and time.monotonic() - began < 60.0
    assert said(capsys, "lib", "--cluster", "nonsense://x")[0] == 2


