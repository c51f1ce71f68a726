"""A progress bar on standard error, where a person watches it on a terminal; nothing anywhere else."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from loopsim.cli.answer import Surroundings
from loopsim.printable import printable

WIDTH = 72  # columns, so that a narrow terminal does not wrap the bar


@contextmanager
def progress(around: Surroundings, label: str) -> Iterator[Callable[[float], None] | None]:
    """A function that hears the share done (0 .. 1), or None where nobody watches."""
    if not around.watched:
        yield None
        return
    try:
        from tqdm import tqdm
    except ImportError:  # the extra `progress` is not installed: plain percentages do

        def percent(share: float) -> None:
            sys.stderr.write(f"\r{printable(label)} {100.0 * share:3.0f} %")
            sys.stderr.flush()

        yield percent
        sys.stderr.write("\x1b[2K\r")
        return
    form = "{desc} {bar} {elapsed}"
    with tqdm(total=1.0, desc=printable(label), leave=False, ncols=WIDTH, file=sys.stderr, bar_format=form) as bar:

        def advance(share: float) -> None:
            bar.n = min(max(share, 0.0), 1.0)
            bar.refresh(nolock=True)

        yield advance


def teller(around: Surroundings) -> Callable[[str], None] | None:
    """A function for remarks that a person should read while waiting, or None when they shall be quiet."""
    if around.quiet:
        return None

    def tell(text: str) -> None:
        sys.stderr.write(printable(text) + "\n")
        sys.stderr.flush()

    return tell
