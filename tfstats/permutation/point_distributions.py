"""Degrees of freedom, forming thresholds and parametric p-values of each statistic."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    F_OF_FLIPS,
    F_OF_SHUFFLED_CONDITIONS,
    ONE_SAMPLE_STATISTICS,
    TRIMMED_T,
    WELCH_SCORE,
    Contrast,
)
from tfstats.permutation.regression_engine import orthonormal_columns

__all__ = ["TRIMMED_SHARE", "degrees_of_freedom", "fixed_columns", "forming_threshold", "parametric_p"]

Floats = NDArray[np.float64]

TRIMMED_SHARE = 0.2
"""Share of units trimmed at either end (Yuen 1974, Biometrika 61:165; 20 % is the usual choice)."""


def fixed_columns(contrast: Contrast) -> Floats:
    """Orthonormal columns that no relabelling changes: one a block (one block: the intercept)."""
    units = len(contrast.unit_names)
    codes = np.zeros(units, int) if contrast.relabelling.blocks is None else np.asarray(contrast.relabelling.blocks)
    columns = (codes[:, None] == np.arange(codes.max() + 1)).astype(np.float64)
    return np.asarray(columns / np.sqrt(columns.sum(axis=0)))


def degrees_of_freedom(contrast: Contrast, units: float | None = None) -> float | tuple[float, float]:
    """df of the statistic by its design; for F both.  `units`: how many units are at the point, if not all."""
    n = float(len(contrast.unit_names)) if units is None else units
    statistic = contrast.statistic
    if statistic == TRIMMED_T:
        return n - 2.0 * np.floor(TRIMMED_SHARE * n) - 1.0
    if statistic in ONE_SAMPLE_STATISTICS:
        return n - 1.0
    if statistic in (F_OF_FLIPS, F_OF_SHUFFLED_CONDITIONS):
        effects = 0 if contrast.components is None else len(contrast.components)
        return float(effects), (n - 1.0) * effects
    fixed = fixed_columns(contrast)
    # Covariates that say the same twice take out one degree of freedom, not two.
    nuisance = 0 if contrast.nuisance is None else orthonormal_columns(contrast.nuisance, fixed).shape[1]
    taken = fixed.shape[1] + nuisance
    if contrast.is_f:
        groups = len(contrast.label_names)
        return groups - 1.0, n - taken - (groups - 1.0)
    return n - taken - 1.0


def forming_threshold(contrast: Contrast, forming_p: float, alternative: str, units: float | None = None) -> float:
    """The critical value that a point must exceed: t or F quantile, or the normal quantile for Welch scores."""
    if contrast.is_f:
        first, second = degrees_of_freedom(contrast, units)  # type: ignore[misc]
        return float(special.fdtri(first, second, 1.0 - forming_p))
    tail = forming_p / 2.0 if alternative == "two-sided" else forming_p
    if contrast.statistic in (WELCH_SCORE, ADJUSTED_WELCH_SCORE):
        return float(-special.ndtri(tail))
    return float(-special.stdtrit(degrees_of_freedom(contrast, units), tail))


def parametric_p(
    contrast: Contrast, statistic: Floats, alternative: str, units: NDArray[np.integer] | None = None
) -> Floats:
    """Uncorrected p of each point from the t, F or (for Welch scores) normal distribution."""
    if contrast.is_f:
        first, second = degrees_of_freedom(contrast)  # type: ignore[misc]
        return np.asarray(special.fdtrc(first, second, np.maximum(statistic, 0.0)))
    signed = {"two-sided": -np.abs(statistic), "greater": -statistic, "less": statistic}[alternative]
    if contrast.statistic in (WELCH_SCORE, ADJUSTED_WELCH_SCORE):
        tail = special.ndtr(signed)
    else:
        n = None if units is None else np.maximum(np.asarray(units, dtype=np.float64), 2.0)
        tail = special.stdtr(degrees_of_freedom(contrast, n), signed)  # type: ignore[arg-type]
    return np.asarray(2.0 * tail if alternative == "two-sided" else tail)
