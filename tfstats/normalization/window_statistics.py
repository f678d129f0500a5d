"""What each trial's baseline window holds, and the references made from it."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.kernels import trial_products
from tfstats.normalization.baseline_choice import Baseline
from tfstats.normalization.reference_rows import ReferenceRows

__all__ = ["References", "TrialWindows", "masked_mean", "references_from_trials", "trial_runs", "usable_deviation"]

Floats = NDArray[np.float64]


VALUES_A_RUN = 2**17
"""Work on so many values at a time stays small beside the data and in the processor's cache."""


def trial_runs(shape: Sequence[int]) -> Iterator[slice]:
    """Runs of trials that together hold about VALUES_A_RUN values; shape (trials, ...)."""
    step = max(1, VALUES_A_RUN // max(int(np.prod(shape[1:])), 1))
    for first in range(0, shape[0], step):
        yield slice(first, min(first + step, shape[0]))


def masked_mean(values: NDArray[Any], axis: int) -> Floats:
    """Mean over the finite values along an axis; NaN, without a warning, where there is none."""
    mean = np.asarray(values.mean(axis=axis, dtype=np.float64))
    unknown = np.isnan(mean)
    if unknown.any():
        present = ~np.isnan(values)
        number = present.sum(axis=axis)
        total = np.where(present, values, 0).sum(axis=axis, dtype=np.float64)
        mean = np.where(number > 0, total / np.maximum(number, 1), np.nan)
    return mean


@dataclass(frozen=True)
class References:
    """Level, and for z scores the standard deviation, of each reference: (references, channels, frequencies)."""

    level: Floats
    spread: Floats | None = None


class TrialWindows:
    """Statistics of the finite baseline samples of each trial, (trials, channels, frequencies)."""

    def __init__(self, shape: tuple[int, int, int], *, geometric: bool, spread: bool) -> None:
        self.mean = np.full(shape, np.nan)
        """Of power, or of its natural logarithm for a geometric mean."""
        self.geometric = geometric
        self.count = np.zeros(shape, dtype=np.int64) if spread else None
        self.squares = np.zeros(shape) if spread else None
        """Sum of squares about the trial's own mean."""

    @classmethod
    def for_baseline(cls, baseline: Baseline, shape: tuple[int, int, int]) -> TrialWindows:
        """With what the baseline's mean and unit need."""
        return cls(shape, geometric=baseline.mean_kind == "geometric", spread=baseline.unit == "z_score")

    def own_references(self, place: tuple[slice, slice, slice]) -> References:
        """Each trial as its own reference, for a part (trials, channels, frequencies)."""
        level = np.exp(self.mean[place]) if self.geometric else self.mean[place]
        if self.squares is None or self.count is None:
            return References(level)
        count = self.count[place]
        with np.errstate(invalid="ignore", divide="ignore"):
            return References(level, usable_deviation(np.sqrt(self.squares[place] / (count - 1)), count))

    def add(self, samples: NDArray[Any], place: tuple[slice, slice, slice]) -> None:
        """Take in the baseline samples (trials, channels, frequencies, samples) of a block."""
        for some in trial_runs(samples.shape):
            part = samples[some]
            run = slice(place[0].start + some.start, place[0].start + some.stop)
            row = (run, *place[1:])
            if self.geometric:
                self.mean[row] = _mean_logarithms(part)
                continue
            mean = masked_mean(part, axis=-1)
            self.mean[row] = mean
            if self.squares is not None and self.count is not None:
                deviations = part.astype(np.float64) - mean[..., None]
                self.squares[row] = np.nansum(deviations**2, axis=-1)
                self.count[row] = np.count_nonzero(~np.isnan(part), axis=-1)


def _mean_logarithms(part: NDArray[Any]) -> Floats:
    """Mean natural logarithm over the finite samples of (trials, channels, frequencies, samples)."""
    means = np.empty((len(part), int(np.prod(part.shape[1:3]))))
    lines = np.array(part, order="C").reshape(len(part), -1)
    trial_products.line_means(lines, part.shape[3], 0, part.shape[3], means)
    means *= np.log(2.0)
    return means.reshape(part.shape[:3])


def references_from_trials(windows: TrialWindows, rows: ReferenceRows) -> References:
    """Each reference from the windows of its trials: a trial's finite samples first, then trials."""
    levels, spreads = [], []
    for members in rows.members:
        levels.append(masked_mean(windows.mean[members], axis=0))
        if windows.squares is not None and windows.count is not None:
            spreads.append(_merged_deviation(windows.count[members], windows.mean[members], windows.squares[members]))
    level = np.stack(levels)
    return References(np.exp(level) if windows.geometric else level, np.stack(spreads) if spreads else None)


def _merged_deviation(count: NDArray[np.int64], mean: Floats, squares: Floats) -> Floats:
    """SD (ddof 1) over trials x samples from each trial's count, mean and sum of squares (Chan et al. 1979)."""
    known = np.where(count > 0, mean, 0.0)
    total = count.sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        grand = (count * known).sum(axis=0) / total
        merged = squares.sum(axis=0) + (count * (known - grand) ** 2).sum(axis=0)
        return usable_deviation(np.sqrt(merged / (total - 1)), total)


def usable_deviation(deviation: Floats, count: NDArray[np.int64]) -> Floats:
    """NaN where fewer than two samples, or constant ones, leave nothing to divide by."""
    return np.where((count > 1) & (deviation > 0), deviation, np.nan)
