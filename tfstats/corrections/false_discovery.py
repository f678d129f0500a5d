"""Step-up false discovery rate over the tested points."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["adjusted_p"]


def adjusted_p(p: NDArray[np.float64], method: str) -> NDArray[np.float64]:
    """Adjusted p-values of a flat array: the smallest level at which each point is discovered.

    Benjamini & Hochberg 1995 multiply the i-th smallest of m p-values by m/i and take the running minimum from the
    largest down; Benjamini & Yekutieli 2001 multiply further by 1 + 1/2 + ... + 1/m, which holds under any dependence.
    """
    number = p.size
    order = np.argsort(p, kind="stable")
    factors = number / np.arange(1, number + 1)
    if method == "benjamini_yekutieli":
        factors = factors * np.sum(1.0 / np.arange(1, number + 1))
    stepped = np.minimum.accumulate((p[order] * factors)[::-1])[::-1]
    adjusted = np.empty(number)
    adjusted[order] = np.minimum(stepped, 1.0)
    return adjusted
