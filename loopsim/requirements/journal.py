"""The journal beside a library run: one line a finished circuit, so that a killed run goes on where it was.

A line is written by a single unbuffered append, so that a kill at any moment loses at most the circuit at
hand; it carries a check of its own, so that a damaged one is seen and left out. A record is used again only
under the same key: tool, libraries, texts, requirements and options. An undecided one is used again only
within the run that wrote it: a new run tries again.
"""

from __future__ import annotations

import errno
import hashlib
import json
import os
import stat
from collections.abc import Callable

from loopsim.errors import LoopsimError
from loopsim.requirements.fingerprint import tool
from loopsim.requirements.judging import Record, read_record

DEFAULT_NAME = ".loopsim-journal"  # in the folder where the run is started
HEAD = b"loopsim journal 1\n"
END = "run finished"
CHECK = 16  # hexadecimal digits of a line's check


class JournalError(LoopsimError):
    """The file cannot be the journal of this run; nothing was written to it."""


class Journal:
    """An open journal. known: key to record text, as far as it may be used; damaged: lines that were left out."""

    def __init__(self, path: str, handle: int, known: dict[str, str], damaged: int) -> None:
        self.path = path
        self.known = known
        self.damaged = damaged
        self._handle = handle

    @classmethod
    def resume(cls, path: str) -> Journal:
        """Open a journal, or begin one. JournalError where it cannot be, is in use by another run, or is
        another kind of file."""
        return cls._opened(path, lambda handle, content: content)

    @classmethod
    def afresh(cls, path: str) -> Journal:
        """Begin anew: what it held is dropped. JournalError as for `resume`."""

        def emptied(handle: int, content: bytes) -> bytes:
            os.ftruncate(handle, 0)
            return b""

        return cls._opened(path, emptied)

    @classmethod
    def _opened(cls, path: str, treat: Callable[[int, bytes], bytes]) -> Journal:
        try:
            handle = os.open(path, os.O_RDWR | os.O_CREAT | os.O_APPEND | getattr(os, "O_BINARY", 0), 0o644)
        except OSError as error:
            raise JournalError(f"cannot write the journal `{path}`: {error.strerror}") from None
        try:
            _lock(handle, path)
            content = _whole(handle)
            if HEAD.startswith(content):  # killed while it was begun
                os.ftruncate(handle, 0)
                content = b""
            known, damaged, good = read_lines(content)
            foreign = bool(content) and not content.startswith(HEAD) and not good
            kept = content if foreign else treat(handle, content)
            if not kept:
                os.write(handle, HEAD)
                known, damaged = {}, 0
            elif not foreign and not kept.endswith(b"\n"):
                os.write(handle, b"\n")  # a torn last line ends here
        except OSError as error:
            os.close(handle)
            raise JournalError(f"cannot use the journal `{path}`: {error.strerror}") from None
        except JournalError:
            os.close(handle)
            raise
        if foreign:
            os.close(handle)
            raise JournalError(f"`{path}` is no journal: it is left as it is; name another with --journal")
        return cls(path, handle, known, damaged)

    def add(self, key: str, record: str) -> None:
        """Put down one finished circuit. JournalError when it cannot be written, as on a full disk."""
        self._append(key, record)

    def finish(self) -> None:
        """Put down that the run came to its end: undecided circuits are tried again by the next one."""
        self._append(END, "")

    def close(self) -> None:
        """Let go of the file."""
        os.close(self._handle)

    def _append(self, key: str, record: str) -> None:
        line = _line(key, record)
        try:
            written = os.write(self._handle, line)
        except OSError as error:
            raise JournalError(f"cannot write the journal `{self.path}`: {error.strerror}") from None
        if written != len(line):
            raise JournalError(f"cannot write the journal `{self.path}`: the disk is full")


def _line(key: str, record: str) -> bytes:
    body = json.dumps([key, record], separators=(",", ":"))
    return f"{_check(body)} {body}\n".encode("ascii")


def _check(body: str) -> str:
    return hashlib.sha256(body.encode("ascii")).hexdigest()[:CHECK]


def read_lines(content: bytes) -> tuple[dict[str, str], int, int]:
    """(key to the last usable record, number of damaged lines, number of good ones) of a journal's bytes."""
    known: dict[str, str] = {}
    damaged = good = 0
    for line in content.removeprefix(HEAD).split(b"\n"):
        if not line:
            continue
        try:
            key, record = _read(line)
            if key == END:
                known = {name: text for name, text in known.items() if _decided(read_record(text))}
            else:
                read_record(record)
                known[key] = record
            good += 1
        except (ValueError, KeyError, TypeError, AttributeError, RecursionError):
            damaged += 1
    return known, damaged, good


def _read(line: bytes) -> tuple[str, str]:
    """(key, record) of a line; ValueError for one that is not as it was written."""
    check, _, body = line.decode("ascii").partition(" ")
    if check != _check(body):
        raise ValueError("changed since it was written")
    key, record = json.loads(body)
    return str(key), str(record)


def _decided(record: Record) -> bool:
    return record.trouble is None and all(outcome.outcome != "undecided" for outcome in record.outcomes)


def _whole(handle: int) -> bytes:
    if not stat.S_ISREG(os.fstat(handle).st_mode):
        raise OSError(errno.EINVAL, "it is no regular file")
    os.lseek(handle, 0, os.SEEK_SET)
    parts = []
    while part := os.read(handle, 1 << 20):
        parts.append(part)
    return b"".join(parts)


def _lock(handle: int, path: str) -> None:
    """One writer: the lock goes with the process, so that a killed run leaves none."""
    try:
        import fcntl
    except ImportError:  # a system without it
        return
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        raise JournalError(f"another run writes the journal `{path}`: name another with --journal") from None
    except OSError:  # a file system without locks
        return


def key_of(task: str) -> str:
    """What a record is filed under: the tool and libraries that made it, and its task: texts, requirements, options."""
    return hashlib.sha256(f"{tool()}\n{task}".encode()).hexdigest()
