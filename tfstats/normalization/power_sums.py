"""Sums of power over the trials of each cell, in float64, block by block."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["CellSums", "Prepare"]

POINTS_A_PIECE = 1024
"""Trials x this many float64 values stay in the processor's cache."""

Prepare = Callable[[NDArray[Any], slice, slice, slice, slice], NDArray[np.float64]]
"""(trials, channels, frequencies, times) of a block, and the four slices it stands at -> float64 of that shape."""


class CellSums:
    """Sum, and number of finite values, over the trials of each cell at each point.

    Missing values cost nothing where there are none: a sum is NaN exactly where one of its trials is, and only
    these points are summed again without them.

    Parameters
    ----------
    cell_of_trial : array (trials,)
        Number of the cell of each trial; -1 leaves the trial out.
    cells : int
    shape : (channels, frequencies, times)
    """

    def __init__(self, cell_of_trial: NDArray[np.int64], cells: int, shape: tuple[int, int, int]) -> None:
        self.total = np.zeros((cells, *shape))
        self.trials = np.bincount(cell_of_trial[cell_of_trial >= 0], minlength=cells)
        self._missing: NDArray[np.int64] | None = None
        self._membership = (cell_of_trial == np.arange(cells)[:, None]).astype(np.float64)

    @property
    def missing(self) -> NDArray[np.int64] | None:
        """(cells, channels, frequencies, times): values that were NaN; None where none was."""
        return self._missing

    @property
    def finite(self) -> NDArray[np.int64]:
        """Finite values, broadcastable to (cells, channels, frequencies, times)."""
        everything = self.trials[:, None, None, None]
        return everything if self._missing is None else everything - self._missing

    def add(
        self, block: NDArray[Any], place: tuple[slice, slice, slice, slice], prepare: Prepare | None = None
    ) -> None:
        """Add a block that stands at `place`; `prepare` turns its values into what is summed."""
        trials, channels, frequencies, times = place
        membership = self._membership[:, trials]
        if not membership.any():
            return
        for channel in range(block.shape[1]):
            part = block[:, channel : channel + 1]
            at = slice(channels.start + channel, channels.start + channel + 1)
            if prepare is not None:
                part = prepare(part, trials, at, frequencies, times)
            self._add_channel(part[:, 0], membership, (at.start, frequencies, times))

    def _add_channel(
        self, part: NDArray[Any], membership: NDArray[np.float64], place: tuple[int, slice, slice]
    ) -> None:
        sums = np.empty((len(membership), *part.shape[1:]))
        flat = sums.reshape(len(membership), -1)
        for points, piece in _pieces(part):
            np.matmul(membership, piece, out=flat[:, points])
        channel, frequencies, times = place
        unknown = np.asarray(np.isnan(sums).any(axis=0))
        if unknown.any():
            self._sum_finite_values(part, membership, unknown, sums, place)
        self.total[:, channel, frequencies, times] += sums

    def _sum_finite_values(
        self,
        part: NDArray[Any],
        membership: NDArray[np.float64],
        unknown: NDArray[np.bool_],
        sums: NDArray[np.float64],
        place: tuple[int, slice, slice],
    ) -> None:
        values = part[:, unknown].astype(np.float64)
        absent = np.isnan(values)
        values[absent] = 0.0
        sums[:, unknown] = membership @ values
        if self._missing is None:
            self._missing = np.zeros(self.total.shape, dtype=np.int64)
        channel, frequencies, times = place
        counts = np.zeros(sums.shape, dtype=np.int64)
        counts[:, unknown] = np.rint(membership @ absent.astype(np.float64)).astype(np.int64)
        self._missing[:, channel, frequencies, times] += counts


def _pieces(part: NDArray[Any]) -> Iterator[tuple[slice, NDArray[np.float64]]]:
    """(trials, frequencies, times) as float64 (trials, points) pieces."""
    trials = len(part)
    if part.flags.c_contiguous or part[0].flags.c_contiguous:
        flat = part.reshape(trials, -1)
        buffer = np.empty((trials, min(POINTS_A_PIECE, flat.shape[1])))
        for first in range(0, flat.shape[1], POINTS_A_PIECE):
            points = slice(first, min(first + POINTS_A_PIECE, flat.shape[1]))
            if flat.dtype == np.float64:
                yield points, flat[:, points]
                continue
            piece = buffer[:, : points.stop - points.start]
            piece[...] = flat[:, points]
            yield points, piece
    else:
        # Keeping the memory order lets an array whose trials lie innermost be read along them.
        exact = part.astype(np.float64, order="K")
        yield slice(None), exact.reshape(trials, -1)
