"""Small p-values from a generalised Pareto fit to the tail of the null distribution.

Knijnenburg et al. 2009, Bioinformatics 25:i161; Winkler et al. 2016, NeuroImage 141:502.  Fitted by probability-weighted
moments (Hosking & Wallis 1987, Technometrics 29:339), which are closed forms.  Whether the fit holds is judged by
the Anderson-Darling statistic against simulated fits of the same size, where those papers read a table.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.random_streams import generator

__all__ = ["LARGEST_P", "TailFit", "approximated_p", "fitted_tail"]

Floats = NDArray[np.float64]

LARGEST_P = 0.1
"""Only p-values up to this are approximated."""

MOST_EXCEEDANCES, FEWEST_EXCEEDANCES, STEP = 250, 30, 10
SIMULATED_FITS = 400
FIT_LEVEL = 0.05


@dataclass(frozen=True)
class TailFit:
    """Exceedances over a threshold and the generalised Pareto distribution fitted to them."""

    threshold: float
    exceedances: int
    rows: int
    shape: float
    """k of Hosking & Wallis: above 0 the tail ends at scale / k."""
    scale: float
    fit_p: float
    """p of the goodness of fit."""


def fitted_tail(null: NDArray[np.floating], seed: int) -> TailFit | None:
    """The widest tail of the draws (row 0 left out) whose fit is not rejected; None when none is.

    Begins with the 250 largest (or a tenth of the draws) and takes ten off at a time.
    """
    draws = np.sort(np.asarray(null[1:], dtype=np.float64))[::-1]
    most = min(MOST_EXCEEDANCES, int(draws.size * LARGEST_P))
    for number in range(most, FEWEST_EXCEEDANCES - 1, -STEP):
        threshold = 0.5 * (draws[number - 1] + draws[number])
        above = np.sort(draws[:number] - threshold)
        if above[0] <= 0.0 or np.ptp(above) == 0.0:
            continue
        shape, scale = _moments_fit(above[None])
        statistic = _anderson_darling(above[None], shape, scale)[0]
        if not np.isfinite(statistic):
            continue
        fit_p = _fit_p(float(statistic), number, float(shape[0]), seed)
        if fit_p > FIT_LEVEL:
            return TailFit(float(threshold), number, null.size, float(shape[0]), float(scale[0]), fit_p)
    return None


def approximated_p(observed: Floats, counted: Floats, fit: TailFit, smallest: float) -> Floats:
    """Counted p-values with those up to .1 that lie beyond the threshold replaced by the fitted tail.

    Never below the smallest attainable p, never 0: where the fitted tail has ended, the counted p stays, and what is
    less extreme gets no smaller p than that.
    """
    beyond = (counted <= LARGEST_P) & (observed > fit.threshold)
    survival = _survival(np.where(beyond, observed - fit.threshold, 0.0), np.array(fit.shape), np.array(fit.scale))
    p = fit.exceedances / (fit.rows - 1.0) * survival
    p = np.where(beyond & (p > 0.0), np.maximum(p, smallest), counted)
    order = np.argsort(-observed, kind="stable")
    in_order = np.empty_like(p)
    in_order[order] = np.maximum.accumulate(p[order])
    return np.where(beyond, in_order, counted)


def _moments_fit(ordered: Floats) -> tuple[Floats, Floats]:
    """Shape and scale of each row of ascending exceedances by probability-weighted moments."""
    number = ordered.shape[1]
    plotting = (np.arange(1, number + 1) - 0.35) / number
    first = ordered.mean(axis=1)
    second = (ordered * (1.0 - plotting)).mean(axis=1)
    shape = first / (first - 2.0 * second) - 2.0
    scale = 2.0 * first * second / (first - 2.0 * second)
    return shape, scale


def _survival(x: Floats, shape: Floats, scale: Floats) -> Floats:
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        inside = np.maximum(1.0 - shape * x / scale, 0.0)
        return np.where(np.abs(shape) < 1e-8, np.exp(-x / scale), inside ** (1.0 / np.where(shape == 0, 1.0, shape)))


def _anderson_darling(ordered: Floats, shape: Floats, scale: Floats) -> Floats:
    number = ordered.shape[1]
    survival = np.clip(_survival(ordered, shape[:, None], scale[:, None]), 1e-12, 1.0 - 1e-12)
    weights = 2.0 * np.arange(1, number + 1) - 1.0
    terms = np.log1p(-survival) + np.log(survival[:, ::-1])
    return np.asarray(-number - (weights * terms).mean(axis=1))


def _fit_p(statistic: float, number: int, shape: float, seed: int) -> float:
    """Share of simulated samples of the fitted distribution, refitted, whose statistic is at least as large."""
    uniform = generator(seed, f"tail fit/{number}").random((SIMULATED_FITS, number))
    # Both the fit and the statistic do not depend on the scale.
    samples = np.sort(_quantile(uniform, shape), axis=1)
    shapes, scales = _moments_fit(samples)
    simulated = _anderson_darling(samples, shapes, scales)
    return float((1 + np.sum(simulated >= statistic)) / (SIMULATED_FITS + 1))


def _quantile(survival: Floats, shape: float) -> Floats:
    return np.asarray(-np.log(survival) if abs(shape) < 1e-8 else (1.0 - survival**shape) / shape)
