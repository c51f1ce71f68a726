"""Compile plain loops over arrays when numba (extra `fast`) is installed; run the very same source when it is not.

Functions marked with `compile_kernel` stay small, so that compiling stays short; entry points marked with `compile_entry` keep
their machine code on disk (numba's cache folder: beside the source, else the user's cache). A kernel is keyed by the text of
every file that goes into it: numba itself looks only at the entry's own file, and an edited phi must never meet an old kernel.
"""

from __future__ import annotations

import hashlib
import importlib.util
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import CellType, FunctionType, ModuleType
from typing import Any, TypeVar, cast

F = TypeVar("F", bound=Callable[..., Any])

PATIENCE = 1.0  # seconds: loading from the cache takes less, compiling takes more
NOTICE = "compiling the transient kernel for this machine, once: about half a minute"


def have_compiler() -> bool:
    """Whether numba can be imported (it is not imported here)."""
    return importlib.util.find_spec("numba") is not None


def compile_kernel(function: F) -> F:
    """`function` compiled, to be called from other compiled functions; or `function` itself without numba."""
    if not have_compiler():
        return function
    import numba

    return cast("F", numba.njit(error_model="numpy", forceinline=True)(function))


def compile_entry(*modules: ModuleType) -> Callable[[F], F]:
    """Decorator: the function compiled with its machine code kept on disk, keyed by the text of its own file and of `modules`;
    or the function itself without numba."""

    def decorate(function: F) -> F:
        if not have_compiler():
            return function
        import numba

        assert isinstance(function, FunctionType)
        # numba's key has the code of the function and the values in its closure: the digest goes in as a variable that is never read
        code = function.__code__.replace(co_freevars=(*function.__code__.co_freevars, "source_key"))
        cells = (*(function.__closure__ or ()), CellType(source_stamp(__file__, function.__code__.co_filename, *modules)))
        keyed = FunctionType(code, function.__globals__, function.__name__, function.__defaults__, cells)
        return cast("F", numba.njit(cache=True, error_model="numpy")(keyed))

    return decorate


def compile_table(functions: Sequence[Callable[..., Any]], replaced: dict[str, Callable[..., Any]]) -> tuple[Any, ...]:
    """Functions of one module compiled as scalar functions, their calls to each other included.

    replaced: name to function that stands in for a global of that module (as a scalar choice for np.where).
    The source stays the module's own: only the table of globals that the code looks names up in is another one.
    """
    if not have_compiler():
        return tuple(functions)
    done: dict[str, Any] = {}

    def compiled(function: Callable[..., Any]) -> Any:
        name = function.__name__
        if name not in done:
            assert isinstance(function, FunctionType)
            names = dict(function.__globals__)
            for used in function.__code__.co_names:
                if used in replaced:
                    names[used] = compile_kernel(replaced[used])
                elif isinstance(names.get(used), FunctionType) and names[used].__module__ == function.__module__:
                    names[used] = compiled(names[used])
            copy = FunctionType(function.__code__, names, name, function.__defaults__, function.__closure__)
            done[name] = compile_kernel(copy)
        return done[name]

    return tuple(compiled(function) for function in functions)


def source_stamp(*files: str | ModuleType) -> str:
    """Digest of source texts: part of the key under which machine code is kept."""
    digest = hashlib.sha256()
    for file in files:
        name = file if isinstance(file, str) else file.__file__
        assert name is not None
        digest.update(Path(name).read_bytes())
    return digest.hexdigest()


@contextmanager
def announced(tell: Callable[[str], None] | None) -> Iterator[None]:
    """Around a first call: `tell(NOTICE)` once it takes longer than loading would, that is while it compiles."""
    if tell is None or not have_compiler():
        yield
        return
    timer = threading.Timer(PATIENCE, tell, args=(NOTICE,))
    timer.daemon = True
    timer.start()
    try:
        yield
    finally:
        timer.cancel()
