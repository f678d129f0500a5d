"""Sums of power, and of its logarithm, over the trials of each cell, block by block.

Both have the same bits however the power is cut into blocks: trials are taken in their order at every point.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.thread_count import usable_threads
from tfstats.kernels import trial_products, trial_sums

__all__ = ["CellSums", "LeftOutLogarithms", "LogarithmSums"]

POINTS_A_PIECE = 4096
"""This many float64 values, and as many of four trials, stay in the processor's cache."""

FEWEST_VALUES_TO_SHARE = 2**20
PORTIONS_A_THREAD = 4

Floats = NDArray[np.float64]
Place = tuple[slice, slice, slice, slice]


class _Accumulator:
    """What the sums share: the trials of each cell, contiguous parts of a block, and where they are added.

    Parameters
    ----------
    cell_of_trial : array (trials,)
        Number of the cell of each trial; -1 leaves the trial out.
    cells : int
    shape : (channels, frequencies, times)
    """

    def __init__(self, cell_of_trial: NDArray[np.int64], cells: int, shape: tuple[int, int, int]) -> None:
        self._cell_of_trial = cell_of_trial
        self.shape = (cells, *shape)
        self.trials = np.bincount(cell_of_trial[cell_of_trial >= 0], minlength=cells)
        self._missing: NDArray[np.int64] | None = None

    @property
    def missing(self) -> NDArray[np.int64] | None:
        """(cells, channels, frequencies, times): values that were NaN; None where none was."""
        return self._missing

    @property
    def finite(self) -> NDArray[np.int64]:
        """Finite values, broadcastable to (cells, channels, frequencies, times)."""
        everything = self.trials[:, None, None, None]
        return everything if self._missing is None else everything - self._missing

    def _rows(self, trials: slice) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Trials of a block in the order of their cells, and where each cell starts."""
        codes = self._cell_of_trial[trials]
        order = np.argsort(codes, kind="stable")
        order = order[np.count_nonzero(codes < 0) :]
        starts = np.searchsorted(codes[order], np.arange(self.shape[0] + 1))
        return order.astype(np.int64), starts.astype(np.int64)

    def _counts_of_missing(self) -> NDArray[np.int64]:
        if self._missing is None:
            self._missing = np.zeros(self.shape, dtype=np.int64)
        return self._missing


def _contiguous_parts(block: NDArray[Any], place: Place) -> Iterator[tuple[NDArray[Any], Place, slice]]:
    """(trials, points) C-contiguous parts of a block, where each stands, and its channels within the block."""
    if block.flags.c_contiguous and block.flags.writeable:
        yield block.reshape(len(block), -1), place, slice(None)
        return
    for channel in range(block.shape[1]):
        at = slice(place[1].start + channel, place[1].start + channel + 1)
        part = np.array(block[:, channel], order="C")
        yield part.reshape(len(part), -1), (place[0], at, *place[2:]), slice(channel, channel + 1)


class _Part:
    """The part of arrays (cells, channels, frequencies, times) that a block adds to, as (cells, points)."""

    def __init__(self, place: Place) -> None:
        self._place = (slice(None), *place[1:])
        self._copies: list[tuple[NDArray[Any], NDArray[Any]]] = []

    def of(self, whole: NDArray[Any]) -> NDArray[Any]:
        part = whole[self._place]
        if part.shape == whole.shape:
            return whole.reshape(len(whole), -1)
        copy = np.ascontiguousarray(part)
        self._copies.append((part, copy))
        return copy.reshape(len(whole), -1)

    def write_back(self) -> None:
        for part, copy in self._copies:
            part[...] = copy


def _lines(values: NDArray[Any], channels: slice) -> Floats:
    """(trials, channels, frequencies) -> (trials, lines)."""
    part = values[:, channels]
    return np.ascontiguousarray(part, dtype=np.float64).reshape(len(part), -1)


def _line_pieces(width: int, lines: int) -> tuple[int, int]:
    """Lines a piece, and the number of pieces."""
    piece = min(max(1, POINTS_A_PIECE // width), lines)
    return piece, -(-lines // piece)


def _in_threads(work: Callable[[int, int], object], pieces: int, values: int) -> None:
    """Do all pieces, in threads where that pays; each piece writes its own points, so that nothing depends on who does it."""
    threads = min(usable_threads(), pieces) if values >= FEWEST_VALUES_TO_SHARE else 1
    if threads == 1:
        work(0, pieces)
        return
    # More portions than threads, so that none waits long for a processor that is busy elsewhere.
    cuts = np.linspace(0, pieces, min(pieces, PORTIONS_A_THREAD * threads) + 1).astype(int).tolist()
    with ThreadPoolExecutor(threads) as pool:
        for _ in pool.map(work, cuts[:-1], cuts[1:]):
            pass


class CellSums(_Accumulator):
    """Sum, and number of finite values, over the trials of each cell at each point.

    Missing values cost nothing where there are none: a sum is NaN exactly where one of its trials is, and only the
    pieces with such points are summed again without them.
    """

    def __init__(self, cell_of_trial: NDArray[np.int64], cells: int, shape: tuple[int, int, int]) -> None:
        super().__init__(cell_of_trial, cells, shape)
        self.total = np.zeros(self.shape)

    def add(
        self, block: NDArray[Any], place: Place, shift: NDArray[Any] | None = None, scale: NDArray[Any] | None = None
    ) -> None:
        """Add a block that stands at `place`, or (block - shift) * scale with both (trials, channels, frequencies)."""
        order, starts = self._rows(place[0])
        if not order.size:
            return
        width = block.shape[3]
        for values, at, channels in _contiguous_parts(block, place):
            part = _Part(at)
            total = part.of(self.total)
            nothing = np.empty((len(values), 0))
            if shift is None or scale is None:
                less = times = nothing
                points = POINTS_A_PIECE
                flagged = np.zeros((len(total), -(-values.shape[1] // points)), dtype=np.bool_)
                work = partial(trial_sums.plain_sums, values, order, starts, points, total, flagged)
            else:
                less, times = _lines(shift, channels), _lines(scale, channels)
                piece, pieces = _line_pieces(width, less.shape[1])
                points = piece * width
                flagged = np.zeros((len(total), pieces), dtype=np.bool_)
                work = partial(trial_sums.scaled_sums, values, less, times, width, order, starts, piece, total, flagged)
            _in_threads(work, flagged.shape[1], values.size)
            if flagged.any():
                missing = part.of(self._counts_of_missing())
                trial_sums.present_sums(values, less, times, width, order, starts, points, flagged, total, missing)
            part.write_back()


class LogarithmSums(_Accumulator):
    """Sum of log10 over the trials of each cell, from a product of mantissas and a sum of exponents.

    One logarithm a point and cell instead of one a value.
    """

    def __init__(self, cell_of_trial: NDArray[np.int64], cells: int, shape: tuple[int, int, int]) -> None:
        super().__init__(cell_of_trial, cells, shape)
        self._mantissas = np.ones(self.shape)
        self._exponents = np.zeros(self.shape, dtype=np.int64)

    @property
    def total(self) -> Floats:
        """(cells, channels, frequencies, times)."""
        with np.errstate(divide="ignore"):
            return np.asarray((np.log2(self._mantissas) + self._exponents) * np.log10(2.0))

    def add(self, block: NDArray[Any], place: Place, scale: NDArray[Any] | None = None) -> None:
        """Add log10 of block * scale, with scale (trials, channels, frequencies); a trial whose scale is NaN is missing."""
        self._multiply(block, place, scale, None)

    def _multiply(self, block: NDArray[Any], place: Place, scale: NDArray[Any] | None, totals: Floats | None) -> None:
        order, starts = self._rows(place[0])
        if not order.size:
            return
        width = block.shape[3]
        if scale is None:
            scale = np.ones(block.shape[:3])
        for values, at, channels in _contiguous_parts(block, place):
            part = _Part(at)
            mantissas, exponents = part.of(self._mantissas), part.of(self._exponents)
            times = _lines(scale, channels)
            piece, pieces = _line_pieces(width, times.shape[1])
            flagged = np.zeros((len(mantissas), pieces), dtype=np.bool_)
            if totals is None:
                whole = np.empty((len(mantissas), 0))
                work = partial(
                    trial_products.products, values, times, width, order, starts, piece, mantissas, exponents, flagged
                )
            else:
                whole = _Part(at).of(totals)
                work = partial(
                    trial_products.products_left_out, values, times, width, whole, order, starts, piece, mantissas,
                    exponents, flagged,
                )  # fmt: skip
            _in_threads(work, pieces, values.size)
            if flagged.any():
                missing = part.of(self._counts_of_missing())
                trial_products.present_products(
                    values, times, width, whole, totals is not None, order, starts, piece * width, flagged, mantissas,
                    exponents, missing,
                )  # fmt: skip
            part.write_back()


class LeftOutLogarithms(LogarithmSums):
    """Sum over the trials of each cell of log10 of what is left of the cell's total without the trial.

    Parameters
    ----------
    totals : array (cells, channels, frequencies, times)
        Sum over the finite values of each cell.
    """

    def __init__(self, cell_of_trial: NDArray[np.int64], totals: Floats) -> None:
        super().__init__(cell_of_trial, len(totals), totals.shape[1:])
        self._totals = np.ascontiguousarray(totals)

    def add(self, block: NDArray[Any], place: Place, scale: NDArray[Any] | None = None) -> None:
        """Add what the trials of a block leave; the values are block * scale, as they were in the totals."""
        self._multiply(block, place, scale, self._totals)
