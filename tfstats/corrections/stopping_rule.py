"""How many relabellings until a p-value is on one side of alpha: sequential Monte Carlo tests.

Gandy 2009, J. Am. Stat. Assoc. 104:1504: the number of relabellings at least as extreme as the observed value is a
random walk; it stops at boundaries that the walk of a test with p = alpha exactly crosses with a probability of at most
the resampling risk, spent as risk n / (1000 + n).  The boundaries are looked at on a fixed grid only, which can only lower
the risk, so that neither threads nor batches decide when a test stops.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, special

__all__ = ["GRID", "RESAMPLING_RISK", "boundaries", "boundaries_on_grid", "confidence_sequence"]

Floats = NDArray[np.float64]

RESAMPLING_RISK = 1e-3
GRID = 250
"""Relabellings between two looks."""

SPENDING = 1000.0


def boundaries_on_grid(alpha: float, risk: float, most: int) -> Iterator[tuple[int, int, int]]:
    """(n, low, high) at each look: a count of at most `low` resolves p < alpha, one of at least `high` p > alpha.

    A low of -1 cannot be reached yet.  Computed look by look, since most tests stop early: about 20 microseconds a draw.
    """
    return ((n, low, high) for n, low, high in boundaries(alpha, risk, most) if n % GRID == 0 or n == most)


def boundaries(alpha: float, risk: float, most: int) -> Iterator[tuple[int, int, int]]:
    """The boundaries after each draw, by the distribution of the walk that has not stopped under p = alpha."""
    weights = np.ones(1)  # probability of each count, and of not having stopped
    first = 0  # the count that weights[0] belongs to
    crossed_low = crossed_high = 0.0
    for n in range(1, most + 1):
        moved = np.zeros(weights.size + 1)
        moved[:-1] = weights * (1.0 - alpha)
        moved[1:] += weights * alpha
        spent = risk * n / (SPENDING + n)
        from_below = np.cumsum(moved)
        from_above = np.cumsum(moved[::-1])
        # The most counts that may be cut off at either end without spending more than is allowed so far.
        cut_low = int(np.searchsorted(from_below, spent - crossed_low, side="right"))
        cut_high = int(np.searchsorted(from_above, spent - crossed_high, side="right"))
        if cut_low:
            crossed_low += float(from_below[cut_low - 1])
        if cut_high:
            crossed_high += float(from_above[cut_high - 1])
        yield n, first + cut_low - 1, first + moved.size - cut_high
        weights = moved[cut_low : moved.size - cut_high]
        first += cut_low


def confidence_sequence(successes: int, trials: int, confidence: float = 0.95) -> tuple[float, float]:
    """Bounds of p that hold at every n at once, so also where the test chose to stop.

    The set of p with (n + 1) C(n, x) p^x (1 - p)^(n - x) > 1 - confidence (Robbins 1970, Ann. Math. Stat. 41:1397; Lai
    1976, Ann. Stat. 4:265): a mixture over uniform p is a martingale, and crosses 1 / (1 - confidence) rarely.
    """
    level = np.log(1.0 - confidence)
    constant = np.log(trials + 1.0) + _log_choose(trials, successes)

    def height(p: float) -> float:
        return float(constant + special.xlogy(successes, p) + special.xlog1py(trials - successes, -p) - level)

    peak = successes / trials
    low = 0.0 if successes == 0 else optimize.brentq(height, 1e-300, peak) if height(1e-300) < 0 else 0.0
    high = 1.0 if successes == trials else optimize.brentq(height, peak, 1.0 - 1e-15)
    return float(low), float(high)


def _log_choose(n: int, k: int) -> float:
    return float(special.gammaln(n + 1.0) - special.gammaln(k + 1.0) - special.gammaln(n - k + 1.0))
