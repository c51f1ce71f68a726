"""Examples of the table of mistakes, run as a user would run them."""

import contextlib
import io
import os
from pathlib import Path

from loopsim import CircuitError
from loopsim.cli import main
from loopsim.language.rules import Example

FILE = "example.loop"


@contextlib.contextmanager
def inside(folder: Path):
    before = Path.cwd()
    os.chdir(folder)
    try:
        yield
    finally:
        os.chdir(before)


def told(example: Example, folder: Path) -> tuple[int, str]:
    """Exit code and message of an example, with its files in `folder`."""
    if example.program:
        return _program(example.program)
    (folder / FILE).write_bytes(example.text.encode() + example.data)
    for name, text in example.files.items():
        (folder / name).write_text(text, encoding="utf-8")
    answers, remarks = io.StringIO(), io.StringIO()
    words = [FILE if word == "FILE" else word for word in example.words]
    with inside(folder), contextlib.redirect_stdout(answers), contextlib.redirect_stderr(remarks):
        code = main(words)
    return code, remarks.getvalue()


def _program(text: str) -> tuple[int, str]:
    """What a program is told; 2 stands for a mistake, as in the command."""
    try:
        exec(text, {})
    except CircuitError as error:
        return 2, f"{error}\n"
    return 0, ""
