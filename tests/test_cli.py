"""The command: words in, an answer on standard output, the rest on standard error, an exit code."""

import contextlib
import dataclasses
import os
import re
import signal
import subprocess
import sys
import time
from collections.abc import Mapping
from pathlib import Path

import pytest

from loopsim.cli import main
from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.catalogue import COMMON, PLANNED, VERBS
from loopsim.cli.exits import Exit, highest_ranked
from loopsim.cli.options import Request, parse_words
from loopsim.cli.values import quantity
from loopsim.errors import AnalysisError, CircuitError, InternalError, LoopsimError, Span

ROOT = Path(__file__).parent.parent
ENVIRONMENT = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}


def run(*words: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """The command in a process of its own."""
    return subprocess.run(
        [sys.executable, "-m", "loopsim", *words],
        capture_output=True,
        text=True,
        env={**ENVIRONMENT, **environment},
        cwd=ROOT,
        check=False,
    )


# Stand-ins for a verb's work, so that the frame is tested apart from the analyses.


def says(request: Request, around: Surroundings) -> Answer:
    return Answer(f"{request.paths} {dict(request.values)}\n", Exit.UNDECIDED, ("a remark",))


def mistakes(request: Request, around: Surroundings) -> Answer:
    raise CircuitError("unknown-field", "no field `x\x1b`", Span(request.paths[0], 7, 3, 4, "a x b"), "try y")


def cannot(request: Request, around: Surroundings) -> Answer:
    raise AnalysisError("no-convergence", "stuck", {"out": 0.5}, "start elsewhere")


def contradicts(request: Request, around: Surroundings) -> Answer:
    raise InternalError("the search found a point that the proof excluded")


def breaks(request: Request, around: Surroundings) -> Answer:
    raise ZeroDivisionError("secret\x1b[2J")


def refuses(request: Request, around: Surroundings) -> Answer:
    raise LoopsimError("needs something")


def stops(request: Request, around: Surroundings) -> Answer:
    raise KeyboardInterrupt


@pytest.fixture
def stand_in(monkeypatch: pytest.MonkeyPatch):
    """Give the verb `states` another handler."""

    def place(function) -> None:
        verb = dataclasses.replace(VERBS["states"], handler=f"{__name__}:{function.__name__}")
        monkeypatch.setitem(VERBS, "states", verb)

    return place


def test_help_shows_examples_first_and_every_verb(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    text = capsys.readouterr().out
    assert text.index("loopsim states circuits/") < text.index("verbs")
    for name in VERBS:
        assert re.search(rf"^    {name} ", text, re.MULTILINE)
    for name in PLANNED:
        assert not re.search(rf"^    {name} ", text, re.MULTILINE)


@pytest.mark.parametrize("words", [["states", "-h"], ["-h", "states"], ["states", "x.loop", "--box", "3V", "--help"]])
def test_help_anywhere_is_the_help_of_the_verb(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(words) == 0
    assert capsys.readouterr().out.startswith("loopsim states FILE: ")


@pytest.mark.parametrize("name", sorted(VERBS))
def test_every_verb_has_help_with_examples_that_its_own_table_understands(
    name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main([name, "-h"]) == 0
    text = capsys.readouterr().out
    for command, what in VERBS[name].examples:
        assert command in text
        assert what in text
        words = command.split()
        assert words[:2] == ["loopsim", name]
        parse_words(VERBS[name], words[2:], COMMON)
    for option in VERBS[name].options:
        assert option.name in text


def test_help_comes_at_once_and_without_the_numerical_libraries() -> None:
    program = (
        "import sys; from loopsim.cli import main; code = main(['--help']); main(['states', '-h']); main(['stats'])\n"
        "loaded = {'numpy', 'scipy', 'networkx', 'lark', 'matplotlib'} & set(sys.modules)\n"
        "sys.exit(str(loaded) if loaded else code)"
    )
    done = subprocess.run(
        [sys.executable, "-c", program], capture_output=True, text=True, env=ENVIRONMENT, cwd=ROOT, check=False
    )
    assert done.returncode == 0, done.stderr


def test_version_names_the_libraries(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--version"]) == 0
    text = capsys.readouterr().out
    assert re.match(r"loopsim \d+\.\d+\.\d+\nPython 3\.", text)
    assert "\nnumpy " in text
    assert "\nscipy " in text


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ([], "no verb"),
        (["stats"], "did you mean `states`?"),
        (["zzzz"], "verbs: states"),
        (["loops", "x.loop"], "planned and not built yet"),
        (["spread", "x.loop"], "planned and not built yet"),
        (["report", "x.loop"], "planned and not built yet"),
        (["states"], "states needs a circuit file"),
        (["states", "a", "b"], "states takes one file, got 2: a, b"),
        (["states", "a", "--bx", "3"], "did you mean `--box`?"),
        (["states", "a", "--box"], "--box needs a value: --box VOLTS"),
        (["states", "a", "--box", "--json"], "--box needs a value"),
        (["states", "a", "--box=0V"], "has to be above 0 V"),
        (["states", "a", "--box", "many"], "not a number with V"),
        (["states", "a", "--box", "3A"], "`A` is not a number of V"),
        (["states", "a", "--box", "1e999"], "too large"),
        (["states", "a", "--budget", "-1"], "has to be above 0 s"),
        (["states", "a", "--jobs", "0"], "at least 1"),
        (["states", "a", "--seed", "1_0"], "not a whole number"),
        (["states", "a", "--set", "level"], "write it as LET=VALUE"),
        (["states", "a", "--json=yes"], "--json takes no value"),
        (["states", "a", "--box", "1", "--box", "2"], "--box is given twice"),
        (["states", "\x1b[2J", "b"], "\\x1b[2J"),
    ],
)
def test_a_mistake_in_the_command_line_is_named_with_a_way_out(
    words: list[str], said: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(words) == Exit.MISTAKE
    out, err = capsys.readouterr()
    assert out == ""
    assert said in err
    assert "shows what can be said" in err
    assert "Traceback" not in err
    assert "\x1b" not in err


def test_options_stand_anywhere_and_repeat_where_they_may() -> None:
    words = ["--set", "level=4.5V", "--box=1 kV", "x.loop", "--set", "b=-1", "--json", "--quiet"]
    request = parse_words(VERBS["states"], words, COMMON)
    assert request.paths == ("x.loop",)
    assert request.values == {"set": (("level", "4.5V"), ("b", "-1")), "box": 1000.0, "json": True, "quiet": True}


def test_two_dashes_end_the_options() -> None:
    assert parse_words(VERBS["states"], ["--", "--odd.loop"], COMMON).paths == ("--odd.loop",)
    assert main(["states", "--", "-h"]) == Exit.MISTAKE


@pytest.mark.parametrize(
    ("text", "value"),
    [("1000", 1e3), ("1kV", 1e3), ("1 kV", 1e3), ("2.5MV", 2.5e6), ("5e-3", 5e-3), ("1e3 mV", 1.0), ("3V", 3.0), (".5V", 0.5)],
)
def test_quantities_of_options_carry_prefixes(text: str, value: float) -> None:
    assert quantity(text, "V") == value


@pytest.mark.parametrize("text", ["", "V", "1_0V", "inf", "nan", "\u0661V", "1e999", "1 hV", "0x10", "1V V"])
def test_what_is_no_quantity_is_refused(text: str) -> None:
    with pytest.raises(ValueError):
        quantity(text, "V")


def test_answers_go_to_standard_output_and_remarks_to_standard_error(stand_in, capsys) -> None:
    stand_in(says)
    assert main(["states", "x.loop", "--seed", "4"]) == Exit.UNDECIDED
    assert capsys.readouterr() == ("('x.loop',) {'seed': 4}\n", "a remark\n")
    assert main(["states", "x.loop", "--quiet"]) == Exit.UNDECIDED
    assert capsys.readouterr().err == ""


@pytest.mark.parametrize(
    ("function", "code", "said"),
    [
        (mistakes, 2, "x.loop:7:3: unknown-field: no field `x\\x1b`\n    7 | a x b\n      |   ^ try y\n"),
        (cannot, 3, "no-convergence: stuck (start elsewhere)\n    last good state: out = 500.0 mV\n"),
        (contradicts, 4, "internal error: InternalError: the search found a point that the proof excluded"),
        (breaks, 4, "internal error: ZeroDivisionError: secret\\x1b[2J"),
        (refuses, 2, "needs something\n"),
        (stops, 130, "interrupted"),
    ],
)
def test_every_failure_has_its_exit_code_and_no_traceback(function, code: int, said: str, stand_in, capsys) -> None:
    stand_in(function)
    before = signal.getsignal(signal.SIGINT)
    try:
        assert main(["states", "x.loop"]) == code
    finally:
        signal.signal(signal.SIGINT, before)
    out, err = capsys.readouterr()
    assert out == ""
    assert said in err
    assert "Traceback" not in err
    assert "\x1b" not in err


def test_an_internal_error_names_the_facts_of_a_bug_report_and_keeps_the_traceback_in_a_file(
    stand_in, capsys, tmp_path: Path, monkeypatch
) -> None:
    monkeypatch.setattr("tempfile.tempdir", str(tmp_path))
    stand_in(breaks)
    main(["states", "x.loop", "--json"])
    err = capsys.readouterr().err
    assert "command: loopsim states x.loop --json" in err
    assert "numpy " in err
    (kept,) = tmp_path.iterdir()
    assert str(kept) in err
    assert "ZeroDivisionError" in kept.read_text()
    assert "Traceback" in kept.read_text()


def test_the_highest_ranked_exit_code_speaks_for_all() -> None:
    assert highest_ranked([0, 3, 1]) == 1
    assert highest_ranked([5, 3]) == 3
    assert highest_ranked([1, 2, 3]) == 2
    assert highest_ranked([2, 4, 1]) == 4
    assert highest_ranked([]) == 0


@pytest.mark.parametrize(
    ("make", "code", "said"),
    [
        (lambda folder: folder / "cistern_pmp.loop", "missing-file", "did you mean `"),
        (lambda folder: folder / "no" / "x.loop", "missing-file", "there is no folder"),
        (lambda folder: folder, "is-a-folder", "cistern_pump.loop"),
        (lambda folder: folder / "empty.loop", "empty-file", "begin with"),
        (lambda folder: folder / "picture.loop", "not-text", "UTF-8"),
        (lambda folder: folder / "latin.loop", "not-text", "UTF-8"),
    ],
)
def test_what_is_no_circuit_file_is_said_clearly(make, code: str, said: str, tmp_path: Path, capsys) -> None:
    (tmp_path / "cistern_pump.loop").write_text('circuit c "c"\n')
    (tmp_path / "empty.loop").write_text("\n  \n")
    (tmp_path / "picture.loop").write_bytes(b"\x89PNG\r\n\x00\x00")
    (tmp_path / "latin.loop").write_bytes(b'circuit c "\xe9"\n')
    assert main(["states", str(make(tmp_path))]) == Exit.MISTAKE
    err = capsys.readouterr().err
    assert f"{code}: " in err
    assert said in err


def test_a_reader_that_goes_away_is_no_error() -> None:
    process = subprocess.Popen(
        [sys.executable, "-m", "loopsim", "--help"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env=ENVIRONMENT,
        cwd=ROOT,
    )
    assert process.stdout is not None
    assert process.stderr is not None
    process.stdout.close()
    assert process.stderr.read() == b""
    process.stderr.close()
    assert process.wait() == 0


def test_a_closed_standard_output_is_no_traceback() -> None:
    done = subprocess.run(
        ["sh", "-c", f"'{sys.executable}' -m loopsim --help >&-"],
        capture_output=True,
        text=True,
        env=ENVIRONMENT,
        cwd=ROOT,
        check=False,
    )
    assert "Traceback" not in done.stderr


def test_a_full_disk_is_said() -> None:
    if not Path("/dev/full").exists():
        pytest.skip("no device that is always full")
    with open("/dev/full", "w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "loopsim", "--help"], stdout=full, stderr=subprocess.PIPE, text=True, env=ENVIRONMENT, cwd=ROOT
        )
    assert done.returncode == Exit.MISTAKE
    assert "standard output" in done.stderr
    assert "Traceback" not in done.stderr


def test_names_outside_the_encoding_of_the_stream_are_escaped() -> None:
    done = run("states", "\u6c34.loop", PYTHONIOENCODING="ascii")
    assert done.returncode == Exit.MISTAKE
    assert "\\u6c34.loop" in done.stderr


def sleeps(request: Request, around: Surroundings) -> Answer:
    print("started", flush=True)
    time.sleep(60)
    return Answer("")


def test_an_interrupt_ends_with_its_own_exit_code_and_no_traceback() -> None:
    program = (
        "import dataclasses, sys; sys.path.insert(0, 'tests'); import loopsim.cli as cli\n"
        "cli.VERBS['states'] = dataclasses.replace(cli.VERBS['states'], handler='test_cli:sleeps')\n"
        "sys.argv[1:] = ['states', 'x.loop']; cli.entry()"
    )
    process = subprocess.Popen(
        [sys.executable, "-c", program],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env=ENVIRONMENT,
        cwd=ROOT,
        # a shell that runs tests in the background makes its children deaf to the interrupt
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    )
    assert process.stdout is not None
    assert process.stdout.readline() == "started\n"
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=20)
    assert process.returncode == Exit.INTERRUPTED
    assert err == "loopsim: interrupted\n"


def _on_a_terminal(words: list[str], extra: Mapping[str, str]) -> bytes:
    """What the command writes when standard output and standard error are a terminal."""
    import pty

    reader, writer = pty.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "loopsim", *words], stdout=writer, stderr=writer, env={**ENVIRONMENT, **extra}, cwd=ROOT
    )
    os.close(writer)
    seen = b""
    while True:
        try:
            more = os.read(reader, 65536)
        except OSError:  # Linux says so when the other end closes
            break
        if not more:
            break
        seen += more
    os.close(reader)
    process.wait()
    return seen


PUMP = "circuits/comparators/cistern_pump.loop"
UNTIDY = 'circuit  c   "c"\n\n\n\ngnd->bat:9V->a\na--r:1kohm--gnd   # load\n'


def test_states_prints_the_three_points_of_the_pump_switch(capsys) -> None:
    assert main(["states", str(ROOT / PUMP)]) == Exit.WELL
    out, err = capsys.readouterr()
    assert err == ""
    lines = out.splitlines()
    assert lines[0] == "cistern_pump, level = 4.5 V"
    assert lines[1].startswith("3 operating points: complete (all nets within +/- 1 kV, ")
    assert lines[3].split()[:2] == ["state", "verdict"]
    assert [line.split()[0] for line in lines[4:7]] == ["A", "B", "C"]
    assert "unstable, whatever the strays" in lines[5]


def test_states_with_a_setting_is_the_circuit_at_that_setting(capsys) -> None:
    assert main(["states", str(ROOT / PUMP), "--set", "level=8V", "--set", "ambient=60degC"]) == Exit.WELL
    lines = capsys.readouterr().out.splitlines()
    assert lines[0].startswith("cistern_pump, ")
    assert "level = 8 V" in lines[0]
    assert "ambient = 60 degC" in lines[0]
    assert lines[1].startswith("1 operating point: complete")


def test_an_unknown_let_gets_a_suggestion(capsys) -> None:
    assert main(["states", str(ROOT / PUMP), "--set", "levle=8V"]) == Exit.MISTAKE
    assert "did you mean `level`?" in capsys.readouterr().err


def test_a_budget_that_is_too_short_is_undecided_and_never_complete(capsys) -> None:
    assert main(["states", str(ROOT / PUMP), "--budget", "1 us"]) == Exit.UNDECIDED
    out = capsys.readouterr().out
    assert "complete" not in out
    assert "undecided" in out


def test_csv_is_written_beside_the_answer(tmp_path: Path, capsys) -> None:
    target = tmp_path / "points.csv"
    assert main(["states", str(ROOT / PUMP), "--csv", str(target)]) == Exit.WELL
    assert f"wrote {target}" in capsys.readouterr().err
    assert [line.split(",")[0] for line in target.read_text().splitlines()] == ["state", "A", "B", "C"]
    assert list(tmp_path.iterdir()) == [target]
    assert main(["states", str(ROOT / PUMP), "--csv", str(tmp_path / "no" / "x.csv")]) == Exit.MISTAKE
    assert "cannot write" in capsys.readouterr().err


def test_inspect_tells_parts_nets_and_structure(tmp_path: Path, capsys) -> None:
    assert main(["inspect", str(ROOT / PUMP)]) == Exit.WELL
    out = capsys.readouterr().out
    assert out.startswith('cistern_pump: "')
    for words in ("r_fb", "47 kohm +/- 1 %", "u1.minus", "level", "0 V .. 9 V", "structure: nothing to remark"):
        assert words in out
    floating = tmp_path / "floating.loop"
    floating.write_text('circuit floating "c"\ngnd -> bat: 9 V -> a\nb -- r: 1 kohm -- c\na -- r2: 1 kohm -- gnd\n')
    assert main(["inspect", str(floating)]) == Exit.MISTAKE
    assert "fault: " in capsys.readouterr().out


def test_tidy_rewrites_in_place_and_tells_with_check(tmp_path: Path, capsys) -> None:
    path = tmp_path / "c.loop"
    path.write_text(UNTIDY)
    path.chmod(0o640)
    assert main(["tidy", str(path), "--check"]) == Exit.VIOLATED
    assert path.read_text() == UNTIDY
    assert main(["tidy", str(path)]) == Exit.WELL
    laid_out = path.read_text()
    assert "gnd -> bat: 9 V -> a" in laid_out
    assert "# load" in laid_out
    assert path.stat().st_mode & 0o777 == 0o640
    assert main(["tidy", str(path), "--check"]) == Exit.WELL
    assert main(["tidy", str(path)]) == Exit.WELL
    assert path.read_text() == laid_out
    assert [entry.name for entry in tmp_path.iterdir()] == ["c.loop"]


def test_a_broken_file_is_left_as_it_is(tmp_path: Path, capsys) -> None:
    path = tmp_path / "c.loop"
    path.write_text("circuit c\nlet = = 3\n")
    for verb in ("tidy", "states", "inspect"):
        assert main([verb, str(path)]) == Exit.MISTAKE
        err = capsys.readouterr().err
        assert re.match(rf"{re.escape(str(path))}:2:5: [a-z-]+: ", err)
        assert "\n    2 | let = = 3\n      |     ^" in err
    assert path.read_text() == "circuit c\nlet = = 3\n"


def test_a_title_with_escapes_reaches_no_terminal(tmp_path: Path, capsys) -> None:
    path = tmp_path / "evil.loop"
    path.write_text('circuit evil "\u202e\u2066"\ngnd -> bat: 9 V -> a\na -- r: 1 kohm -- gnd\n', encoding="utf-8")
    for verb in ("states", "inspect"):
        main([verb, str(path)])
        out, err = capsys.readouterr()
        assert "\u202e" not in out + err


def test_transient_follows_the_circuit_for_a_time(capsys) -> None:
    assert main(["transient", str(ROOT / "circuits/switches/kiln_trip.loop")]) == Exit.MISTAKE
    assert "--for TIME" in capsys.readouterr().err
    assert main(["transient", str(ROOT / PUMP), "--for", "1ms", "--start", "Q"]) == Exit.MISTAKE
    assert "there is no state Q" in capsys.readouterr().err


def test_an_interrupted_transient_prints_what_it_has(capsys, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    from loopsim.cli import motion

    def stop(share: float) -> None:
        signal.raise_signal(signal.SIGINT)

    monkeypatch.setattr(motion, "progress", lambda around, label: contextlib.nullcontext(stop))
    table = tmp_path / "steps.csv"
    words = ["transient", str(ROOT / "circuits/oscillators/cistern_blinker.loop"), "--for", "20s", "--start", "out=1"]
    assert main([*words, "--csv", str(table)]) == Exit.INTERRUPTED
    out, err = capsys.readouterr()
    assert "stopped early" in out and "interrupted at" in err and "of 20 s" in err
    assert len(table.read_text(encoding="utf-8").splitlines()) > 100


def test_colour_is_for_terminals_that_want_it() -> None:
    words = ["states", PUMP]
    assert b"\x1b[" in _on_a_terminal(words, {"TERM": "xterm"})
    for extra in ({"TERM": "dumb"}, {"TERM": "xterm", "NO_COLOR": "1"}):
        assert b"\x1b[1m" not in _on_a_terminal(words, extra)
    assert "\x1b" not in run(*words).stdout
