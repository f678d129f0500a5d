"""How many threads a computation may use."""

from __future__ import annotations

import os

from tfstats.foundations.checks import count

__all__ = ["usable_threads"]

LOWERING_VARIABLES = ("OMP_NUM_THREADS", "NUMBA_NUM_THREADS")


def usable_threads(threads: int | None = None) -> int:
    """The number asked for; None means every CPU this process may use, lowered by the usual environment variables."""
    if threads is not None:
        return count(threads, "threads", remedy="give the number of threads, or leave it out for all CPUs")
    if hasattr(os, "sched_getaffinity"):
        available = len(os.sched_getaffinity(0))
    else:
        available = os.cpu_count() or 1
    for variable in LOWERING_VARIABLES:
        text = os.environ.get(variable, "")
        if text.isdigit() and int(text) > 0:
            available = min(available, int(text))
    return max(available, 1)
