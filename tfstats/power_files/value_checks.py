"""Is this linear power?  Counts what is not while the blocks go by, and refuses it in words."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.errors import Problems
from tfstats.kernels.value_counts import counts_of_values
from tfstats.power_files.stored_values import Place

__all__ = ["ValueCheck"]

_ENOUGH = 30
"""Values a channel and frequency must offer before the shape of their distribution is judged."""

_MOST = 400
"""Values a channel and frequency are judged by, evenly taken: more would not change the verdict."""


class ValueCheck:
    """Looks at every value once.

    Single-trial power of a Gaussian signal is chi-square with 2 df: always positive, right-skewed, its spread
    proportional to its mean.  Its decibels have a standard deviation of 5.57 dB whatever the level and are
    left-skewed (-1.14); positive values of that shape in most channels and frequencies are decibels.
    """

    def __init__(self) -> None:
        self.values = 0
        self.missing = 0
        self.infinite = 0
        self.negative = 0
        self.zero = 0
        self.smallest = np.inf
        self.first: tuple[int, int] | None = None
        self.decibel_shaped = 0
        self.judged = 0
        self._shape_known = False

    def look(self, block: NDArray[Any], place: Place) -> bool:
        """Count what is wrong in a block; True where nothing was."""
        self.values += block.size
        ordinary, missing = counts_of_values(np.ravel(block, order="K"))
        if missing == block.size:
            self.missing += block.size
            return True
        if not self._shape_known:
            self._judge_shape(block)
        if ordinary + missing == block.size:
            return True
        self.infinite += int(np.count_nonzero(np.isinf(block)))
        wrong = (block <= 0) & (block > -np.inf)
        count = int(np.count_nonzero(wrong))
        if count:
            negative = int(np.count_nonzero(block < 0)) - int(np.count_nonzero(block == -np.inf))
            self.negative += negative
            self.zero += count - negative
            self.smallest = min(self.smallest, float(block[wrong].min()))
            trial, channel = (int(number) for number in np.argwhere(wrong.any(axis=(2, 3)))[0])
            here = (place[0].start + trial, place[1].start + channel)
            self.first = here if self.first is None else min(self.first, here)
        return False

    def _judge_shape(self, block: NDArray[Any]) -> None:
        """The first block that has enough values decides, so that this costs nothing on large data."""
        trials, channels, frequencies, times = block.shape
        if trials * times < _ENOUGH:
            return
        # Trials are independent, neighbouring times are not: all trials first, then as many times as are needed.
        some_trials = np.linspace(0, trials - 1, min(trials, _MOST)).astype(int)
        some_times = np.linspace(0, times - 1, min(times, max(1, _MOST // some_trials.size))).astype(int)
        some_channels = np.linspace(0, channels - 1, min(channels, 16)).astype(int)
        some_frequencies = np.linspace(0, frequencies - 1, min(frequencies, 16)).astype(int)
        sample = block[np.ix_(some_trials, some_channels, some_frequencies, some_times)].astype(np.float64)
        columns = sample.transpose(1, 2, 0, 3).reshape(-1, some_trials.size * some_times.size)
        columns = columns[np.isfinite(columns).all(axis=1)]
        if columns.shape[1] < _ENOUGH or len(columns) == 0:
            return
        self._shape_known = True
        centred = columns - columns.mean(axis=1, keepdims=True)
        spread = np.sqrt(np.mean(centred**2, axis=1))
        with np.errstate(invalid="ignore", divide="ignore"):
            skewness = np.mean(centred**3, axis=1) / spread**3
        self.judged = len(columns)
        self.decibel_shaped = int(np.count_nonzero((spread > 4.0) & (spread < 7.5) & (skewness < -0.5)))

    def problems(self, where: str, channels: Sequence[str]) -> list[str]:
        """A sentence for each kind of mistake."""
        found = Problems()
        if self.values and self.missing == self.values:
            found.add(where, "power that is known somewhere", "NaN everywhere", "check how the power was made")
        if self.infinite:
            found.add(where, "finite power or NaN", f"{self.infinite} infinite values", "set what is not known to NaN")
        if self.negative:
            found.add(
                where,
                "linear power above 0",
                f"{self.negative} negative values (smallest {self.smallest:g}, first in {self._first(channels)}), "
                "as decibels have them",
                'set contents = "decibel" if these are decibels, or give power that has not been made relative',
            )
        elif self.decibel_shaped > 0.6 * self.judged:
            found.add(
                where,
                "linear power",
                f"values spread like decibels (about 5.6 dB and skewed to the left in {self.decibel_shaped} of "
                f"{self.judged} channels and frequencies)",
                'set contents = "decibel"',
            )
        if self.zero:
            found.add(
                where,
                "linear power above 0",
                f"{self.zero} values of exactly 0 (first in {self._first(channels)})",
                "set what is not known to NaN",
            )
        return found.found

    def _first(self, channels: Sequence[str]) -> str:
        assert self.first is not None
        trial, channel = self.first
        return f"trial {trial}, channel {channels[channel]}"
