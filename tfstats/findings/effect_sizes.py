"""Standardised effect sizes and the intervals of means, of d, for one sample and for two groups.

d_z = mean / SD of the compared values; Hedges' g = J(df) d with the exact gamma form (Hedges 1981, J. Educ. Stat.
6:107).  Intervals of d invert the noncentral t distribution (Steiger & Fouladi 1997, in: What If There Were No
Significance Tests?).  Two groups: d with the average SD for unequal variances (Bonett 2008, Psychol. Methods 13:99,
for the idea; the degrees of freedom match the first two moments of the mean of the two variances), or the pooled SD.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special

from tfstats.contrasts.contrast import ONE_SAMPLE_T, POOLED_T, Contrast

__all__ = ["Effect", "effect_of", "hedges_factor", "noncentral_t_interval", "two_group_moments"]

Floats = NDArray[np.float64]


def hedges_factor(df: ArrayLike) -> Floats:
    """J(df) = gamma(df/2) / (sqrt(df/2) gamma((df - 1)/2)), the exact small-sample factor of Hedges 1981."""
    half = np.asarray(df, dtype=np.float64) / 2.0
    return np.asarray(np.exp(special.gammaln(half) - special.gammaln(half - 0.5)) / np.sqrt(half))


def noncentral_t_interval(t: ArrayLike, df: ArrayLike, confidence: float = 0.95) -> tuple[Floats, Floats]:
    """Bounds of the noncentrality whose t distributions leave (1 - confidence)/2 beyond the observed t."""
    tail = (1.0 - confidence) / 2.0
    observed = np.asarray(t, dtype=np.float64)
    finite = np.isfinite(observed)
    safe = np.where(finite, observed, 0.0)
    low = _noncentrality(safe, df, 1.0 - tail)
    high = _noncentrality(safe, df, tail)
    return np.where(finite, low, np.nan), np.where(finite, high, np.nan)


def _noncentrality(t: Floats, df: ArrayLike, probability: float, step: float = 1e-3) -> Floats:
    """The noncentrality under which t has this cumulative probability.

    The library's inverse is good to about 1e-6; one Newton step on its forward function takes it to 1e-9.
    """
    start = special.nctdtrinc(df, probability, t)
    slope = (special.nctdtr(df, start + step, t) - special.nctdtr(df, start - step, t)) / (2.0 * step)
    with np.errstate(divide="ignore", invalid="ignore"):
        moved = (special.nctdtr(df, start, t) - probability) / slope
    # Far out the forward function is flat and a step would lead nowhere.
    return np.asarray(start - np.where(np.abs(moved) < 1e-2, moved, 0.0))


@dataclass(frozen=True)
class Effect:
    """A mean (difference), its t interval, its test, and its standardised size with interval.

    All fields are arrays over the points that were passed (scalars as arrays of no dimension).
    """

    estimate: Floats
    low: Floats
    high: Floats
    statistic: Floats
    """t of the estimate (Welch's for unequal variances)."""
    df: Floats
    size: Floats
    size_low: Floats
    size_high: Floats
    hedges: Floats
    name: str


def effect_of(
    contrast: Contrast, values: NDArray[np.floating], confidence: float = 0.95, *, intervals: bool = True
) -> Effect:
    """Effect of compared values (units, ...) under the contrast's design; NaN units are left out point by point.

    Cost: a few passes over the values; with intervals about 10 microseconds a point.
    """
    # A point without spread or without units has an infinite or undefined t: that is its value, not a fault.
    with np.errstate(all="ignore"):
        if contrast.statistic == ONE_SAMPLE_T:
            return _one_sample(np.asarray(values, dtype=np.float64), confidence, intervals)
        if contrast.labels is None:
            raise TypeError("a two-group effect needs labels")
        return _two_groups(
            np.asarray(values, dtype=np.float64), contrast.labels, contrast.statistic == POOLED_T, confidence, intervals
        )


def _moments(values: Floats) -> tuple[Floats, Floats, Floats]:
    """n, mean and variance (ddof 1) over units, leaving out NaN."""
    there = np.isfinite(values)
    n = there.sum(axis=0).astype(np.float64)
    mean = np.where(there, values, 0.0).sum(axis=0) / n
    deviations = np.where(there, values - mean, 0.0)
    return n, np.asarray(mean), np.asarray((deviations**2).sum(axis=0) / (n - 1.0))


def _interval(estimate: Floats, error: Floats, df: Floats, confidence: float) -> tuple[Floats, Floats]:
    half = special.stdtrit(df, 0.5 + confidence / 2.0) * error
    return np.asarray(estimate - half), np.asarray(estimate + half)


def _one_sample(values: Floats, confidence: float, intervals: bool) -> Effect:
    n, mean, variance = _moments(values)
    df = n - 1.0
    error = np.sqrt(variance / n)
    t = mean / error
    size = mean / np.sqrt(variance)
    low, high = _interval(mean, error, df, confidence)
    size_low, size_high = _size_interval(t, df, 1.0 / np.sqrt(n), confidence, intervals)
    return Effect(mean, low, high, t, df, size, size_low, size_high, hedges_factor(df) * size, "d_z")


def two_group_moments(
    values: Floats, labels: NDArray[np.uint8]
) -> tuple[tuple[Floats, Floats, Floats], tuple[Floats, Floats, Floats]]:
    """(n, mean, variance) of the units with label 1, and of those with label 0."""
    return _moments(values[labels == 1]), _moments(values[labels == 0])


def _two_groups(values: Floats, labels: NDArray[np.uint8], pooled: bool, confidence: float, intervals: bool) -> Effect:
    (n1, mean1, variance1), (n2, mean2, variance2) = two_group_moments(values, labels)
    estimate = np.asarray(mean1 - mean2)
    if pooled:
        df = n1 + n2 - 2.0
        spread = np.sqrt(((n1 - 1.0) * variance1 + (n2 - 1.0) * variance2) / df)
        error = spread * np.sqrt(1.0 / n1 + 1.0 / n2)
        size_df = df
    else:
        share1, share2 = variance1 / n1, variance2 / n2
        error = np.sqrt(share1 + share2)
        df = (share1 + share2) ** 2 / (share1**2 / (n1 - 1.0) + share2**2 / (n2 - 1.0))
        spread = np.sqrt((variance1 + variance2) / 2.0)
        size_df = (
            (n1 - 1.0)
            * (n2 - 1.0)
            * (variance1 + variance2) ** 2
            / ((n2 - 1.0) * variance1**2 + (n1 - 1.0) * variance2**2)
        )
    t = estimate / error
    size = estimate / spread
    low, high = _interval(estimate, error, df, confidence)
    size_low, size_high = _size_interval(t, size_df, error / spread, confidence, intervals)
    name = "d (pooled SD)" if pooled else "d (average SD)"
    return Effect(estimate, low, high, t, df, size, size_low, size_high, hedges_factor(size_df) * size, name)


def _size_interval(t: Floats, df: Floats, scale: Floats, confidence: float, intervals: bool) -> tuple[Floats, Floats]:
    """Noncentrality bounds turned into d: d = noncentrality times SE / SD."""
    if not intervals:
        absent = np.full(np.shape(t), np.nan)
        return absent, absent
    low, high = noncentral_t_interval(t, df, confidence)
    return np.asarray(low * scale), np.asarray(high * scale)
