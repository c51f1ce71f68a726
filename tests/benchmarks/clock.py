"""The clock of the benchmarks."""

from __future__ import annotations

import statistics
import time
from collections.abc import Callable


def median_time(work: Callable[[], object], repeats: int) -> float:
    """Median processor time of a call [s], after one that warms up."""
    work()
    took = []
    for _ in range(repeats):
        began = time.process_time()
        work()
        took.append(time.process_time() - began)
    return statistics.median(took)
