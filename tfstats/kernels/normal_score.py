"""Student's t as a normal score: the z with the same tail probability under its own degrees of freedom.

With w = sqrt((df - 1/2) * log(1 + t^2 / df)) the ratio z / w is close to 1 and a smooth function of w^2 and 1 / df
(the leading term is Hill 1970, Communications of the ACM 13:617, Algorithm 395).  The ratio is fitted by a product
of Chebyshev
polynomials over just the range of df that one test can meet, to a relative error below 5e-8 (for df above 4 below
1e-9) for w up to 10; beyond that the ratio is held.
Computed through the tail itself, z keeps its relative accuracy where 1 - p would be 1.
"""

from __future__ import annotations

import math

import numpy as np
from scipy import special

from tfstats.kernels.compile_policy import compiled

__all__ = ["fitted_score", "normal_scores", "score_of_t"]

_LARGEST_W = 10.0
_WANTED = 5e-8


def _exact_ratio(w: np.ndarray, inverse_df: np.ndarray) -> np.ndarray:
    """z / w by the incomplete beta function; w > 0."""
    df = 1.0 / inverse_df
    growth = np.expm1(w * w / (df - 0.5))
    # P(T > t) = I(df / (df + t^2); df / 2, 1 / 2) / 2
    tail = 0.5 * special.betainc(0.5 * df, 0.5, 1.0 / (1.0 + growth))
    return -special.ndtri(tail) / w


def fitted_score(least_df: float, most_df: float) -> np.ndarray:
    """Coefficients for `score_of_t` for degrees of freedom in [least_df, most_df], least_df >= 1.

    Returns (2 + rows, columns): the first two rows hold the ranges, the rest the Chebyshev coefficients in (w^2, 1/df).
    """
    low, high = 1.0 / most_df, 1.0 / least_df
    low, high = low * (1.0 - 1e-9), high * (1.0 + 1e-9)
    square = _LARGEST_W**2
    check_w = np.sqrt(np.linspace(1e-4, 1.0, 400) * square)
    check_inverse = np.linspace(low, high, 41)
    truth = _exact_ratio(check_w[:, None], check_inverse[None, :])
    for rows, columns in ((8, 4), (12, 6), (16, 10), (24, 14), (36, 20), (48, 28)):
        x = np.cos(np.pi * (np.arange(rows) + 0.5) / rows)
        y = np.cos(np.pi * (np.arange(columns) + 0.5) / columns)
        sampled = _exact_ratio(
            np.sqrt((x + 1.0) * 0.5 * square)[:, None], (low + (y + 1.0) * 0.5 * (high - low))[None, :]
        )
        along_x = np.cos(np.outer(np.arange(rows), np.arccos(x))) * 2.0 / rows
        along_y = np.cos(np.outer(np.arange(columns), np.arccos(y))) * 2.0 / columns
        along_x[0] *= 0.5
        along_y[0] *= 0.5
        coefficients = along_x @ sampled @ along_y.T
        scaled_y = (check_inverse - low) * 2.0 / (high - low) - 1.0
        fitted = np.polynomial.chebyshev.chebgrid2d(check_w**2 * 2.0 / square - 1.0, scaled_y, coefficients)
        if np.max(np.abs(fitted / truth - 1.0)) < _WANTED:
            break
    fit = np.zeros((2 + rows, max(columns, 3)))
    fit[0, :2] = (low, high)
    fit[1, 0] = square
    fit[1, 1] = columns
    fit[2:, :columns] = coefficients
    return fit


@compiled
def score_of_t(t, df, fit):
    """Normal score of one t with df degrees of freedom inside the range of the fit, with the sign of t."""
    low = fit[0, 0]
    y = (1.0 / df - low) * 2.0 / (fit[0, 1] - low) - 1.0
    y = min(1.0, max(-1.0, y))
    w_square = (df - 0.5) * math.log1p(t * t / df)
    x = min(1.0, w_square * 2.0 / fit[1, 0] - 1.0)
    columns = np.int64(fit[1, 1])
    # Clenshaw's recurrence, over df inside and over w outside.
    next_x = 0.0
    after_x = 0.0
    for r in range(fit.shape[0] - 1, 1, -1):
        next_y = 0.0
        after_y = 0.0
        for c in range(columns - 1, 0, -1):
            next_y, after_y = fit[r, c] + 2.0 * y * next_y - after_y, next_y
        inner = fit[r, 0] + y * next_y - after_y
        if r > 2:
            next_x, after_x = inner + 2.0 * x * next_x - after_x, next_x
        else:
            next_x = inner + x * next_x - after_x
    return math.copysign(math.sqrt(w_square) * next_x, t)


@compiled
def normal_scores(t, df, fit, out):
    """Fill out with the normal scores of arrays of t and df; NaN stays NaN."""
    for k in range(t.shape[0]):
        out[k] = score_of_t(t[k], df[k], fit) if t[k] == t[k] else np.nan
