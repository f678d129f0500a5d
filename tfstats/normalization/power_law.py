"""The power law of a spectrum: exponent and level of 1/f^exponent, and a bend if asked for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfstats.foundations.axes import checked_frequencies, closed_window
from tfstats.foundations.checks import one_of
from tfstats.foundations.errors import InputError, Problems, refusal
from tfstats.normalization.bent_spectra import FEWEST_FOR_A_BEND, bent_spectra
from tfstats.normalization.robust_lines import FEWEST_POINTS, robust_lines

__all__ = ["SCALINGS", "PowerLawFit", "fit_power_law", "kept_frequencies", "scaling_problem"]

SCALINGS = ("density", "amplitude")

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class PowerLawFit:
    """The power law of each spectrum; every array has the shape of the spectra without their last axis.

    Parameters
    ----------
    exponent : array
        White noise 0, pink 1, Brownian 2.  With a bend: above it.
    level_at_1_hz : array
        log10 of the fitted power at 1 Hz, in the unit of the power (extrapolated where 1 Hz is outside the frequencies).
    fit_quality : array
        R squared: share of the variance of log10 power over the fitted frequencies that the fit explains.  Near 0 for a
        flat spectrum, however well it is fitted: look at `residual_spread` too.
    residual_spread : array, dB
        1.4826 x the median absolute distance of log10 power from the fit, x 10: a standard deviation that
        oscillations do not inflate.
    bend_frequency : array, Hz, or None
        None where no bend was asked for; NaN for spectra without one.
    frequencies : array, Hz
        Those fitted.
    """

    exponent: Any
    level_at_1_hz: Any
    fit_quality: Any
    residual_spread: Any
    bend_frequency: Any
    frequencies: Floats


def fit_power_law(
    spectrum: ArrayLike,
    frequencies: ArrayLike,
    *,
    scaling: str | None = "density",
    exclude: Sequence[Sequence[float]] = (),
    bend: bool = False,
    wavelet_cycles: ArrayLike | None = None,
) -> PowerLawFit:
    """How steeply does power fall with frequency, and how high does it lie?

    log10 power = level at 1 Hz - exponent x log10 frequency.  Not for spectra relative to a baseline, whose power law
    is divided out.

    Parameters
    ----------
    spectrum : array (..., frequencies)
        Linear power above 0, averaged over trials and times as far as wanted; NaN is left out.
    frequencies : array, Hz
        Ascending, any spacing.
    scaling : "density" or "amplitude"
        Of the power: per Hz (wavelets of unit energy, periodograms), or wavelets of unit gain at their centre, whose
        bandwidth grows with frequency: 1 is added to their exponent, so that both return that of the density.
    exclude : sequence of (low, high), Hz
        Bands that are left out of the fit, closed: those with an oscillation, line noise.
    bend : bool
        Fit log10 power = constant - log10(1 + (f / bend frequency)^exponent) where that is better than a line: flat
        below the bend, steep above.
    wavelet_cycles : float or array, optional
        With scaling "amplitude", where the cycles differ between frequencies: bandwidth is frequency / cycles.

    Returns
    -------
    PowerLawFit

    Raises
    ------
    InputError
        An unknown scaling, None included; frequencies and spectrum of different lengths; power that is not above 0;
        excluded bands that leave fewer than 3 frequencies (5 with a bend).

    Notes
    -----
    The line is robust: the slope is the median of the slopes between all pairs of frequencies, the level the median of
    what is left (Theil 1950, Proc. K. Ned. Akad. Wet. 53; Sen 1968, J. Am. Stat. Assoc. 63:1379).  Up to 29 % of the
    frequencies may carry oscillations before the line breaks down, though it is pulled a little by fewer: exclude those
    that are known.  The bend is fitted by least squares of the soft absolute value of the residuals, from the best
    point of a grid, and kept where it lies inside the frequencies and lowers the Bayesian information criterion of
    absolute residuals; else the values are the line's and the bend frequency is NaN.

    The decibel (or any logarithm) of a mean over few trials lies too low, by the same at all frequencies: the
    exponent does not mind, the level does.

    No randomness.  Time about 5 ns x frequencies^2 / 2 a spectrum; with a bend some 10 ms a spectrum.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> frequencies = np.arange(1, 41)
    >>> fit = tfs.fit_power_law(100 / frequencies**1.5, frequencies)
    >>> round(float(fit.exponent), 6), round(float(fit.level_at_1_hz), 6)
    (1.5, 2.0)
    """
    where = "fit_power_law"
    problems = Problems()
    axis = np.ones(1)
    power = np.ones(1)
    cycles = np.ones(1)
    with problems.gathering():
        axis = checked_frequencies(frequencies, f"{where}, frequencies")
    with problems.gathering():
        power = _checked_spectrum(spectrum, where)
    if scaling is None:
        problems.found.append(str(scaling_problem(where)))
    else:
        with problems.gathering():
            one_of(scaling, SCALINGS, f"{where}, scaling")
    problems.raise_if_any()
    if power.shape[-1] != axis.size:
        problems.add(
            f"{where}, spectrum",
            f"a last axis of {axis.size}, one value a frequency",
            f"shape {power.shape}",
            "put the frequencies last",
        )
    with problems.gathering():
        cycles = _checked_cycles(wavelet_cycles, axis.size, where)
    kept = np.ones(axis.size, dtype=bool)
    with problems.gathering():
        kept = kept_frequencies(axis, exclude, where, fewest=FEWEST_FOR_A_BEND if bend else FEWEST_POINTS)
    problems.raise_if_any()
    heights = np.log10(power[..., kept])
    if scaling == "amplitude":
        # Of unit gain: density x bandwidth, and bandwidth is frequency / cycles but for a constant.
        heights = heights - np.log10(axis[kept] / (cycles / np.exp(np.mean(np.log(cycles))))[kept])
    return _fitted(heights, axis[kept], bool(bend))


def _fitted(heights: Floats, frequencies: Floats, bend: bool) -> PowerLawFit:
    x = np.log10(frequencies)
    slope, level = robust_lines(heights, x)
    exponent = -slope
    residuals = heights - (level[..., None] + slope[..., None] * x)
    bends = None
    if bend:
        bent = bent_spectra(heights, frequencies, exponent, residuals)
        bends, exponent, level, residuals = bent.frequency, bent.exponent, bent.level_at_1_hz, bent.residuals
    quality, spread = _quality(heights, residuals)
    return PowerLawFit(
        exponent[()], level[()], quality[()], spread[()], None if bends is None else bends[()], frequencies
    )


def _quality(heights: Floats, residuals: Floats) -> tuple[Floats, Floats]:
    there = ~np.isnan(residuals)
    number = there.sum(axis=-1)
    known = number >= FEWEST_POINTS
    some = np.maximum(number, 1)
    filled = np.where(there, heights, 0.0)
    centred = np.where(there, heights - (filled.sum(axis=-1) / some)[..., None], 0.0)
    total = (centred**2).sum(axis=-1)
    left = np.where(there, residuals**2, 0.0).sum(axis=-1)
    with np.errstate(divide="ignore", invalid="ignore"):
        quality = np.where(known & (total > 0), 1.0 - left / total, np.nan)
    spread = np.full(known.shape, np.nan)
    if known.any():
        # nanmedian goes row by row.
        median = np.median if there[known].all() else np.nanmedian
        spread[known] = 14.826 * median(np.abs(residuals[known]), axis=-1)
    return quality, spread


def _checked_spectrum(spectrum: ArrayLike, where: str) -> Floats:
    place = f"{where}, spectrum"
    try:
        array = np.asarray(spectrum)
    except ValueError as error:
        raise refusal(place, "an array (..., frequencies)", "rows of unequal length", "fill gaps with NaN") from error
    if array.dtype.kind not in "fiu" or array.ndim == 0 or array.size == 0:
        raise refusal(
            place,
            "real numbers (..., frequencies)",
            f"type {array.dtype}, shape {array.shape}",
            "give linear power, frequencies last",
        )
    exact = array.astype(np.float64)
    wrong = int(np.count_nonzero((exact <= 0) | np.isinf(exact)))
    if wrong:
        raise refusal(
            place,
            "finite linear power above 0, or NaN",
            f"{wrong} values at or below 0 or infinite",
            "turn decibels back into power, and leave out what is relative to a baseline",
        )
    return exact


def _checked_cycles(cycles: ArrayLike | None, frequencies: int, where: str) -> Floats:
    array = np.atleast_1d(np.asarray(1.0 if cycles is None else cycles, dtype=np.float64))
    if array.ndim != 1 or array.size not in (1, frequencies) or not np.all(array > 0):
        raise refusal(
            f"{where}, wavelet_cycles",
            f"one positive number, or one for each of the {frequencies} frequencies",
            f"shape {array.shape}, smallest {array.min() if array.size else float('nan'):g}",
            "give the cycles of the wavelets",
        )
    return np.broadcast_to(array, (frequencies,)).astype(np.float64)


def scaling_problem(where: str) -> InputError:
    """The refusal of power whose scaling nobody knows."""
    return refusal(
        f"{where}, scaling",
        f"{' or '.join(f'{chr(34)}{name}{chr(34)}' for name in SCALINGS)}, known for the power",
        "None (a 1/f signal has exponent 1 by the first and 0 by the second)",
        'find out how the wavelets were scaled and state it ("density": unit energy, "amplitude": unit gain at the centre)',
    )


def kept_frequencies(
    frequencies: Floats, exclude: Sequence[Sequence[float]], where: str, *, fewest: int = FEWEST_POINTS
) -> NDArray[np.bool_]:
    """Which frequencies lie in none of the excluded closed bands; refused when too few are left."""
    place = f"{where}, exclude"
    kept = np.ones(frequencies.size, dtype=bool)
    bands: list[Any] = list(exclude) if isinstance(exclude, (list, tuple, np.ndarray)) else [exclude]
    if any(np.ndim(band) != 1 for band in bands):
        raise refusal(place, "a list of bands (low, high) in Hz", repr(exclude), "write [(8, 13)] for instance")
    problems = Problems()
    for band in bands:
        # A band beside the frequencies leaves nothing out, but must be a band.
        with problems.gathering():
            low, high = _edges(band, place)
            inside = (frequencies >= low) & (frequencies <= high)
            if inside.any():
                kept[closed_window(frequencies, (low, high), place, "Hz")] = False
    problems.raise_if_any()
    left = int(np.count_nonzero(kept))
    if left < fewest:
        raise refusal(
            f"{where}, frequencies",
            f"at least {fewest} outside the excluded bands",
            f"{left} of {frequencies.size}",
            "give more frequencies or leave out less",
        )
    return kept


def _edges(band: Sequence[float], place: str) -> tuple[float, float]:
    try:
        low, high = (float(edge) for edge in band)
    except (TypeError, ValueError) as error:
        raise refusal(place, "two numbers, low and high in Hz", repr(band), "write both edges") from error
    if not low <= high:
        raise refusal(
            place, "a low edge not above the high one, in Hz", f"{low:g} to {high:g}", "exchange the two edges"
        )
    return low, high
