"""Relabellings in panels, and the threads that work on them.

An engine takes its relabellings as an array (rows, units) or as a callable rows(first, last) that makes the rows of
a panel, so
that memory is bounded by the data and not by the number of relabellings.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, ThreadPoolExecutor, wait
from itertools import islice
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

__all__ = ["Progress", "RowSource", "row_count", "row_panels", "run_in_threads"]

RowSource = NDArray[np.uint8] | Callable[[int, int], NDArray[np.uint8]]
Progress = Callable[[int], None]

_Piece = TypeVar("_Piece")


def row_count(rows: RowSource, stated: int | None) -> int:
    """How many relabellings there are: the array's own length, or what the caller of a callable says."""
    if callable(rows):
        if stated is None:
            raise TypeError("relabellings made by a callable need number_of_rows")
        return stated
    return len(rows)


def row_panels(rows: RowSource, number: int, panel: int) -> Iterator[tuple[int, NDArray[np.uint8]]]:
    """The relabellings panel by panel: number of the first row, C-contiguous uint8 rows."""
    for first in range(0, number, panel):
        last = min(number, first + panel)
        part = rows(first, last) if callable(rows) else rows[first:last]
        yield first, np.ascontiguousarray(part, np.uint8)


def run_in_threads(
    task: Callable[[_Piece], int], pieces: Iterable[_Piece], threads: int, progress: Progress | None
) -> None:
    """Run the task on each piece in ordinary threads; each piece writes its own slots, so their order does not matter.

    The task returns how many rows it finished; `progress` receives the running total, always from the calling thread.
    Pieces are taken one by one as threads become free, so a long iterator of pieces is never held in memory.
    """
    done = 0
    if threads <= 1:
        for piece in pieces:
            done += task(piece)
            if progress is not None:
                progress(done)
        return
    waiting = iter(pieces)
    with ThreadPoolExecutor(threads) as pool:
        running = {pool.submit(task, piece) for piece in islice(waiting, threads)}
        while running:
            finished, running = wait(running, return_when=FIRST_COMPLETED)
            for future in finished:
                done += future.result()
                if progress is not None:
                    progress(done)
            running |= {pool.submit(task, piece) for piece in islice(waiting, len(finished))}
