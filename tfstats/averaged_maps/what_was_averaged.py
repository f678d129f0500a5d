"""Averaging in words: the history for a methods paragraph, and what to mind."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps.subject_average import SubjectAverage
from tfstats.averaged_maps.trial_counting import TrialCounting
from tfstats.normalization import Baseline, decibel_bias_of_mean
from tfstats.normalization.relative_trials import HEAVY_TAIL

__all__ = ["averaging_cautions", "averaging_history", "bias_of_counts", "lost_baselines"]

MOST_NAMED = 6


def averaging_history(
    baseline: Baseline,
    columns: Sequence[str],
    counts: pd.DataFrame,
    counting: TrialCounting,
    incomplete: Mapping[str, Sequence[str]],
    missing_channels: str,
) -> tuple[str, ...]:
    """What was done, one sentence or two each; `counts` are the trials as recorded."""
    made = "column" if len(columns) == 1 else "columns"
    conditions = ", ".join(f"{name} ({_range_in_words(counts[name])})" for name in counts.columns)
    sentences = [
        baseline.describe(),
        f"Conditions, from the trial {made} {' and '.join(columns)}, with the trials a subject had in each: "
        f"{conditions}.",
        *counting.in_words(baseline),
    ]
    if incomplete:
        named = "; ".join(f"{name} (missing in {_named(who)})" for name, who in incomplete.items())
        what = "are gaps in them" if missing_channels == "leave_gaps" else "were left out in all"
        sentences.append(f"Channels that some subjects lack {what}: {named}.")
    return tuple(sentences)


def _range_in_words(counts: pd.Series[int]) -> str:
    low, high = int(counts.min()), int(counts.max())
    return f"{low}" if low == high else f"{low} to {high}"


def _named(names: Sequence[str]) -> str:
    rest = len(names) - MOST_NAMED
    return ", ".join(names[:MOST_NAMED]) + (f" and {rest} more" if rest > 0 else "")


def averaging_cautions(
    baseline: Baseline,
    counts: pd.DataFrame,
    counting: TrialCounting,
    averages: Mapping[str, SubjectAverage],
    frequencies: NDArray[np.float64],
    without_label: Mapping[str, int],
    differing: Sequence[str],
) -> tuple[str, ...]:
    """What to mind about these maps."""
    cautions = []
    if baseline.order == "trial_first" and baseline.unit != "none":
        cautions.append(HEAVY_TAIL)
    if baseline.unit == "decibel" and baseline.order == "average_first" and counting.choice == "as_recorded":
        cautions += bias_of_counts(counts)
    numbers = counts.to_numpy()
    cautions += counting.cautions(bool(np.any(numbers != numbers[:, :1])))
    cautions += _what_is_missing(averages, frequencies)
    unlabelled = [f"{subject} {count}" for subject, count in without_label.items() if count]
    if unlabelled:
        cautions.append(f"Trials without a condition label were left out: {_named(unlabelled)}.")
    if differing:
        cautions.append(f"Subjects differ in {', '.join(differing)}.")
    return tuple(cautions)


def bias_of_counts(counts: pd.DataFrame) -> list[str]:
    """The caution about decibels of conditions with unequal trial counts, if there are any."""
    numbers = counts.to_numpy()
    if numbers.shape[1] < 2 or np.all(numbers == numbers[:, :1]):
        return []
    few, many = int(numbers.min()), int(numbers.max())
    gaps = np.ptp(decibel_bias_of_mean(np.maximum(numbers, 1)), axis=1)
    return [
        f"Conditions differ in their numbers of trials ({few} to {many}). The decibel of a mean over few trials lies too "
        f"low, for Gaussian trials by {-decibel_bias_of_mean(max(few, 1)):.3f} dB at {few} and "
        f"{-decibel_bias_of_mean(max(many, 1)):.3f} dB at {many}, more where trials vary in overall power; within a subject this "
        f"alone makes conditions differ by up to {gaps.max():.3f} dB."
    ]


def _what_is_missing(averages: Mapping[str, SubjectAverage], frequencies: NDArray[np.float64]) -> list[str]:
    cautions = []
    gaps = {subject: average for subject, average in averages.items() if average.values_left_out}
    if gaps:
        parts = [f"{subject} {average.values_left_out} of {average.values_in_all}" for subject, average in gaps.items()]
        cautions.append(f"Missing values of single trials were left out of the mean at their point: {_named(parts)}.")
    for subject, average in averages.items():
        cautions += lost_baselines(subject, frequencies[average.frequencies_lost], average.pairs_lost)
    return cautions


def lost_baselines(subject: str, frequencies: NDArray[np.float64], pairs: int) -> list[str]:
    """Frequencies without a baseline at any channel, and pairs of channel and frequency at the others."""
    cautions = []
    if frequencies.size:
        lost = [f"{frequency:g}" for frequency in frequencies]
        cautions.append(
            f"Subject {subject} has no usable baseline sample at {_named(lost)} Hz: these frequencies are missing in the "
            "subject's maps."
        )
    if pairs:
        cautions.append(
            f"Subject {subject} has no usable baseline sample at {pairs} other pairs of channel and frequency, which are "
            "missing in the subject's maps."
        )
    return cautions
