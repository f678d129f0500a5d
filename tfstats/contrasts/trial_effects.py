"""Trial-level effects of many subjects: one difference or slope a subject, for a test over subjects."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.contrasts.compared_values import numeric_column, table_column
from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.units import symbol_of
from tfstats.normalization import Baseline, normalized_trials
from tfstats.power_files import TrialPower

__all__ = ["EFFECT", "trial_effect_maps"]

Floats = NDArray[np.float64]

EFFECT = "effect"
"""The one condition of the maps."""


def trial_effect_maps(
    powers: Iterable[TrialPower],
    column: str,
    baseline: Baseline,
    *,
    first: str | None = None,
    second: str | None = None,
    nuisance: Sequence[str] = (),
    precision: bool = False,
) -> ConditionMaps:
    """How does each subject's single-trial power depend on what the trial carries?  One map a subject.

    Test the maps over subjects with `against_zero(maps, "effect")`: the effects of the subjects are symmetric about
    zero under the null, whatever happens within a subject.

    Parameters
    ----------
    powers : PowerFiles or iterable of TrialPower
        One subject in memory at a time.
    column : str
        Trial column: of numbers for a slope; of labels with `first` and `second`.
    baseline : Baseline
        Order "trial_first" or "trial_by_reference".
    first, second : str, optional
        Two labels: the effect is the mean difference first - second.
    nuisance : trial columns of numbers
        Taken out within each subject by least squares.
    precision : bool
        False: every subject weighs the same.  True: subjects weigh 1 / (s^2/n + tau^2), their squared standard error and the
        variance between subjects; each value is multiplied by its weight over the mean weight, so that the mean over
        subjects is the weighted mean.  tau^2 = max(0, mean of effect^2 - s^2/n), which no sign flip changes, so
        that the test stays valid.

    Returns
    -------
    ConditionMaps
        One condition "effect", in the unit of the baseline (per unit of the column for slopes), `of_differences`.

    Raises
    ------
    InputError
        Columns or labels that are not there, fewer than two trials of a kind, in all subjects together.

    Notes
    -----
    Summary statistics of subjects tested over subjects (Holmes & Friston 1998, NeuroImage 7:S754); weights as in
    random-effects meta-analysis (DerSimonian & Laird 1986, Controlled Clinical Trials 7:177), with a moment estimator of
    tau^2 about zero in place of theirs about the mean.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_study
    >>> powers = simulate_study(lamp_sequences(subjects=3))
    >>> baseline = tfs.Baseline((-0.5, -0.2), order="trial_first")
    >>> tfs.trial_effect_maps(powers, "memory", baseline, first="recalled", second="missed").conditions
    ('effect',)
    """
    problems = Problems()
    if (first is None) != (second is None):
        problems.add(
            "trial_effect_maps", "both labels or neither", "one", "give first and second, or a column of numbers"
        )
    problems.raise_if_any()
    labels = None if first is None else (label_text(first), label_text(second))
    names = (nuisance,) if isinstance(nuisance, str) else tuple(nuisance)
    subjects: list[str] = []
    effects: list[Floats] = []
    variances: list[Floats] = []
    counts: list[int] = []
    axes: TrialPower | None = None
    for power in powers:
        with problems.gathering():
            axes = axes or power
            _check_axes(power, axes)
            trials = normalized_trials(power, baseline)
            where = f"subject {power.subject}, trial_effect_maps"
            rows, x = _predictor(trials.trials, column, labels, where)
            chosen = trials.trials.iloc[rows]
            row_names = [str(row) for row in rows]
            covariates = [numeric_column(chosen, name, f"{where}, nuisance", row_names, of="trial") for name in names]
            effect, variance = _least_squares(np.asarray(trials.values[rows], dtype=np.float64), x, covariates, where)
            subjects.append(power.subject)
            effects.append(effect)
            variances.append(variance)
            counts.append(len(rows))
    if axes is None:
        problems.add("trial_effect_maps, powers", "at least one subject", "none", "check the pattern of the files")
    problems.raise_if_any()
    assert axes is not None
    values = np.stack(effects)
    weighted = _by_precision(values, np.stack(variances)) if precision else values
    return ConditionMaps(
        weighted[:, None],
        subjects=subjects,
        conditions=[EFFECT],
        channels=axes.channels,
        frequencies=axes.frequencies,
        times=axes.times,
        unit=baseline.unit if labels is not None else f"{symbol_of(baseline.unit)} per unit of {column}",
        trial_counts=pd.DataFrame({EFFECT: counts}, index=subjects),
        history=(
            baseline.describe(averaged=False),
            _in_words(column, labels, names, precision),
        ),
        wavelet_cycles=axes.wavelet_cycles,
        scaling=axes.scaling,
        of_differences=True,
    )


def _check_axes(power: TrialPower, axes: TrialPower) -> None:
    problems = Problems()
    if power.channels != axes.channels:
        problems.add(
            f"subject {power.subject}, channels",
            f"those of subject {axes.subject}",
            listed(power.channels),
            "bring all to the same",
        )
    for name in ("frequencies", "times"):
        ours, theirs = getattr(axes, name), getattr(power, name)
        if ours.shape != theirs.shape or not np.allclose(ours, theirs, rtol=1e-5, atol=1e-9):
            problems.add(
                f"subject {power.subject}, {name}",
                f"those of subject {axes.subject}",
                f"{theirs[0]:g} to {theirs[-1]:g} in {theirs.size} steps",
                "bring all subjects to the same axis",
            )
    problems.raise_if_any()


def _predictor(
    table: pd.DataFrame, column: str, labels: tuple[str, str] | None, where: str
) -> tuple[list[int], Floats]:
    row_names = [str(row) for row in range(len(table))]
    if labels is None:
        texts = table_column(table, column, where, row_names, of="trial", of_all=False)
        numbers = pd.to_numeric(pd.Series(texts), errors="coerce").to_numpy(dtype=np.float64)
        rows = [int(row) for row in np.flatnonzero(np.isfinite(numbers))]
        if len(rows) < 3 or np.ptp(numbers[rows]) == 0:
            raise refusal(
                f'{where}, column "{column}"', "numbers that vary over at least three trials", f"{len(rows)} numbers",
                "name a column of numbers, or give first and second",
            )  # fmt: skip
        return rows, numbers[rows]
    texts = table_column(table, column, where, row_names, of="trial", of_all=False)
    for label in labels:
        if texts.count(label) < 2:
            raise refusal(
                where, f'at least two trials with {column} "{label}"', str(texts.count(label)), "leave the subject out"
            )
    rows = [row for row, text in enumerate(texts) if text in labels]
    return rows, np.array([float(texts[row] == labels[0]) for row in rows])


def _least_squares(values: Floats, x: Floats, covariates: Sequence[Floats], where: str) -> tuple[Floats, Floats]:
    """The coefficient of x beside an intercept and the covariates, and its squared standard error."""
    known = np.column_stack([np.ones(len(x)), *covariates])
    apart = x - known @ np.linalg.lstsq(known, x, rcond=None)[0]
    df = len(x) - known.shape[1] - 1
    if float(apart @ apart) <= 1e-18 * float(x @ x) or df < 1:
        raise refusal(
            where,
            "trials that vary apart from the nuisance columns",
            f"{len(x)} trials that do not",
            "leave out a column",
        )
    flat = values.reshape(len(x), -1)
    rest = flat - known @ np.linalg.lstsq(known, flat, rcond=None)[0]
    effect = apart @ rest / (apart @ apart)
    variance = ((rest - np.outer(apart, effect)) ** 2).sum(axis=0) / df / (apart @ apart)
    return effect.reshape(values.shape[1:]), variance.reshape(values.shape[1:])


def _by_precision(values: Floats, variances: Floats) -> Floats:
    # A subject without a value at a point has no say there.
    there = np.isfinite(values)
    with np.errstate(divide="ignore", invalid="ignore"):
        between = np.maximum(0.0, np.where(there, values**2 - variances, 0.0).sum(axis=0) / there.sum(axis=0))
        weights = 1.0 / (variances + between)
        mean_weight = np.where(there, weights, 0.0).sum(axis=0) / there.sum(axis=0)
        return np.asarray(values * weights / mean_weight)


def _in_words(column: str, labels: tuple[str, str] | None, nuisance: Sequence[str], precision: bool) -> str:
    what = f"the slope on {column}" if labels is None else f"the difference {labels[0]} - {labels[1]} ({column})"
    taken = f", with {', '.join(nuisance)} taken out" if nuisance else ""
    weighed = (
        "subjects were weighted by precision, 1 / (s^2/n + tau^2)" if precision else "every subject weighed the same"
    )
    return f"Each subject's effect over trials was {what}{taken}; {weighed}."
