"""Maps without what is common to all frequencies."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.foundations.errors import Problems, refusal
from tfstats.normalization.power_law import kept_frequencies
from tfstats.normalization.robust_lines import robust_lines

__all__ = ["OPPOSITE_SIGN", "broadband_adjusted"]

OPPOSITE_SIGN = (
    "The maps are broadband-adjusted, which is a model: a real change of one band leaves a residue of the opposite sign at "
    "other frequencies, so clusters of the opposite sign carry no claim."
)
WHERE = "broadband_adjusted"


def broadband_adjusted(maps: ConditionMaps, *, exclude: Sequence[Sequence[float]] = ()) -> ConditionMaps:
    """What is left of each condition's map once a shift or tilt of the whole 1/f spectrum is taken out?

    At each time, the straight line over log frequency that the map of one subject, condition and channel follows is
    subtracted.  It is a model, not a measurement: a real fall of alpha pulls the line down with it and leaves a
    residue of the opposite sign at the other frequencies, which must not be read as an effect of its own.  Look at the
    ordinary maps beside it.

    Parameters
    ----------
    maps : ConditionMaps
        In decibels.
    exclude : sequence of (low, high), Hz
        Closed bands that have no say in the line, though it is subtracted there too: the band of interest, which
        makes its residue elsewhere smaller.

    Returns
    -------
    ConditionMaps
        In decibels; NaN where fewer than 3 frequencies that count are there at that time.  Contrasts are made of these
        maps afterwards: each condition's line comes from its own map, so swapping two conditions turns the sign of
        their contrast and nothing else, and the sign flips stay valid.

    Raises
    ------
    InputError
        Maps in another unit, of differences, or with fewer than 3 frequencies outside the excluded bands.

    Notes
    -----
    The line is robust: the median of the slopes between all pairs of frequencies, and the median of what is left
    (Theil 1950; Sen 1968); up to 29 % of the frequencies cannot turn it over, but fewer still pull it a little.
    No randomness.  Time about 5 ns x frequencies^2 / 2 for each time of each map.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> frequencies = np.array([2.0, 4.0, 8.0, 16.0, 32.0])
    >>> tilt = 1.0 - 0.5 * np.log2(frequencies)
    >>> maps = tfs.ConditionMaps(tilt[None, None, None, :, None] + np.array([0, 0, 3, 0, 0])[:, None], subjects=["S1"],
    ...     conditions=["recalled"], channels=["Fz"], frequencies=frequencies, times=[0.3], unit="decibel")
    >>> np.round(tfs.broadband_adjusted(maps).values.ravel(), 2) + 0.0
    array([0., 0., 3., 0., 0.])
    """
    if not isinstance(maps, ConditionMaps):
        raise refusal(f"{WHERE}, maps", "ConditionMaps", type(maps).__name__, "make them with condition_maps")
    problems = Problems()
    if maps.unit != "decibel":
        problems.add(
            f"{WHERE}, maps", 'maps in unit "decibel"', f'unit "{maps.unit}"', 'use a Baseline with unit "decibel"'
        )
    if maps.of_differences:
        problems.add(
            f"{WHERE}, maps",
            "the maps of conditions",
            "differences of conditions",
            "adjust the maps first and make the contrast of them afterwards",
        )
    kept = np.ones(maps.frequencies.size, dtype=bool)
    with problems.gathering():
        kept = kept_frequencies(maps.frequencies, exclude, WHERE)
    problems.raise_if_any()
    places = np.log10(maps.frequencies)
    adjusted = np.empty(maps.values.shape, dtype=maps.values.dtype)
    for subject, values in enumerate(maps.values):
        exact = values.astype(np.float64)
        columns = np.ascontiguousarray(np.moveaxis(exact, -2, -1))  # (conditions, channels, times, frequencies)
        slope, height = robust_lines(columns[..., kept], places[kept])
        adjusted[subject] = exact - height[..., None, :] - slope[..., None, :] * places[:, None]
    without = ""
    if len(exclude):
        without = ", to which " + " and ".join(f"{low:g} to {high:g} Hz" for low, high in exclude) + " did not count"
    sentence = (
        "At each time of each condition's map the robust line over log frequency (median of all pairwise slopes) was "
        f"subtracted{without} (broadband-adjusted maps)."
    )
    return maps._changed(
        values=adjusted,
        history=(*maps.history, sentence),
        cautions=tuple(dict.fromkeys((*maps.cautions, OPPOSITE_SIGN))),
    )
