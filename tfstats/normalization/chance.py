"""What power relative to a baseline is under no change: which choices may be tested against chance, and by how
much the others miss it."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from tfstats.foundations.errors import refusal_text
from tfstats.normalization.baseline_choice import Baseline

__all__ = ["averaging_for_chance", "chance_problem", "decibel_bias_of_mean", "decibel_bias_of_single_trials"]

_DECIBELS_A_NEPER = 10.0 / math.log(10.0)


def decibel_bias_of_mean(trials: ArrayLike) -> Any:
    """By how many decibels does the decibel of a mean over n trials lie below the truth?

    Power of a Gaussian signal at one time and frequency is mean x chi-square(2)/2; the mean over n independent such
    trials has the expected logarithm digamma(n) - ln n.

    Parameters
    ----------
    trials : number or array of numbers
        Trials that are averaged.

    Returns
    -------
    number or array
        10/ln 10 (digamma(n) - ln n), always negative; -2.507 dB for one trial, -0.22 for 10, -0.05 for 40.

    Examples
    --------
    >>> from tfstats.normalization import decibel_bias_of_mean
    >>> round(float(decibel_bias_of_mean(10)), 4)
    -0.2208
    """
    from scipy.special import digamma

    counts = np.asarray(trials, dtype=np.float64)
    return _DECIBELS_A_NEPER * (digamma(counts) - np.log(counts))


def decibel_bias_of_single_trials(samples: ArrayLike) -> Any:
    """What is the mean of single-trial decibels under no change, against a linear mean of k baseline samples?

    Parameters
    ----------
    samples : number or array of numbers
        Effective (independent) samples in the baseline of one trial.

    Returns
    -------
    number or array
        10/ln 10 (digamma(1) - digamma(k) + ln k): zero for one sample, -1.74 dB for 3, -2.29 for 10.

    Examples
    --------
    >>> from tfstats.normalization import decibel_bias_of_single_trials
    >>> round(float(decibel_bias_of_single_trials(3)), 2)
    -1.74
    """
    return decibel_bias_of_mean(1) - decibel_bias_of_mean(samples)


def chance_problem(baseline: Baseline) -> str | None:
    """May values relative to this baseline be tested against no change?  None if so, else the refusal.

    Accepted are the choices whose mean is zero (ratio: one) under no change: decibels by "average_first", decibels by
    a single-trial order with a geometric mean, and percent change, ratio and z score by "average_first" or
    "trial_by_reference" with an arithmetic mean.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.normalization import chance_problem
    >>> chance_problem(tfs.Baseline(unit="decibel", order="trial_first")) is None
    True
    >>> chance_problem(tfs.Baseline(unit="ratio", order="trial_first"))[:29]
    'test against chance: expected'
    """
    where = "test against chance"
    if baseline.unit == "none":
        return refusal_text(
            where,
            "power relative to a baseline",
            'unit "none"',
            'use a Baseline with unit "decibel", "percent_change", "ratio" or "z_score"',
        )
    got = f'unit "{baseline.unit}" by order "{baseline.order}" with a baseline mean that is {baseline.mean_kind}'
    if baseline.unit == "decibel":
        if not baseline.single_trial or baseline.mean_kind == "geometric":
            return None
        return refusal_text(
            where,
            "decibels whose mean is zero under no change",
            f"{got} (about -1.7 to -2.5 dB under no change)",
            'set baseline_mean "geometric" or leave it out, or use order "average_first"',
        )
    if baseline.order == "trial_first":
        return refusal_text(
            where,
            "values whose mean is that of no change when nothing changes",
            f"{got} (dividing each trial by its own noisy baseline shifts the mean)",
            'use order "average_first" or "trial_by_reference" with an arithmetic mean, or unit "decibel"',
        )
    if baseline.mean_kind == "geometric":
        return refusal_text(
            where,
            "values whose mean is that of no change when nothing changes",
            f"{got} (a geometric mean lies below the mean of power)",
            'set baseline_mean "arithmetic" or leave it out, or use unit "decibel"',
        )
    return None


def averaging_for_chance(baseline: Baseline | None) -> str:
    """How must decibels be averaged over points for a test against no change: as "ratios" or as "units"?

    Against a linear baseline mean the decibel of the mean ratio is unbiased and the mean of decibels is not; against
    a geometric mean (of logarithms on both sides) it is the other way round.  The other units are linear in the
    ratio, so both are the same.

    Notes
    -----
    Simulated, 20 trials, 20 subjects, no change, mean over 14 times, level .05: linear mean .05 by ratios and .13 by
    units; geometric mean .19 (single-trial orders) and .11 ("average_first") by ratios, .04 to .05 by units.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.normalization import averaging_for_chance
    >>> averaging_for_chance(tfs.Baseline()), averaging_for_chance(tfs.Baseline(order="trial_first"))
    ('ratios', 'units')
    """
    geometric = baseline is not None and baseline.unit == "decibel" and baseline.mean_kind == "geometric"
    return "units" if geometric else "ratios"
