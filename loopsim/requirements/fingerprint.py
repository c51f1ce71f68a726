"""What made an answer: the code of loopsim, and what it computes with."""

from __future__ import annotations

import hashlib
import platform
from functools import cache
from importlib import metadata
from pathlib import Path

from loopsim._version import __version__

LIBRARIES = ("numpy", "scipy", "numba")


@cache
def code() -> str:
    """Version and a digest of the files of loopsim: a changed solver never vouches for an old answer, nor
    another machine's for a new one."""
    digest = hashlib.sha256()
    package = Path(__file__).parents[1]
    for path in sorted([*package.rglob("*.py"), *package.rglob("*.lark")]):
        digest.update(f"{path.relative_to(package).as_posix()}\n".encode() + path.read_bytes())
    return f"{__version__} {digest.hexdigest()}"


@cache
def tool() -> str:
    """`code`, the kind of processor, and the versions of Python and of the libraries that the numbers come from."""
    found = [code(), platform.python_version(), platform.machine()]
    for name in LIBRARIES:
        try:
            found.append(f"{name} {metadata.version(name)}")
        except metadata.PackageNotFoundError:
            continue
    return " ".join(found)
