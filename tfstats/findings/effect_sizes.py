"""Estimates, their intervals, and standardised effect sizes of every design.

d_z = mean / SD of the compared values; Hedges' g = J(df) d with the exact gamma form (Hedges 1981, J. Educ. Stat.
6:107).  Intervals of d invert the noncentral t distribution (Steiger & Fouladi 1997, in: What If There Were No
Significance Tests?).  Two groups: d with the average SD for unequal variances (Bonett 2008, Psychol. Methods 13:99,
for the idea; the degrees of freedom match the first two moments of the mean of the two variances), or the pooled SD.
Slopes: (partial) correlation r with Fisher's interval (Fisher 1921, Metron 1:3).  F: partial eta squared with a 90 %
interval from the noncentral F (Steiger 2004, Psychol. Methods 9:164), partial epsilon squared beside it.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special, stats

from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    ONE_SAMPLE_STATISTICS,
    POOLED_T,
    WELCH_SCORE,
    Contrast,
)
from tfstats.permutation.point_distributions import degrees_of_freedom, fixed_columns
from tfstats.permutation.regression_engine import orthonormal_columns

__all__ = ["Effect", "effect_of", "hedges_factor", "noncentral_t_interval"]

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
    """A mean, difference, slope or range with its t interval, its test, and its standardised size with interval.

    All fields are arrays over the points that were passed.  For F the estimate is the largest less the smallest
    condition mean and has no interval; `size` is partial eta squared with a 90 % interval and `hedges` partial
    epsilon squared.
    """

    estimate: Floats
    low: Floats
    high: Floats
    statistic: Floats
    """t of the estimate (Welch's for unequal variances), or F."""
    df: Floats
    """Degrees of freedom of t, or the second ones of F."""
    size: Floats
    size_low: Floats
    size_high: Floats
    hedges: Floats
    """The small-sample corrected size: Hedges' g, epsilon squared; for r it is r."""
    name: str


def effect_of(
    contrast: Contrast, values: NDArray[np.floating], confidence: float = 0.95, *, intervals: bool = True
) -> Effect:
    """Effect of compared values (units, *points), for F over conditions (units, conditions, *points).

    One-sample values may be missing unit by unit.  Cost: a few passes over the values; with intervals about 10
    microseconds a point.
    """
    leading = 1 if contrast.components is None else 2
    shape = np.shape(values)[leading:]
    if len(shape) != 1:
        flat = effect_of(contrast, np.reshape(values, (*np.shape(values)[:leading], -1)), confidence, intervals=intervals)
        arrays = {name: value for name, value in vars(flat).items() if isinstance(value, np.ndarray)}
        shaped: dict[str, Any] = {name: value.reshape(shape) for name, value in arrays.items()}
        return replace(flat, **shaped)
    exact = np.asarray(values, dtype=np.float64)
    # A point without spread or without units has an infinite or undefined t: that is its value, not a fault.
    with np.errstate(all="ignore"):
        if contrast.components is not None:
            return _conditions(contrast, exact, intervals)
        if contrast.is_f:
            return _groups(contrast, exact, intervals)
        if contrast.statistic in ONE_SAMPLE_STATISTICS:
            return _one_sample(exact, confidence, intervals)
        if contrast.statistic in (POOLED_T, WELCH_SCORE):
            assert contrast.labels is not None
            return _two_groups(exact, contrast.labels, contrast.statistic == POOLED_T, confidence, intervals)
        return _regression(contrast, exact, confidence, intervals)


def _moments(values: Floats) -> tuple[Floats, Floats, Floats]:
    """n, mean and variance (ddof 1) over units, leaving out NaN."""
    there = np.isfinite(values)
    n = there.sum(axis=0).astype(np.float64)
    mean = np.where(there, values, 0.0).sum(axis=0) / n
    deviations = np.where(there, values - mean, 0.0)
    return n, np.asarray(mean), np.asarray((deviations**2).sum(axis=0) / (n - 1.0))


def _interval(estimate: Floats, error: Floats, df: ArrayLike, confidence: float) -> tuple[Floats, Floats]:
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


def _average_sd(n1: Floats, variance1: Floats, n2: Floats, variance2: Floats) -> tuple[Floats, Floats]:
    """The root of the mean variance of two groups, and its degrees of freedom."""
    df = (
        (n1 - 1.0) * (n2 - 1.0) * (variance1 + variance2) ** 2
        / ((n2 - 1.0) * variance1**2 + (n1 - 1.0) * variance2**2)
    )  # fmt: skip
    return np.sqrt((variance1 + variance2) / 2.0), df


def _two_groups(values: Floats, labels: NDArray[np.uint8], pooled: bool, confidence: float, intervals: bool) -> Effect:
    n1, mean1, variance1 = _moments(values[labels == 1])
    n2, mean2, variance2 = _moments(values[labels == 0])
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
        spread, size_df = _average_sd(n1, variance1, n2, variance2)
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


def _regression(contrast: Contrast, values: Floats, confidence: float, intervals: bool) -> Effect:
    """Adjusted slope or group difference by ordinary least squares, with the design's variance."""
    predictor = contrast.predictor if contrast.predictor is not None else contrast.labels
    assert predictor is not None
    x = np.asarray(predictor, dtype=np.float64)
    if contrast.rank:
        x, values = stats.rankdata(x), stats.rankdata(values, axis=0)
    fixed = fixed_columns(contrast)
    covariates = np.zeros((len(x), 0)) if contrast.nuisance is None else contrast.nuisance
    known = np.concatenate([fixed, orthonormal_columns(covariates, fixed)], axis=1)
    apart = x - known @ (known.T @ x)
    rest = values - known @ (known.T @ values)
    estimate = apart @ rest / (apart @ apart)
    left = rest - np.outer(apart, estimate)
    if contrast.statistic == ADJUSTED_WELCH_SCORE:
        error, df, spread, size_df = _two_variances(contrast, known, apart, left)
    else:
        df = np.full(estimate.shape, float(degrees_of_freedom(contrast)))  # type: ignore[arg-type]
        spread = np.sqrt((left**2).sum(axis=0) / df)
        error, size_df = spread / np.sqrt(apart @ apart), df
    t = estimate / error
    low, high = _interval(estimate, error, df, confidence)
    if contrast.predictor is None:
        size = estimate / spread
        size_low, size_high = _size_interval(t, size_df, error / spread, confidence, intervals)
        name = "d (pooled SD)" if contrast.statistic != ADJUSTED_WELCH_SCORE else "d (average SD)"
        return Effect(estimate, low, high, t, df, size, size_low, size_high, hedges_factor(size_df) * size, name)
    r = t / np.sqrt(t**2 + df)
    # Fisher's z: n - 3 for two variables, one less for each that is taken out; df is n - 2 - taken out.
    half = special.ndtri(0.5 + confidence / 2.0) / np.sqrt(df - 1.0)
    r_low, r_high = np.tanh(np.arctanh(r) - half), np.tanh(np.arctanh(r) + half)
    if not intervals:
        r_low = r_high = np.full(r.shape, np.nan)
    name = "rank r" if contrast.rank else "r"
    name = f"partial {name}" if known.shape[1] > 1 else name
    return Effect(estimate, low, high, t, df, r, r_low, r_high, r, name)


def _two_variances(
    contrast: Contrast, known: Floats, apart: Floats, left: Floats
) -> tuple[Floats, Floats, Floats, Floats]:
    """Standard error, df, average SD and its df when each group has its own residual variance."""
    model = np.concatenate([apart[:, None] / np.sqrt(apart @ apart), known], axis=1)
    ones = np.asarray(contrast.labels) == 1
    leverage = np.einsum("ij,ij->i", model, model)
    first_df, second_df = (1.0 - leverage[ones]).sum(), (1.0 - leverage[~ones]).sum()
    first = (left[ones] ** 2).sum(axis=0) / first_df
    second = (left[~ones] ** 2).sum(axis=0) / second_df
    eigenvalues, vectors = np.linalg.eigh(model[ones].T @ model[ones])
    shares = np.clip(eigenvalues, 0.0, 1.0)[:, None]
    weights = (vectors[0] ** 2)[:, None] / (apart @ apart)
    precision = shares / first + (1.0 - shares) / second
    variance = (weights / precision).sum(axis=0)
    from_first = (weights * shares / first / precision**2).sum(axis=0)
    from_second = (weights * (1.0 - shares) / second / precision**2).sum(axis=0)
    df = variance**2 / (from_first**2 / first_df + from_second**2 / second_df)
    spread, size_df = _average_sd(first_df + 1.0, first, second_df + 1.0, second)
    return np.sqrt(variance), df, spread, size_df


def _conditions(contrast: Contrast, values: Floats, intervals: bool) -> Effect:
    """F of the effect's contrasts; the range is over the cells of the effect, averaged over the other factors."""
    components = np.asarray(contrast.components)
    contrasts = np.tensordot(components, values, axes=(1, 1))
    units, effects = values.shape[0], len(components)
    between = units * (contrasts.mean(axis=1) ** 2).sum(axis=0)
    left = (contrasts**2).sum(axis=(0, 1)) - between
    f = (between / effects) / (left / ((units - 1) * effects))
    # The projection on the effect's contrasts keeps what the effect says of each cell and drops the rest.
    fitted = np.tensordot(components.T @ components, values.mean(axis=0), axes=(1, 0))
    return _f_effect(np.ptp(fitted, axis=0), f, float(effects), float((units - 1) * effects), intervals)


def _groups(contrast: Contrast, values: Floats, intervals: bool) -> Effect:
    assert contrast.labels is not None
    first, second = degrees_of_freedom(contrast)  # type: ignore[misc]
    known = fixed_columns(contrast)
    rest = values - known @ (known.T @ values)
    codes = (contrast.labels[:, None] == np.arange(1, len(contrast.label_names))).astype(np.float64)
    effect = orthonormal_columns(codes, known)
    between = ((effect.T @ rest) ** 2).sum(axis=0)
    left = (rest**2).sum(axis=0) - between
    means = np.stack([values[contrast.labels == code].mean(axis=0) for code in range(len(contrast.label_names))])
    return _f_effect(np.ptp(means, axis=0), (between / first) / (left / second), first, second, intervals)


def _f_effect(
    span: Floats, f: Floats, first: float, second: float, intervals: bool, confidence: float = 0.90
) -> Effect:
    eta = first * f / (first * f + second)
    epsilon = first * (f - 1.0) / (first * f + second)
    absent = np.full(np.shape(f), np.nan)
    low, high = (absent, absent) if not intervals else _eta_interval(f, first, second, confidence)
    return Effect(span, absent, absent, f, np.full(np.shape(f), second), eta, low, high, epsilon, "partial eta squared")


def _eta_interval(f: Floats, first: float, second: float, confidence: float) -> tuple[Floats, Floats]:
    """Noncentrality l of F at both tails, turned into l / (l + df1 + df2 + 1); 0 where F is too small for any."""
    tail = (1.0 - confidence) / 2.0
    bounds = []
    for probability in (1.0 - tail, tail):
        # With no noncentrality at all the probability is already lower: the bound is 0.
        reachable = special.fdtr(first, second, f) >= probability
        found = special.ncfdtrinc(first, second, probability, np.where(reachable, f, 1.0))
        noncentrality = np.where(reachable, found, 0.0)
        bounds.append(np.asarray(noncentrality / (noncentrality + first + second + 1.0)))
    return bounds[0], bounds[1]
