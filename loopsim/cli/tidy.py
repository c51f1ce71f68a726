"""`loopsim tidy FILE`."""

from __future__ import annotations

import os
from pathlib import Path

from loopsim.cli.answer import Answer, Surroundings
from loopsim.cli.exits import Exit
from loopsim.cli.options import Request
from loopsim.cli.reading import readable, write_file
from loopsim.printable import printable


def run(request: Request, around: Surroundings) -> Answer:
    """Rewrite the file in the standard layout; with --check only tell whether it would change (exit code 1)."""
    path = request.paths[0]
    readable(path)
    from loopsim.language.load import read_text
    from loopsim.language.tidy import tidy

    before = read_text(Path(path), path)
    after = tidy(before, path)
    if before == after:
        return Answer(f"{printable(path)}: tidy\n")
    if request.has("check"):
        changed = sum(one != other for one, other in zip(before.splitlines(), after.splitlines(), strict=False))
        changed += abs(len(before.splitlines()) - len(after.splitlines()))
        return Answer(f"{printable(path)}: not tidy, {max(changed, 1)} lines would change\n", Exit.VIOLATED)
    target = os.path.realpath(path)  # a link stays a link
    mode = os.stat(target).st_mode
    write_file(target, after)
    os.chmod(target, mode & 0o7777)
    return Answer(f"{printable(path)}: laid out anew\n")
