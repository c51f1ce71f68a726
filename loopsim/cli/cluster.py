"""An executor on a cluster of workers."""

from __future__ import annotations

import importlib
from collections.abc import Iterator
from concurrent.futures import Executor
from contextlib import contextmanager

from loopsim.cli.options import UsageError
from loopsim.errors import MissingExtra

PATIENCE = 10.0  # [s] to wait for a scheduler that does not answer


@contextmanager
def cluster(address: str) -> Iterator[tuple[Executor, int]]:
    """The executor of a dask.distributed scheduler and how many tasks its workers run at a time. UsageError
    where none answers."""
    try:
        distributed = importlib.import_module("distributed")
    except ImportError:
        raise MissingExtra("cluster", "--cluster") from None
    try:
        client = distributed.Client(address, timeout=PATIENCE)
    except (OSError, ValueError, TimeoutError) as error:
        raise UsageError(f"--cluster {address}: no scheduler answers there ({type(error).__name__})", verb="verify") from None
    with client:
        threads = sum(client.nthreads().values())
        if not threads:
            raise UsageError(f"--cluster {address}: the scheduler has no workers", verb="verify")
        yield client.get_executor(), threads
