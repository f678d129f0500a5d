"""Designs within one subject or one recording site, where the units are trials."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.contrasts.compared_values import block_codes, check_model, numeric_column, table_column
from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    CIRCULAR_SHIFT,
    ONE_SAMPLE_T,
    POOLED_T,
    REGRESSION_T,
    SHUFFLE,
    SIGN_FLIPS,
    WELCH_SCORE,
    Contrast,
    Relabelling,
    Statistic,
)
from tfstats.contrasts.within_subject import mean_over_units
from tfstats.foundations.axes import closed_window, label_text
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.units import symbol_of
from tfstats.normalization import RelativeTrials
from tfstats.power_files import TrialPower

__all__ = ["trialwise", "trialwise_change", "trialwise_slope"]

LABEL_ORIGINS = ("assigned", "behaviour")
ONE_SUBJECT = "The units are trials of one subject: the result speaks of this subject only."


def trialwise(
    trials: RelativeTrials,
    column: str,
    first: str,
    second: str,
    *,
    labels: str = "behaviour",
    blocks: str | None = None,
    nuisance: Sequence[str] = (),
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
    blocks : trial column, optional
        Runs or sessions: labels are shuffled or shifted within each, and its means are taken out.
    nuisance : trial columns of numbers
        Taken out (Freedman & Lane 1983), the trial number for instance.
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
    design = "trialwise"
    first, second = label_text(first), label_text(second)
    problems = Problems()
    _check_trials(trials, design, labels, problems)
    if first == second:
        problems.add(design, "two different labels", f'"{first}" twice', "name the label it is compared with")
    where = f"subject {trials.subject}, {design}"
    texts: list[str] = []
    with problems.gathering():
        texts = table_column(trials.trials, column, where, _row_names(trials), of="trial", of_all=False)
    for label in (first, second) if texts else ():
        if texts.count(label) < 2:
            problems.add(
                where,
                f'at least two trials with {column} "{label}"',
                f"{texts.count(label)} (labels there: {listed(text for text in set(texts) if text)})",
                "use the spelling of the trial table",
            )
    rows = [row for row, text in enumerate(texts) if text in (first, second)]
    model = _trial_model(trials, rows, labels, blocks, nuisance, where, problems)
    problems.raise_if_any()

    membership = np.array([texts[row] == first for row in rows], dtype=np.uint8)
    check_model(membership.astype(np.float64), model.nuisance, model.relabelling, where, column, of="trial")
    values = np.ascontiguousarray(trials.values[rows])
    counts = (int(membership.sum()), int(membership.size - membership.sum()))
    spreads = [np.asarray(values[membership == code], dtype=np.float64).std(axis=0, ddof=1) for code in (1, 0)]
    history = [
        *trials.history,
        f"Trials of subject {trials.subject} with {column} {first} (n = {counts[0]}) were compared with {second} "
        f"(n = {counts[1]}) in {symbol_of(trials.unit)}{model.words}.",
    ]
    cautions = [*trials.cautions, ONE_SUBJECT]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = spreads[0] / spreads[1]
    ratio = float(np.nanmedian(ratios)) if np.isfinite(ratios).any() else np.nan
    if np.isfinite(ratio):
        history.append(f"The ratio of the two standard deviations was {ratio:.2f} (median over points).")
        if max(ratio, 1 / max(ratio, 1e-300)) > 1.5 and counts[0] != counts[1]:
            cautions.append(
                f"The two kinds of trials differ in spread (ratio of SDs {ratio:.2f}) and in number: "
                "p-values hold only approximately."
            )
    history.append(_drift_in_words(membership.astype(np.float64), values, "labels"))
    adjusted = blocks is not None or bool(model.names)
    statistic: Statistic
    if adjusted:
        statistic = REGRESSION_T if equal_variance else ADJUSTED_WELCH_SCORE
    else:
        statistic = POOLED_T if equal_variance else WELCH_SCORE
    words = f"{first} and {second}"
    return Contrast(
        design=design,
        values=values,
        unit_names=tuple(str(row) for row in rows),
        unit_kind="trial",
        channels=tuple(trials.channels),
        frequencies=trials.frequencies,
        times=trials.times,
        unit=trials.unit,
        statistic=statistic,
        relabelling=model.relabelling,
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
            label: mean_over_units(values[membership == code]) for label, code in ((first, 1), (second, 0))
        },
        history=tuple(history),
        cautions=tuple(cautions),
        trial_counts=pd.DataFrame({first: [counts[0]], second: [counts[1]]}, index=[trials.subject]),
        nuisance=model.nuisance,
        nuisance_names=model.names,
    )


def trialwise_slope(
    trials: RelativeTrials,
    column: str,
    *,
    labels: str = "behaviour",
    blocks: str | None = None,
    nuisance: Sequence[str] = (),
) -> Contrast:
    """Does power rise or fall with a number that each trial of one subject carries?

    Parameters
    ----------
    trials : RelativeTrials
        From `normalized_trials`; rows in the order of recording.
    column : str
        Trial column of numbers, such as a reaction time or a confidence; trials without one are left out.
    labels, blocks, nuisance
        As in `trialwise`.

    Returns
    -------
    Contrast
        Estimate: slope per unit of the column; effect size: (partial) correlation over trials.

    Raises
    ------
    InputError
        As `trialwise`; a column that is constant.

    Notes
    -----
    Freedman & Lane 1983, J. Bus. Econ. Stat. 1:292, for the nuisance columns.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_subject
    >>> design = lamp_sequences()
    >>> power = simulate_subject(design, design.subjects[0]).select(frequencies=(8, 13))
    >>> power.trials["number"] = range(len(power.trials))
    >>> trials = tfs.normalized_trials(power, tfs.Baseline((-0.5, -0.2), order="trial_first"))
    >>> tfs.trialwise_slope(trials, "number").estimate_unit
    'dB per unit of number'
    """
    design = "trialwise_slope"
    problems = Problems()
    _check_trials(trials, design, labels, problems)
    where = f"subject {trials.subject}, {design}"
    numbers = np.full(len(trials.trials), np.nan)
    if column not in trials.trials.columns:
        with problems.gathering():
            table_column(trials.trials, column, where, _row_names(trials), of="trial", of_all=False)
    else:
        numbers = pd.to_numeric(trials.trials[column], errors="coerce").to_numpy(dtype=np.float64)
    rows = [int(row) for row in np.flatnonzero(np.isfinite(numbers))]
    model = _trial_model(trials, rows, labels, blocks, nuisance, where, problems)
    problems.raise_if_any()
    if len(rows) < 4 or np.ptp(numbers[rows]) == 0:
        raise refusal(
            f'{where}, column "{column}"',
            "numbers that vary over at least four trials",
            f"{len(rows)} numbers, {len(set(numbers[rows]))} different",
            "name a column of numbers",
        )
    check_model(numbers[rows], model.nuisance, model.relabelling, where, column, of="trial")
    values = np.ascontiguousarray(trials.values[rows])
    return Contrast(
        design=design,
        values=values,
        unit_names=tuple(str(row) for row in rows),
        unit_kind="trial",
        channels=tuple(trials.channels),
        frequencies=trials.frequencies,
        times=trials.times,
        unit=trials.unit,
        statistic=REGRESSION_T,
        relabelling=model.relabelling,
        null_hypothesis=f"Power is unrelated to {column} over trials.",
        alternatives={
            "two-sided": f"Power rises or falls with {column}.",
            "greater": f"Power rises with {column}.",
            "less": f"Power falls with {column}.",
        },
        difference=f"slope on {column}",
        per=f" per unit of {column}",
        condition_means={"all trials": mean_over_units(values)},
        history=(
            *trials.history,
            f"Power of {len(rows)} trials of subject {trials.subject} in {symbol_of(trials.unit)} was related to "
            f"{column}{model.words}.",
            _drift_in_words(numbers[rows], values, column),
        ),
        cautions=(*trials.cautions, ONE_SUBJECT),
        trial_counts=pd.DataFrame({"all trials": [len(rows)]}, index=[trials.subject]),
        predictor=numbers[rows],
        predictor_name=column,
        nuisance=model.nuisance,
        nuisance_names=model.names,
    )


@dataclass(frozen=True)
class _TrialModel:
    """What stands beside the labels: the relabelling, the nuisance columns, and the words for both."""

    relabelling: Relabelling
    nuisance: NDArray[np.float64] | None
    names: tuple[str, ...]
    words: str


def _row_names(trials: RelativeTrials) -> list[str]:
    return [str(row) for row in range(len(trials.trials))]


def _check_trials(trials: object, design: str, labels: object, problems: Problems) -> None:
    if not isinstance(trials, RelativeTrials):
        raise refusal(design, "relative trials", type(trials).__name__, "make them with normalized_trials")
    if labels not in LABEL_ORIGINS:
        problems.add(
            f"{design}, labels", f"one of {listed(LABEL_ORIGINS)}", repr(labels), "say who decided the label of a trial"
        )
    if trials.baseline is not None and trials.baseline.reference == "own":
        problems.add(
            design,
            'trials normalized without regard to their label (reference "pooled" or "named")',
            'reference "own", in which the labels enter the normalization and are no longer exchangeable',
            'use Baseline(reference="pooled") or order="trial_first"',
        )


def _trial_model(
    trials: RelativeTrials,
    rows: Sequence[int],
    labels: str,
    blocks: str | None,
    nuisance: Sequence[str],
    where: str,
    problems: Problems,
) -> _TrialModel:
    """Relabelling within blocks, and the nuisance columns of the chosen rows."""
    kind = SHUFFLE if labels == "assigned" else CIRCULAR_SHIFT
    chosen = trials.trials.iloc[list(rows)]
    names = (nuisance,) if isinstance(nuisance, str) else tuple(nuisance)
    row_names = [str(row) for row in rows]
    columns = []
    for name in names:
        with problems.gathering():
            columns.append(numeric_column(chosen, name, f"{where}, nuisance", row_names, of="trial"))
    relabelling = Relabelling(kind)
    if blocks is not None:
        with problems.gathering():
            codes, block_names = block_codes(table_column(chosen, blocks, f"{where}, blocks", row_names, of="trial"))
            relabelling = Relabelling(kind, codes, block_names)
    taken_out = [*names, *([blocks] if blocks is not None else [])]
    return _TrialModel(
        relabelling,
        np.stack(columns, axis=1) if columns else None,
        names,
        f", with {', '.join(taken_out)} taken out (Freedman & Lane 1983)" if taken_out else "",
    )


def _drift_in_words(sequence: NDArray[np.float64], values: NDArray[np.floating], name: str) -> str:
    label_drift = lag_one(sequence[:, None])[0]
    power_drift = lag_one(np.asarray(values, dtype=np.float64).reshape(len(values), -1))
    return (
        f"Lag-1 autocorrelation over trials: {name} {label_drift:.2f}, power "
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
    logs = 10.0 * np.log10(np.asarray(power.as_array(), dtype=np.float64))
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
        cautions=(ONE_SUBJECT,),
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
