"""From an exception to a message and an exit code. A raw traceback never reaches the terminal."""

from __future__ import annotations

import os
import platform
import tempfile
import traceback
from collections.abc import Sequence

from loopsim._version import __version__
from loopsim.cli.exits import Exit
from loopsim.cli.options import UsageError
from loopsim.errors import AnalysisError, CircuitError, InternalError, LoopsimError
from loopsim.output.engineering import engineering
from loopsim.printable import printable

# codes of AnalysisError that say what was asked wrongly; the others say that an answer was not reached
ASKED_WRONGLY = frozenset(
    (
        *("box", "cannot-write", "driven", "duration", "not-recorded", "nudge", "plot-suffix", "ramp", "singular", "start", "time"),
        *("tolerance", "unknown-net"),
    )
)

LIBRARIES = ("numpy", "scipy", "networkx", "lark", "matplotlib", "tqdm", "numba", "dask", "distributed")


def versions() -> list[tuple[str, str]]:
    """loopsim, Python and every library under it that is installed, without importing any."""
    from importlib import metadata

    found = [("loopsim", __version__), ("Python", platform.python_version())]
    for name in LIBRARIES:
        try:
            found.append((name, metadata.version(name)))
        except metadata.PackageNotFoundError:
            continue
    return found


def explain(error: BaseException, words: Sequence[str]) -> tuple[str, Exit]:
    """The message for standard error and the exit code. words: the command line, for a bug report."""
    match error:
        case UsageError():
            return str(error), Exit.MISTAKE
        case CircuitError():
            from loopsim.language.rules import with_way_out

            return str(with_way_out(error)), Exit.MISTAKE
        case AnalysisError():
            last = ", ".join(f"{printable(net)} = {engineering(volts, 'V')}" for net, volts in error.last_good.items())
            return printable(str(error)) + (f"\n    last good state: {last}" if last else ""), (
                Exit.MISTAKE if error.code in ASKED_WRONGLY else Exit.UNDECIDED
            )
        case InternalError():
            return _report(error, words), Exit.INTERNAL
        case LoopsimError():
            return printable(str(error)), Exit.MISTAKE
        case OSError() if error.filename is not None:
            reason = error.strerror or type(error).__name__
            return f"loopsim: {printable(str(error.filename))}: {printable(reason)}", Exit.MISTAKE
        case _:
            return _report(error, words), Exit.INTERNAL


def _report(error: BaseException, words: Sequence[str]) -> str:
    return bug_report(f"{type(error).__name__}: {error}", "".join(traceback.format_exception(error)), words)


def bug_report(what: str, detail: str, words: Sequence[str]) -> str:
    """What to put into a bug report; the detail, a traceback, goes to a file of its own."""
    command = " ".join(["loopsim", *words])
    facts = [
        f"command: {command}",
        "versions: " + ", ".join(f"{name} {version}" for name, version in versions()),
        f"system: {platform.platform()}",
    ]
    lines = [f"loopsim: internal error: {what}", *(f"    {fact}" for fact in facts)]
    place = _kept("\n".join([*facts, "", detail]))
    if place:
        lines.append(f"    details: {place}")
    lines.append("    This is a bug in loopsim. Nothing was printed that depends on it; please report it with these lines.")
    return "\n".join(printable(line) for line in lines)


def _kept(text: str) -> str:
    """Write `text` to a new file in the temporary folder; its path, or an empty text where none can be written."""
    try:
        handle, path = tempfile.mkstemp(prefix="loopsim-error-", suffix=".txt", text=True)
        with os.fdopen(handle, "w", encoding="utf-8", errors="backslashreplace") as stream:
            stream.write(text)
    except OSError:
        return ""
    return path
