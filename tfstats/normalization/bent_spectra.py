"""Spectra that are flat below a bend and fall as a power law above it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["FEWEST_FOR_A_BEND", "BentSpectra", "bent_spectra"]

Floats = NDArray[np.float64]

FEWEST_FOR_A_BEND = 5
"""Three parameters, and something to judge them by."""

STEEPEST = 8.0
_GRID_BENDS = 40
_GRID_EXPONENTS = 33
_SMALLEST_SCALE = 1e-6
"""Of residuals, log10 power: keeps a perfect fit from dividing by nothing."""


@dataclass(frozen=True)
class BentSpectra:
    """Of each spectrum: the bend in Hz (NaN: none), exponent, log10 power at 1 Hz, and what is left (..., frequencies)."""

    frequency: Floats
    exponent: Floats
    level_at_1_hz: Floats
    residuals: Floats


def bent_spectra(heights: Floats, frequencies: Floats, exponent: Floats, residuals: Floats) -> BentSpectra:
    """The bent power law of each spectrum, where it is better than the line whose exponent and residuals are given.

    Parameters
    ----------
    heights : array (..., frequencies)
        log10 power; NaN is left out.
    """
    rows = heights.reshape(-1, frequencies.size)
    of_lines = residuals.reshape(rows.shape)
    level = (heights - residuals + exponent[..., None] * np.log10(frequencies)).reshape(rows.shape)
    made = BentSpectra(np.full(len(rows), np.nan), exponent.reshape(-1).copy(), _first_known(level), of_lines.copy())
    for row, height in enumerate(rows):
        there = ~np.isnan(height)
        if np.count_nonzero(there) < FEWEST_FOR_A_BEND:
            continue
        bend, steep, constant = _fit_one(height[there], frequencies[there])
        left = height - (constant - _fall(np.log(frequencies), np.log(bend), steep))
        inside = frequencies[there][0] < bend < frequencies[there][-1]
        if inside and _better(of_lines[row, there], left[there]):
            made.frequency[row], made.exponent[row] = bend, steep
            made.level_at_1_hz[row] = constant - _fall(np.zeros(1), np.log(bend), steep)[0]
            made.residuals[row] = left
    shape = heights.shape[:-1]
    return BentSpectra(
        made.frequency.reshape(shape),
        made.exponent.reshape(shape),
        made.level_at_1_hz.reshape(shape),
        made.residuals.reshape(heights.shape),
    )


def _first_known(level: Floats) -> Floats:
    """The line's height at 1 Hz, which all frequencies that are there agree on."""
    there = ~np.isnan(level)
    chosen = np.take_along_axis(level, there.argmax(axis=1)[:, None], axis=1)
    return np.asarray(chosen[:, 0])


def _fall(log_frequency: Floats, log_bend: float, exponent: float) -> Floats:
    """log10(1 + (f / bend)^exponent), without overflow."""
    return np.asarray(np.logaddexp(0.0, exponent * (log_frequency - log_bend)) / np.log(10.0))


def _fit_one(height: Floats, frequencies: Floats) -> tuple[float, float, float]:
    """Bend, exponent and constant with the smallest sum of soft absolute residuals."""
    from scipy.optimize import least_squares

    x = np.log(frequencies)
    bends = np.linspace(x[0], x[-1], _GRID_BENDS)
    steepness = np.linspace(0.0, STEEPEST, _GRID_EXPONENTS)[1:]
    falls = np.logaddexp(0.0, steepness[None, :, None] * (x - bends[:, None, None])) / np.log(10.0)
    constants = np.median(height + falls, axis=2)
    sums = np.abs(height + falls - constants[..., None]).mean(axis=2)
    place = np.unravel_index(int(np.argmin(sums)), sums.shape)
    start = [bends[place[0]], steepness[place[1]], constants[place]]

    def left(parameters: Floats) -> Floats:
        return height - (parameters[2] - _fall(x, parameters[0], parameters[1]))

    def slopes(parameters: Floats) -> Floats:
        bend, steep, _ = parameters
        share = 1.0 / (1.0 + np.exp(np.clip(-steep * (x - bend), -700, 700)))
        scaled = share / np.log(10.0)
        return np.stack([-steep * scaled, (x - bend) * scaled, -np.ones(x.size)], axis=1)

    scale = max(float(sums[place]), _SMALLEST_SCALE)
    bounds = ([x[0] - 2.0, 1e-3, -np.inf], [x[-1] + 2.0, STEEPEST, np.inf])
    found = least_squares(
        left, start, jac=slopes, bounds=bounds, loss="soft_l1", f_scale=scale, xtol=1e-12, ftol=1e-12, gtol=1e-12
    ).x
    return float(np.exp(found[0])), float(found[1]), float(found[2])


def _better(line: Floats, bent: Floats) -> bool:
    """By the Bayesian information criterion for residuals with a Laplace distribution; the bend costs one parameter."""
    number = line.size
    size_of_line = max(float(np.abs(line).mean()), _SMALLEST_SCALE)
    size_of_bent = max(float(np.abs(bent).mean()), _SMALLEST_SCALE)
    return bool(2.0 * number * np.log(size_of_line / size_of_bent) > np.log(number))
