"""A wall-time limit on a call that is meant to keep its budget by itself, for the case that it does not."""

from __future__ import annotations

import ctypes
import faulthandler
import os
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TypeVar

Result = TypeVar("Result")


class Overrun(BaseException):
    """Raised inside a call that went past its limit; no `except Exception` on its way may swallow it."""


def within_wall(seconds: float, function: Callable[[], Result]) -> Result:
    """What `function` returns, or Overrun raised inside it after `seconds` [s], in whatever thread it runs.

    A signal would need the main thread, which workers of other executors do not give. The exception arrives
    between two byte codes; a call that never comes back to the interpreter is ended by `last_resort`.
    """
    thread = threading.get_ident()
    lock = threading.Lock()
    running = True

    def interrupt() -> None:
        with lock:
            if running:
                ctypes.pythonapi.PyThreadState_SetAsyncExc(ctypes.c_ulong(thread), ctypes.py_object(Overrun))

    timer = threading.Timer(seconds, interrupt)
    timer.daemon = True
    timer.start()
    try:
        return function()
    finally:
        with lock:
            running = False
            # one that was set and has not arrived must not arrive later
            ctypes.pythonapi.PyThreadState_SetAsyncExc(ctypes.c_ulong(thread), None)
        timer.cancel()


@contextmanager
def last_resort(seconds: float) -> Iterator[None]:
    """End this process after `seconds` [s], even while it is deep in compiled code: for a worker process of our own only."""
    with open(os.devnull, "w", encoding="utf-8") as nowhere:
        # a thread of the C library that needs no interpreter lock
        faulthandler.dump_traceback_later(seconds, exit=True, file=nowhere)
        try:
            yield
        finally:
            faulthandler.cancel_dump_traceback_later()
