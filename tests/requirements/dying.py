"""Workers that die or stall on purpose, for the tests of library runs. The product has no such switch."""

import os
import re
import signal
import time
from concurrent.futures import Executor, Future

from loopsim.requirements.wall import last_resort
from loopsim.requirements.workers import WorkerPool


def killed(task: str, attempt: int) -> str:
    os.kill(os.getpid(), signal.SIGKILL)
    return ""


def leaves(code: int) -> None:
    os._exit(code)


def prints(text: str) -> str:
    print(text)
    os.write(1, text.encode())
    return text


def threads() -> dict[str, str | None]:
    return {name: os.environ.get(name) for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")}


def process() -> int:
    return os.getpid()


def sleeps(seconds: float) -> int:
    time.sleep(seconds)
    return os.getpid()


def stuck(seconds: float) -> None:
    """Deep in compiled code, with the interpreter's lock held, for longer than anybody waits."""
    with last_resort(seconds):
        re.match(r"(a+)+$", "a" * 60 + "b")


def raises(text: str) -> None:
    raise ValueError(text)


class Deadly(Executor):
    """Workers that are killed by every task that holds `mark`, in its first `attempts` attempts."""

    def __init__(self, mark: str, attempts: int) -> None:
        self.pool = WorkerPool(1)
        self.mark = mark
        self.attempts = attempts
        self.calls: list[tuple[bool, int]] = []

    def submit(self, fn, /, *args, **kwargs) -> Future[str]:
        task, attempt = args
        deadly = self.mark in task
        self.calls.append((deadly, attempt))
        return self.pool.submit(killed if deadly and attempt <= self.attempts else fn, *args)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        self.pool.stop()
