"""From a file or a text to a Circuit; `use` is confined to the library root."""

from __future__ import annotations

import codecs
import os
import posixpath
from collections.abc import Mapping
from pathlib import Path

from loopsim.circuit import Circuit
from loopsim.errors import CircuitError, Span
from loopsim.language import tree as t
from loopsim.language.builder import build
from loopsim.language.definitions import Definitions, define
from loopsim.language.mistakes import nearest
from loopsim.language.names import statement_place
from loopsim.language.parser import MAX_CHARACTERS, statements
from loopsim.language.rules import with_way_out
from loopsim.language.source import Source

MAX_FILES = 200  # parts files that one circuit may draw in
MAX_LINE_OF_FILES = 32  # files that use files; each is read inside the one before
PARTS = "parts"  # a folder of this name marks the library root


def load(path: str | os.PathLike[str], library_root: str | os.PathLike[str] | None = None) -> Circuit:
    """The circuit in a file. library_root: the folder that `use` may not leave; by default the nearest folder at or above the file's own
    that holds a folder `parts`, else the file's own.

    CircuitError for everything wrong in the file or in one it uses, and when it cannot be read.
    """
    shown = os.fspath(path)
    real = Path(shown).resolve()
    root = Path(library_root).resolve() if library_root is not None else _root_of(real.parent)
    text = read_text(real, shown)
    try:
        key = real.relative_to(root).as_posix()
    except ValueError:
        key = real.name
        root = real.parent
    return _Reader(root, None).circuit(Source(shown, text), key)


def parse(
    text: str,
    file: str = "<text>",
    library_root: str | os.PathLike[str] | None = None,
    sources: Mapping[str, str] | None = None,
) -> Circuit:
    """The circuit in a text. `use` reads below library_root, or takes the texts of `sources` (as `Circuit.sources` holds them, by path from
    the root), or is an error where neither is given."""
    root = Path(library_root).resolve() if library_root is not None else None
    key = (
        next((name for name in sources if sources[name] == text), posixpath.basename(file))
        if sources
        else posixpath.basename(file)
    )
    return _Reader(root, sources).circuit(Source(file, text), key)


def _root_of(folder: Path) -> Path:
    for candidate in (folder, *folder.parents):
        if (candidate / PARTS).is_dir():
            return candidate
    return folder


def read_text(path: Path, shown: str) -> str:
    """The text of a file; CircuitError `cannot-read`, `file-size`, `not-text`. shown: its name in messages."""
    try:
        data = path.read_bytes()
    except OSError as error:
        raise CircuitError("cannot-read", f"cannot read `{shown}`: {error.strerror}") from None
    if len(data) > 4 * MAX_CHARACTERS:
        raise CircuitError(
            "file-size",
            f"`{shown}` holds more than {MAX_CHARACTERS:,} characters",
            hint="one circuit per file",
        )
    data = data.removeprefix(codecs.BOM_UTF8)
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError as error:
        before = data[: error.start].decode("utf-8")
        line, column = before.count("\n") + 1, len(before) - before.rfind("\n")
        place = Source(shown, data.decode("utf-8", errors="replace")).at(line, column)
        raise CircuitError("not-text", "this is no UTF-8 text", place, "save it as UTF-8") from None


class _Reader:
    """Reads one circuit with everything it uses. root: folder that `use` may not leave, or None; texts: given texts instead of files."""

    def __init__(self, root: Path | None, texts: Mapping[str, str] | None) -> None:
        self.root = root
        self.texts = texts
        self.done: dict[str, Definitions] = {}
        self.sources: dict[str, str] = {}

    def circuit(self, source: Source, key: str) -> Circuit:
        self.sources[key] = source.text
        try:
            found = statements(source)
            definitions = define(source, found, lambda use: self._used(use, source, key, (key,)))
            return build(source, found, definitions, self.sources)
        except CircuitError as error:
            raise with_way_out(error) from None

    def _used(self, use: t.Use, source: Source, key: str, trail: tuple[str, ...]) -> Definitions:
        where = source.span(use.place)
        if (
            not use.path
            or posixpath.isabs(use.path)
            or "\\" in use.path
            or ":" in use.path
            or "\0" in use.path
        ):
            raise CircuitError(
                "use-path",
                f"`{use.path}` is no path relative to this file",
                where,
                "forward slashes, below the library root",
            )
        name = posixpath.normpath(posixpath.join(posixpath.dirname(key), use.path))
        if name.startswith("..") or name == ".":
            raise CircuitError(
                "use-outside",
                f"`{use.path}` leads out of the library",
                where,
                "`use` stays inside the library root",
            )
        if name in trail:
            raise CircuitError("use-cycle", f"`{use.path}` leads back to itself", where)
        if len(trail) > MAX_LINE_OF_FILES:
            raise CircuitError("too-many-files", f"files use each other more than {MAX_LINE_OF_FILES} deep", where)
        if name not in self.done:
            if len(self.done) >= MAX_FILES:
                raise CircuitError("too-many-files", f"more than {MAX_FILES} files are used", where)
            shown = posixpath.normpath(posixpath.join(posixpath.dirname(source.file), use.path))
            text = self._text(name, use, where, shown)
            self.sources[name] = text
            inner = Source(shown, text)
            found = statements(inner)
            for statement in found:
                if not isinstance(statement, t.Use | t.KindOf | t.CurveOf | t.Block):
                    raise CircuitError(
                        "parts-file",
                        "a parts file holds only `use`, `kind`, `curve` and `block`",
                        inner.span(statement_place(statement)),
                    )
            self.done[name] = define(inner, found, lambda more: self._used(more, inner, name, (*trail, name)))
        return self.done[name]

    def _text(self, name: str, use: t.Use, where: Span | None, shown: str) -> str:
        span = where
        if self.texts is not None and name in self.texts:
            return self.texts[name]
        if self.root is None:
            raise CircuitError(
                "use-path", f"`{use.path}` cannot be found: this text has no library root", span
            )
        path = self.root / name
        real = path.resolve()
        if real != self.root and self.root not in real.parents:
            raise CircuitError(
                "use-outside", f"`{use.path}` leads out of the library", span, "no link may lead out"
            )
        if not real.is_file():
            near = [p.name for p in path.parent.glob("*.loop")] if path.parent.is_dir() else []
            raise CircuitError(
                "use-missing", f"there is no file `{use.path}`", span, nearest(path.name, near)
            )
        return read_text(real, shown)
