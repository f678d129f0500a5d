"""The one rule by which a p-value comes from relabellings."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import stats

__all__ = [
    "TIE_TOLERANCE",
    "clopper_pearson",
    "draws_to_settle",
    "monte_carlo_interval",
    "p_of_counts",
    "p_of_null",
    "tie_tolerance",
]

Floats = NDArray[np.float64]

TIE_TOLERANCE = {"float32": 1e-6, "float64": 1e-9}
"""Relative tolerance within which a relabelling counts as equal to the observed value, for rounding."""


def tie_tolerance(dtype: np.dtype) -> float:
    """The tolerance that belongs to the data's precision."""
    return TIE_TOLERANCE["float32" if dtype == np.float32 else "float64"]


def p_of_null(observed: ArrayLike, null: NDArray[np.floating], tolerance: float) -> Floats:
    """Share of relabellings, the observed one (row 0) included, at least as extreme as each observed value.

    Row 0 is the "+1" of Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9:39; nothing is added again.
    """
    values = np.atleast_1d(np.asarray(observed, dtype=np.float64))
    ordered = np.sort(np.asarray(null[1:], dtype=np.float64))
    below = np.searchsorted(ordered, values - tolerance * np.abs(values), side="left")
    return np.asarray((ordered.size - below + 1) / null.size)


def p_of_counts(counts: NDArray[np.integer], rows: int) -> Floats:
    """p from counts of rows at least as extreme, row 0 included in both."""
    return np.asarray(counts / rows, dtype=np.float64)


def clopper_pearson(successes: ArrayLike, trials: int, confidence: float = 0.95) -> tuple[Floats, Floats]:
    """Exact binomial interval (Clopper & Pearson 1934, Biometrika 26:404)."""
    x = np.asarray(successes, dtype=np.float64)
    tail = (1.0 - confidence) / 2.0
    with np.errstate(invalid="ignore"):
        low = np.where(x > 0, stats.beta.ppf(tail, x, trials - x + 1), 0.0)
        high = np.where(x < trials, stats.beta.ppf(1.0 - tail, x + 1, trials - x), 1.0)
    return np.asarray(low), np.asarray(high)


def monte_carlo_interval(p: ArrayLike, rows: int, enumerated: bool) -> tuple[Floats, Floats]:
    """95 % interval of p for the draws not made: Clopper-Pearson on the B - 1 draws, row 0 left out.

    When every relabelling was visited there is no such uncertainty and both bounds are p.
    """
    values = np.asarray(p, dtype=np.float64)
    if enumerated:
        return values.copy(), values.copy()
    return clopper_pearson(np.round(values * rows) - 1, rows - 1)


def draws_to_settle(p: float, alpha: float) -> int | None:
    """About how many draws would put alpha outside the 95 % interval of p: 3.84 p (1 - p) / (p - alpha)^2."""
    if p == alpha:
        return None
    return int(np.ceil(3.84 * p * (1.0 - p) / (p - alpha) ** 2))
