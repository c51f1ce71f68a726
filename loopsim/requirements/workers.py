"""Worker processes that may die: an executor that loses one task with a dead worker, never its neighbours.

The standard process pool breaks for good when a worker dies, and cannot tell which task killed it. Here every
worker is a child of its own with a pipe; a child that ends fails the one task it held, and the next task gets
a new child. A child runs one linear-algebra thread, starts without the caller's main script, and ends by
itself when the caller is gone.
"""

from __future__ import annotations

import os
import pickle
import queue
import signal
import subprocess
import sys
import threading
from collections.abc import Callable
from concurrent.futures import Executor, Future
from typing import IO, Any

from loopsim.errors import LoopsimError

# The libraries read these once, when they are imported: they have to stand before the child starts.
THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "VECLIB_MAXIMUM_THREADS", "NUMBA_NUM_THREADS")
ONE_THREAD = dict.fromkeys(THREADS, "1")
HEAD = 8  # bytes before a message that hold its length
START = (
    "import pickle, sys; stream = sys.stdin.buffer\n"
    "sys.path[:] = pickle.loads(stream.read(int.from_bytes(stream.read(8), 'big')))\n"
    "from loopsim.requirements.workers import serve; serve()\n"
)


class WorkerDied(LoopsimError):
    """The process that held a task ended before it answered. code: its exit code, negative for a signal."""

    def __init__(self, code: int) -> None:
        self.code = code
        super().__init__(f"its worker process {ending(code)}")


def ending(code: int) -> str:
    """How a process ended, in words."""
    if code >= 0:
        return f"ended with exit code {code}"
    try:
        return f"was ended by {signal.Signals(-code).name}"
    except ValueError:
        return f"was ended by signal {-code}"


def send(stream: IO[bytes], message: Any) -> None:
    """Write one message: its length, then its pickle."""
    body = pickle.dumps(message)
    stream.write(len(body).to_bytes(HEAD, "big") + body)
    stream.flush()


def receive(stream: IO[bytes]) -> Any:
    """The next message; EOFError where the other side is gone."""
    head = stream.read(HEAD)
    if len(head) < HEAD:
        raise EOFError
    size = int.from_bytes(head, "big")
    body = stream.read(size)
    if len(body) < size:
        raise EOFError
    return pickle.loads(body)


def serve() -> None:
    """The life of a child: answer calls until the caller is gone."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # an interrupt is the caller's to handle
    answers = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)  # whatever prints must not come between the messages
    calls: queue.SimpleQueue[Any] = queue.SimpleQueue()

    def listen() -> None:
        try:
            while True:
                calls.put(receive(sys.stdin.buffer))
        except (EOFError, OSError):
            os._exit(0)  # the caller is gone: nobody waits for the task at hand

    threading.Thread(target=listen, daemon=True).start()
    while True:
        function, values = calls.get()
        try:
            answer = (True, function(*values))
        except Exception as error:
            answer = (False, error)
        try:
            send(answers, answer)
        except (pickle.PicklingError, TypeError, AttributeError):
            send(answers, (False, RuntimeError(f"an answer of {function.__name__} cannot be sent")))


class WorkerPool(Executor):
    """An executor over child processes. workers: how many, each started when a first task needs it."""

    def __init__(self, workers: int) -> None:
        self._waiting: queue.SimpleQueue[tuple[Future[Any], Callable[..., Any], tuple[Any, ...]] | None] = queue.SimpleQueue()
        self._children: list[subprocess.Popen[bytes]] = []
        self._lock = threading.Lock()
        self._closed = False  # takes no more tasks
        self._stopped = False  # bears no more children
        self._most = workers
        self._threads: list[threading.Thread] = []
        self._idle = threading.Semaphore(0)

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Run a top-level function in a child. WorkerDied from the future when its child ended before it answered."""
        if kwargs:
            raise TypeError("values are given by position")
        future: Future[Any] = Future()
        with self._lock:
            if self._closed:
                raise RuntimeError("the workers are stopped")
            self._waiting.put((future, fn, args))
            if not self._idle.acquire(blocking=False) and len(self._threads) < self._most:
                thread = threading.Thread(target=self._attend, daemon=True)
                self._threads.append(thread)
                thread.start()
        return future

    def _attend(self) -> None:
        """One worker's side of the caller: hand it task after task, replace it when it dies."""
        child: subprocess.Popen[bytes] | None = None
        while (task := self._waiting.get()) is not None:
            future, function, values = task
            if not future.set_running_or_notify_cancel():
                continue
            try:
                if child is None:
                    child = self._born()
                    _tell(child, sys.path)
                _tell(child, (function, values))
                good, answer = _heard(child)
            except (EOFError, OSError) as error:
                future.set_exception(error if child is None else WorkerDied(self._buried(child)))
                child = None
            except Exception as error:  # a call that cannot be sent fails by itself
                future.set_exception(error)
            else:
                if good:
                    future.set_result(answer)
                else:
                    future.set_exception(answer)
            self._idle.release()
        if child is not None:
            self._buried(child)

    def _born(self) -> subprocess.Popen[bytes]:
        with self._lock:
            if self._stopped:
                raise EOFError("the workers are stopped")
            child = subprocess.Popen(
                [sys.executable, "-c", START],
                stdin=subprocess.PIPE,
                stdout=subprocess.PIPE,
                stderr=subprocess.DEVNULL,
                env={**os.environ, **ONE_THREAD},
            )
            self._children.append(child)
        return child

    def _buried(self, child: subprocess.Popen[bytes]) -> int:
        """Close the pipes of a child and wait for its end; its exit code."""
        for stream in (child.stdin, child.stdout):
            try:
                if stream is not None:
                    stream.close()
            except OSError:
                continue
        code = child.wait()
        with self._lock:
            self._children.remove(child)
        return code

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """Let the tasks finish, or drop those that have not begun, then end the children."""
        with self._lock:
            self._closed = True
        if cancel_futures:
            self._drop()
        for _ in self._threads:
            self._waiting.put(None)
        if wait:
            for thread in self._threads:
                thread.join()

    def stop(self) -> None:
        """End at once: the tasks at hand fail with WorkerDied."""
        with self._lock:
            self._closed = self._stopped = True
            for child in self._children:
                child.kill()
        self.shutdown(cancel_futures=True)

    def _drop(self) -> None:
        while True:
            try:
                task = self._waiting.get_nowait()
            except queue.Empty:
                return
            if task is not None:
                task[0].cancel()


def _tell(child: subprocess.Popen[bytes], message: Any) -> None:
    assert child.stdin is not None
    send(child.stdin, message)


def _heard(child: subprocess.Popen[bytes]) -> Any:
    assert child.stdout is not None
    return receive(child.stdout)
