"""The command `loopsim VERB ...`: words in, an answer on standard output, the rest on standard error, an exit code.

Verbs are imported when they run: help and mistakes in the command line answer without NumPy.
"""

from __future__ import annotations

import importlib
import os
import signal
import sys
from collections.abc import Sequence
from typing import TextIO

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.catalogue import COMMON, PLANNED, VERBS
from loopsim.cli.exits import Exit
from loopsim.cli.faults import explain, versions
from loopsim.cli.guide import overview, verb_help
from loopsim.cli.options import Request, UsageError, nearest, parse_words
from loopsim.output.terminal import is_terminal, palette_for

HELP = ("-h", "--help")


def entry() -> None:
    """The console script: one linear-algebra thread, since the matrices are small and the answers shall repeat to the bit."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    code = main(sys.argv[1:])
    _finish(sys.stdout)
    _finish(sys.stderr)
    # workers and libraries may hold the interpreter back at its end; everything is written by now
    sys.exit(code)


def main(words: Sequence[str] | None = None) -> int:
    """Run one command line; returns the exit code."""
    arguments = list(sys.argv[1:] if words is None else words)
    for stream in (sys.stdout, sys.stderr):
        # a name that the terminal's encoding lacks is escaped, never an error
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    try:
        answer = answer_to(arguments)
    except KeyboardInterrupt:
        signal.signal(signal.SIGINT, signal.SIG_DFL)  # the second one stops at once
        _write(sys.stderr, "loopsim: interrupted\n")
        return Exit.INTERRUPTED
    except Exception as error:
        message, code = explain(error, arguments)
        _write(sys.stderr, message + "\n")
        return code
    try:
        _write(sys.stdout, answer.text)
    except OSError as error:
        _write(sys.stderr, f"loopsim: standard output: {error.strerror}\n")
        return Exit.MISTAKE
    if answer.remarks:
        _write(sys.stderr, "".join(f"{line}\n" for line in answer.remarks))
    return answer.code


def answer_to(words: Sequence[str]) -> Answer:
    """The answer to one command line. Raises UsageError for what it cannot mean."""
    asked = next((word for word in words if not word.startswith("-")), None)
    if any(word in HELP for word in _before_end(words)):
        verb = VERBS.get(asked or "")
        return Answer(verb_help(verb, COMMON) if verb else overview(VERBS, COMMON))
    if "--version" in _before_end(words):
        return Answer("".join(f"{name} {version}\n" for name, version in versions()))
    if asked is None:
        raise UsageError("no verb" if not words else f"no verb before {words[0]}", f"verbs: {', '.join(VERBS)}")
    if asked in PLANNED:
        raise UsageError(f"{asked} ({PLANNED[asked]}) is planned and not built yet", f"built: {', '.join(VERBS)}")
    if asked not in VERBS:
        raise UsageError(f"there is no verb {asked}", nearest(asked, VERBS) or f"verbs: {', '.join(VERBS)}")
    behind = list(words)
    behind.remove(asked)
    request = parse_words(VERBS[asked], behind, COMMON)
    return _run(request)


def _before_end(words: Sequence[str]) -> Sequence[str]:
    return words[: words.index("--")] if "--" in words else words


def _run(request: Request) -> Answer:
    wish = "never" if request.has("no_color") else "auto"
    quiet = request.has("quiet")
    around = Surroundings(
        answers=palette_for(sys.stdout, os.environ, wish),
        remarks=palette_for(sys.stderr, os.environ, wish),
        watched=is_terminal(sys.stderr) and not quiet,
        quiet=quiet,
    )
    module, _, function = VERBS[request.verb].handler.partition(":")
    if around.watched:
        _write(sys.stderr, f"{request.verb} ...\r")  # libraries take a while to load: say at once that it runs
    try:
        answer: Answer = getattr(importlib.import_module(module), function)(request, around)
    finally:
        if around.watched:
            _write(sys.stderr, "\x1b[2K\r")
    return Answer(answer.text, answer.code, () if quiet else answer.remarks)


def _write(stream: TextIO | None, text: str) -> None:
    """Write and flush; a reader that went away is no error."""
    if stream is None or not text:
        return
    try:
        stream.write(text)
        stream.flush()
    except BrokenPipeError:
        _silence(stream)


def _finish(stream: TextIO | None) -> None:
    try:
        if stream is not None:
            stream.flush()
    except (OSError, ValueError):
        _silence(stream)


def _silence(stream: TextIO | None) -> None:
    """Point a broken stream at nothing, so that the interpreter does not complain when it closes it."""
    try:
        if stream is not None:
            os.dup2(os.open(os.devnull, os.O_WRONLY), stream.fileno())
    except (OSError, ValueError):
        return
