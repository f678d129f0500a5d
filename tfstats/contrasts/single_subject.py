"""Designs within one subject or one recording site, where the units are trials."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.contrasts.contrast import (
    CIRCULAR_SHIFT,
    ONE_SAMPLE_T,
    POOLED_T,
    SHUFFLE,
    SIGN_FLIPS,
    WELCH_SCORE,
    Contrast,
    Relabelling,
    Statistic,
)
from tfstats.foundations.axes import closed_window, label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.units import symbol_of
from tfstats.normalization import RelativeTrials
from tfstats.power_files import TrialPower

__all__ = ["trialwise", "trialwise_change"]

LABEL_ORIGINS = ("assigned", "behaviour")


def trialwise(
    trials: RelativeTrials,
    column: str,
    first: str,
    second: str,
    *,
    labels: str = "behaviour",
    equal_variance: bool = False,
) -> Contrast:
    """Does power differ between two kinds of trials of one subject?

    Parameters
    ----------
    trials : RelativeTrials
        From `normalized_trials`; rows in the order of recording.
    column : str
        Trial column with the labels.
    first, second : str
        The two labels compared; trials with another label are left out.
    labels : "behaviour" or "assigned"
        Who made the labels.  "assigned": the experimenter's random order, so labels are shuffled over trials.
        "behaviour" (recalled, missed): labels and power both drift over a session, and shuffling rejects too
        often; the label sequence is shifted in a circle instead.
    equal_variance : bool
        False: Welch's t turned into a normal score through its own degrees of freedom.  True: pooled t.

    Returns
    -------
    Contrast
        Units are trials.  The result speaks of this subject only.

    Raises
    ------
    InputError
        Labels or column that are not there, fewer than two trials of either kind, or trials normalized by a
        baseline of each condition's own: then the labels are part of the numbers and cannot be exchanged.

    Notes
    -----
    Welch 1947, Biometrika 34:28; permutation of studentized statistics: Janssen 1997, Statistics & Probability
    Letters 36:9 (validity is asymptotic when the two kinds differ in variance).

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_subject
    >>> design = lamp_sequences()
    >>> power = simulate_subject(design, design.subjects[0]).select(frequencies=(8, 13))
    >>> trials = tfs.normalized_trials(power, tfs.Baseline((-0.5, -0.2), order="trial_first"))
    >>> tfs.trialwise(trials, "memory", "recalled", "missed").unit_kind
    'trial'
    """
    first, second = label_text(first), label_text(second)
    problems = Problems()
    if not isinstance(trials, RelativeTrials):
        raise refusal("trialwise", "relative trials", type(trials).__name__, "make them with normalized_trials")
    if labels not in LABEL_ORIGINS:
        problems.add(
            "trialwise, labels", f"one of {listed(LABEL_ORIGINS)}", repr(labels), "say who decided the label of a trial"
        )
    if first == second:
        problems.add("trialwise", "two different labels", f'"{first}" twice', "name the label it is compared with")
    if trials.baseline is not None and trials.baseline.reference == "own":
        problems.add(
            "trialwise",
            'trials normalized without regard to their label (reference "pooled" or "named")',
            'reference "own", in which the labels enter the normalization and are no longer exchangeable',
            'use Baseline(reference="pooled") or order="trial_first"',
        )
    where = f"subject {trials.subject}, trialwise"
    if column not in trials.trials.columns:
        problems.add(
            where,
            f"a trial column among {listed(trials.trials.columns)}",
            f'"{column}"',
            f"{closest(str(column), [str(c) for c in trials.trials.columns])}use the name in the trial table",
        )
        problems.raise_if_any()
    texts = [label_text(value) for value in trials.trials[column]]
    for label in (first, second):
        if texts.count(label) < 2:
            problems.add(
                where,
                f'at least two trials with {column} "{label}"',
                f"{texts.count(label)} (labels there: {listed(set(texts))})",
                "use the spelling of the trial table",
            )
    problems.raise_if_any()

    rows = [row for row, text in enumerate(texts) if text in (first, second)]
    membership = np.array([texts[row] == first for row in rows], dtype=np.uint8)
    values = np.ascontiguousarray(trials.values[rows])
    counts = (int(membership.sum()), int(membership.size - membership.sum()))
    spreads = [values[membership == code].std(axis=0, ddof=1) for code in (1, 0)]
    history = [
        *trials.history,
        f"Trials of subject {trials.subject} with {column} {first} (n = {counts[0]}) were compared with {second} "
        f"(n = {counts[1]}) in {symbol_of(trials.unit)}.",
    ]
    cautions = [*trials.cautions, "The units are trials of one subject: the result speaks of this subject only."]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = float(np.nanmedian(spreads[0] / spreads[1])) if values.size else np.nan
    if np.isfinite(ratio):
        history.append(f"The ratio of the two standard deviations was {ratio:.2f} (median over points).")
        if max(ratio, 1 / ratio) > 1.5 and counts[0] != counts[1]:
            cautions.append(
                f"The two kinds of trials differ in spread (ratio of SDs {ratio:.2f}) and in number: "
                "p-values hold only approximately."
            )
    if labels == "behaviour":
        history.append(_drift_in_words(membership, values))
    statistic: Statistic = POOLED_T if equal_variance else WELCH_SCORE
    words = f"{first} and {second}"
    return Contrast(
        design="trialwise",
        values=values,
        unit_names=tuple(str(row) for row in rows),
        unit_kind="trial",
        channels=tuple(trials.channels),
        frequencies=trials.frequencies,
        times=trials.times,
        unit=trials.unit,
        statistic=statistic,
        relabelling=Relabelling(SHUFFLE if labels == "assigned" else CIRCULAR_SHIFT),
        null_hypothesis=f"The trials {words} come from the same distribution"
        + (", whatever label they carry." if labels == "assigned" else "; the label sequence is unrelated to power."),
        alternatives={
            "two-sided": f"Mean power differs between {words}.",
            "greater": f"Mean power is larger in {first} than in {second}.",
            "less": f"Mean power is smaller in {first} than in {second}.",
        },
        difference=f"{first} - {second}",
        labels=membership,
        label_names=(first, second),
        condition_means={
            label: np.asarray(values[membership == code].mean(axis=0), dtype=np.float64)
            for label, code in ((first, 1), (second, 0))
        },
        history=tuple(history),
        cautions=tuple(cautions),
        trial_counts=pd.DataFrame({first: [counts[0]], second: [counts[1]]}, index=[trials.subject]),
    )


def _drift_in_words(membership: NDArray[np.uint8], values: NDArray[np.floating]) -> str:
    label_drift = lag_one(membership.astype(float)[:, None])[0]
    power_drift = lag_one(np.asarray(values, dtype=np.float64).reshape(len(values), -1))
    return (
        f"Lag-1 autocorrelation over trials: labels {label_drift:.2f}, power "
        f"{np.nanmedian(power_drift):.2f} (median over points)."
    )


def lag_one(series: NDArray[np.float64]) -> NDArray[np.float64]:
    """Lag-1 autocorrelation of each column of (trials, points)."""
    centred = series - series.mean(axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.sum(centred[1:] * centred[:-1], axis=0) / np.sum(centred**2, axis=0))


def trialwise_change(power: TrialPower, baseline_window: Sequence[float]) -> Contrast:
    """Does one subject's power change from baseline, trial by trial?

    For each trial the mean log power in a running window as long as the baseline window, less the mean log power
    of the baseline, in decibels.  Under no change the two windows are exchangeable, so the sign of each trial's
    difference flips.

    Parameters
    ----------
    power : TrialPower
        Per-trial linear power of one subject.
    baseline_window : (start, stop)
        In s, closed.

    Returns
    -------
    Contrast
        The value stands at the centre of its running window (with an even number of samples, at the later of the
        two in the middle); NaN where the window is incomplete or overlaps the baseline.

    Raises
    ------
    InputError
        Fewer than two trials, a window outside the times, or no time left outside the baseline.

    Notes
    -----
    Means of logarithms on both sides, of the same number of samples, have the same expectation: a linear mean
    would not (see `against_zero`).  Neighbouring values share samples: a value is the average over a window.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_subject
    >>> design = lamp_sequences()
    >>> power = simulate_subject(design, design.subjects[0]).select(frequencies=(8, 13))
    >>> tfs.trialwise_change(power, (-0.5, -0.2)).estimate_unit
    'dB'
    """
    if not isinstance(power, TrialPower):
        raise refusal("trialwise_change", "TrialPower", type(power).__name__, "read it with read_power")
    where = f"subject {power.subject}, trialwise_change"
    window = closed_window(power.times, baseline_window, f"{where}, baseline_window", "s")
    length = window.stop - window.start
    count = power.values.shape[0]
    if count < 2:
        raise refusal(where, "at least two trials", str(count), "one trial has no spread to test against")
    logs = 10.0 * np.log10(np.asarray(power.values[:], dtype=np.float64))
    baseline = logs[..., window].mean(axis=-1, keepdims=True)
    values = _running_mean(logs, length) - baseline
    centre = np.arange(power.times.size)
    first = centre - length // 2
    overlaps = (first < window.stop) & (first + length > window.start)
    values[..., overlaps] = np.nan
    if not np.isfinite(values).any():
        raise refusal(
            where,
            "times outside the baseline that hold a window of its length",
            f"{power.times[0]:g} to {power.times[-1]:g} s with a window of {length} samples",
            "shorten the baseline window or read more of the trial",
        )
    start, stop = power.times[window.start], power.times[window.stop - 1]
    words = "mean log power and that of the baseline"
    return Contrast(
        design="trialwise_change",
        values=values,
        unit_names=tuple(str(row) for row in range(count)),
        unit_kind="trial",
        channels=tuple(power.channels),
        frequencies=power.frequencies,
        times=power.times,
        unit="decibel",
        statistic=ONE_SAMPLE_T,
        relabelling=Relabelling(SIGN_FLIPS),
        null_hypothesis=f"In each trial {words} are exchangeable.",
        alternatives={
            "two-sided": "Power differs from the baseline.",
            "greater": "Power is above the baseline.",
            "less": "Power is below the baseline.",
        },
        difference="activity - baseline",
        condition_means={"activity - baseline": values.mean(axis=0)},
        history=(
            *power.notes,
            f"For each of {count} trials of subject {power.subject}, mean log power in a running window of {length} "
            f"samples was compared with the baseline window {start:g} to {stop:g} s, in dB.",
        ),
        cautions=("The units are trials of one subject: the result speaks of this subject only.",),
        trial_counts=pd.DataFrame({"activity - baseline": [count]}, index=[power.subject]),
    )


def _running_mean(values: NDArray[np.float64], length: int) -> NDArray[np.float64]:
    """Mean over `length` samples of the last axis around each; NaN where incomplete or where a sample is NaN."""
    finite = np.isfinite(values)
    sums = np.cumsum(np.where(finite, values, 0.0), axis=-1)
    gaps = np.cumsum(~finite, axis=-1)
    size = values.shape[-1]
    means = np.full(values.shape, np.nan)
    first = np.arange(size) - length // 2
    whole = np.flatnonzero((first >= 0) & (first + length <= size))
    last = first[whole] + length - 1
    before = first[whole] - 1
    started = before >= 0
    window_sums = sums[..., last] - np.where(started, sums[..., np.maximum(before, 0)], 0.0)
    window_gaps = gaps[..., last] - np.where(started, gaps[..., np.maximum(before, 0)], 0)
    means[..., whole] = np.where(window_gaps == 0, window_sums / length, np.nan)
    return means
