"""Means and medians of what is there: NaN, without a warning, where nothing is."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["finite_mean", "finite_median"]

Floats = NDArray[np.float64]


def finite_mean(values: NDArray[np.floating], axis: int | None = None) -> Floats:
    """Mean over the finite values of an axis (or of all)."""
    finite = np.isfinite(values)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(finite, values, 0.0).sum(axis=axis) / finite.sum(axis=axis))


def finite_median(values: NDArray[np.floating]) -> float:
    """Median of all finite values."""
    finite = values[np.isfinite(values)]
    return float(np.median(finite)) if finite.size else float("nan")
