"""Counts of what is no ordinary positive number, in one pass."""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled

__all__ = ["counts_of_values"]


@compiled
def counts_of_values(values):
    """How many of values (one axis) are finite and above 0, and how many are NaN."""
    ordinary, missing = 0, 0
    for k in range(values.size):
        ordinary += (values[k] > 0.0) & (values[k] < np.inf)
        missing += values[k] != values[k]
    return ordinary, missing
