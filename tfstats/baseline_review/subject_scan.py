"""One pass over a subject's power: what the review needs to know of each trial's baseline, and of the plane."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tfstats.baseline_review.finite_means import finite_mean
from tfstats.normalization import Baseline
from tfstats.normalization.baseline_window import baseline_samples
from tfstats.normalization.trial_labels import trial_labels
from tfstats.power_files import TrialPower

__all__ = ["SubjectScan", "scanned_subject"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SubjectScan:
    """What one subject's trials say about the baseline; decibels are 10 log10 of power in the data's unit."""

    subject: str
    labels: tuple[str | None, ...]
    runs: tuple[str, ...] | None
    baseline_level: Floats
    """(trials, channels, frequencies) mean log power of the window, dB."""
    baseline_linear: Floats
    """(trials, channels, frequencies) mean power of the window over the mean of all trials."""
    trial_level: Floats
    """(trials,) mean log power of the whole trial over channels, frequencies and times, dB."""
    window_trend: Floats
    """(frequencies,) slope of mean log power within the window, dB per s."""
    missing: NDArray[np.bool_]
    """(channels, frequencies, times) points where every trial is missing."""
    condition_levels: dict[str, Floats]
    """By condition (channels, frequencies): mean log baseline power, dB."""


def scanned_subject(power: TrialPower, columns: Sequence[str], baseline: Baseline) -> SubjectScan:
    """Read a subject's power once, in blocks."""
    samples = baseline_samples(power, baseline)
    trials, channels, frequencies, times = power.values.shape
    in_window = np.zeros((trials, channels, frequencies))
    logs_in_window = np.zeros((trials, channels, frequencies))
    window_counts = np.zeros((trials, channels, frequencies), dtype=np.int64)
    logs_of_trial = np.zeros(trials)
    counts_of_trial = np.zeros(trials, dtype=np.int64)
    trend = np.zeros((frequencies, samples.stop - samples.start))
    trend_counts = np.zeros_like(trend, dtype=np.int64)
    there = np.zeros((channels, frequencies, times), dtype=bool)
    for place, block in power.blocks():
        rows, where, band, when = place
        with np.errstate(divide="ignore", invalid="ignore"):
            logs = 10.0 * np.log10(np.asarray(block, dtype=np.float64))
        finite = np.isfinite(logs)
        logs = np.where(finite, logs, 0.0)
        there[where, band, when] |= finite.any(axis=0)
        np.add.at(logs_of_trial, np.arange(trials)[rows], logs.sum(axis=(1, 2, 3)))
        np.add.at(counts_of_trial, np.arange(trials)[rows], finite.sum(axis=(1, 2, 3)))
        inside = _overlap(samples, when, times)
        if inside is None:
            continue
        part, filled = logs[..., inside], finite[..., inside]
        linear = np.where(filled, np.asarray(block[..., inside], dtype=np.float64), 0.0)
        in_window[rows, where, band] += linear.sum(axis=-1)
        logs_in_window[rows, where, band] += part.sum(axis=-1)
        window_counts[rows, where, band] += filled.sum(axis=-1)
        start = (when.start or 0) + inside.start - samples.start
        columns_of_trend = slice(start, start + inside.stop - inside.start)
        trend[band, columns_of_trend] += part.sum(axis=(0, 1))
        trend_counts[band, columns_of_trend] += filled.sum(axis=(0, 1))
    with np.errstate(divide="ignore", invalid="ignore"):
        level = np.where(window_counts > 0, logs_in_window / window_counts, np.nan)
        linear_mean = np.where(window_counts > 0, in_window / window_counts, np.nan)
        typical = finite_mean(linear_mean, axis=0)
        relative = linear_mean / typical
        trial_level = np.where(counts_of_trial > 0, logs_of_trial / counts_of_trial, np.nan)
        course = np.where(trend_counts > 0, trend / trend_counts, np.nan)
    labels = trial_labels(power.trials, columns, power.subject)
    names = sorted({label for label in labels if label is not None})
    return SubjectScan(
        subject=power.subject,
        labels=tuple(labels),
        runs=_runs(power),
        baseline_level=level,
        baseline_linear=relative,
        trial_level=trial_level,
        window_trend=_slopes(course, power.times[samples]),
        missing=~there,
        condition_levels={name: finite_mean(level[[label == name for label in labels]], axis=0) for name in names},
    )


def _overlap(samples: slice, when: slice, times: int) -> slice | None:
    """The part of a block's times that lies in the window, in positions of the block."""
    first, last, _ = when.indices(times)
    start, stop = max(first, samples.start), min(last, samples.stop)
    return slice(start - first, stop - first) if start < stop else None


def _slopes(course: Floats, times: Floats) -> Floats:
    """Least-squares slope over time of each row; NaN with fewer than two samples."""
    slopes = np.full(len(course), np.nan)
    for row, values in enumerate(course):
        finite = np.isfinite(values)
        if finite.sum() >= 2 and np.ptp(times[finite]) > 0:
            slopes[row] = np.polyfit(times[finite], values[finite], 1)[0]
    return slopes


def _runs(power: TrialPower) -> tuple[str, ...] | None:
    for name in ("run", "session", "block"):
        if name in power.trials.columns:
            return tuple(str(value) for value in power.trials[name])
    return None
