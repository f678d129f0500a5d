"""Band tables: one tested mean for each band, window and channel group."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.contrasts.contrast import Contrast
from tfstats.corrections.p_values import p_of_counts, tie_tolerance
from tfstats.findings.effect_sizes import effect_of
from tfstats.foundations.axes import closed_window
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import InputError, Problems, listed
from tfstats.normalization import averaging_for_chance
from tfstats.permutation.prepared_tests import prepared_test
from tfstats.permutation.schemes import Rows, planned_rows

__all__ = ["BAND_COLUMNS", "band_table"]

BAND_COLUMNS = (
    "test", "band", "window", "channels", "estimate", "unit", "low", "high", "statistic", "df", "p", "p_corrected",
    "effect_size", "effect_low", "effect_high",
)  # fmt: skip

AGAINST_BASELINE = "against_zero"
ALL_CHANNELS = "all"


@dataclass(frozen=True)
class _Cell:
    """One row of the table before its test: the compared value of each subject."""

    test: str
    band: str
    window: str
    channels: str
    contrast: Contrast


def band_table(
    maps: ConditionMaps,
    tests: Mapping[str, Callable[[ConditionMaps], Contrast]],
    bands: Mapping[str, Sequence[float] | Sequence[str]],
    windows: Mapping[str, Sequence[float]],
    *,
    channel_groups: Mapping[str, Sequence[str]] | None = None,
    permutations: int = 10_000,
    alpha: float = 0.05,
    seed: int = 0,
) -> pd.DataFrame:
    """How large is the change in each band, window and channel group, and does it exceed chance?

    For bands and windows fixed before seeing the data.  Each cell of the table is one mean a subject, tested by the
    same relabellings as the maps, two-sided, and corrected over the whole table by the step-down maximum.

    Parameters
    ----------
    maps : ConditionMaps
    tests : mapping of name to a function of maps that returns a contrast
        For instance {"recalled against missed": lambda maps: tfs.paired(maps, "recalled", "missed")}.
    bands : mapping of name to (low, high) in Hz, or to two names of bands
        Two names ask for the first band's relative power less the second's.
    windows : mapping of name to (start, stop) in s
    channel_groups : mapping of name to channels, or None
        None: the mean over all channels.
    permutations, seed
        As in `permutation_test`.
    alpha : float
        Level that the relabellings must be able to reach.

    Returns
    -------
    DataFrame
        Columns test, band, window, channels, estimate, unit, low, high (95 % t interval), statistic, df, p (two-sided
        permutation), p_corrected, effect_size, effect_low, effect_high.  `attrs["cautions"]` lists what to mind.

    Raises
    ------
    InputError
        Unknown bands or channels, empty windows, tests that may not be held against the baseline; all at once.

    Notes
    -----
    Averages against zero are taken over ratios (in decibels: the decibel of the mean ratio), whose bias shrinks by
    averaging; between conditions, and against a baseline that is a geometric mean, the mean of decibels.  Step-down
    maximum: Westfall & Young 1993, Resampling-Based Multiple Testing, algorithm 2.8 with |t| in place of p.  Memory:
    relabellings x rows of the table, 8 bytes each.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> values = np.random.default_rng(1).normal(size=(9, 2, 1, 3, 4)) + [[[[[1.0]]], [[[0.0]]]]]
    >>> maps = tfs.ConditionMaps(values, subjects=list("ABCDEFGHI"), conditions=["recalled", "missed"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="decibel")
    >>> table = tfs.band_table(maps, {"memory": lambda m: tfs.paired(m, "recalled", "missed")}, {"theta": (4, 8)},
    ...     {"early": (0.0, 0.2)})
    >>> table.loc[0, ["test", "band", "window", "channels", "unit"]].tolist()
    ['memory', 'theta', 'early', 'all', 'dB']
    """
    cells = _cells(maps, tests, _checked_bands(maps, bands), _checked_windows(maps, windows), channel_groups)
    rows = _tested(cells, permutations, alpha, seed)
    table = pd.DataFrame(rows, columns=list(BAND_COLUMNS))
    table.attrs["cautions"] = _shared_frequencies(maps, bands)
    return table


def _checked_bands(
    maps: ConditionMaps, bands: Mapping[str, Sequence[float] | Sequence[str]]
) -> dict[str, tuple[slice, ...]]:
    """By band, its frequencies, or those of the two bands whose difference it is."""
    problems = Problems()
    chosen: dict[str, tuple[slice, ...]] = {}
    plain: dict[str, slice] = {}
    for name, edges in bands.items():
        if not _of_names(edges):
            with problems.gathering():
                plain[name] = closed_window(maps.frequencies, edges, f'band "{name}"', "Hz")  # type: ignore[arg-type]
                chosen[name] = (plain[name],)
    for name, edges in bands.items():
        if _of_names(edges):
            unknown = [other for other in edges if other not in plain]
            if unknown or len(edges) != 2:
                problems.add(
                    f'band "{name}"',
                    f"two bands among {listed(plain)}",
                    listed(edges),
                    f"{closest(str(unknown[0]), plain) if unknown else ''}name two bands that have edges",
                )
            else:
                chosen[name] = (plain[str(edges[0])], plain[str(edges[1])])
    if not bands:
        problems.add("band_table, bands", "at least one band", "none", 'write {"theta": (4, 8)}')
    problems.raise_if_any()
    return {name: chosen[name] for name in bands}


def _of_names(edges: Sequence[float] | Sequence[str]) -> bool:
    return not isinstance(edges, str) and len(edges) > 0 and all(isinstance(edge, str) for edge in edges)


def _checked_windows(maps: ConditionMaps, windows: Mapping[str, Sequence[float]]) -> dict[str, slice]:
    problems = Problems()
    chosen = {}
    for name, edges in windows.items():
        with problems.gathering():
            chosen[name] = closed_window(maps.times, edges, f'window "{name}"', "s")
    if not windows:
        problems.add("band_table, windows", "at least one window", "none", 'write {"early": (0.2, 0.6)}')
    problems.raise_if_any()
    return chosen


def _shared_frequencies(maps: ConditionMaps, bands: Mapping[str, Sequence[float] | Sequence[str]]) -> list[str]:
    plain = {
        name: set(range(*closed_window(maps.frequencies, edges, name, "Hz").indices(len(maps.frequencies))))  # type: ignore[arg-type]
        for name, edges in bands.items()
        if not _of_names(edges)
    }
    names = list(plain)
    said = []
    for place, first in enumerate(names):
        for second in names[place + 1 :]:
            shared = sorted(plain[first] & plain[second])
            if shared:
                at = ", ".join(f"{maps.frequencies[index]:g}" for index in shared)
                said.append(f'The bands "{first}" and "{second}" share {at} Hz, since both edges belong to a band.')
    return said


def _cells(
    maps: ConditionMaps,
    tests: Mapping[str, Callable[[ConditionMaps], Contrast]],
    bands: Mapping[str, tuple[slice, ...]],
    windows: Mapping[str, slice],
    groups: Mapping[str, Sequence[str]] | None,
) -> list[_Cell]:
    named = dict(groups) if groups else {ALL_CHANNELS: list(maps.channels)}
    problems = Problems()
    cells = []
    averaged: dict[tuple[str, str], ConditionMaps] = {}

    for_chance = "ratios" if maps.baseline is None else averaging_for_chance(maps.baseline)

    def grouped(group: str, of: str) -> ConditionMaps:
        if (group, of) not in averaged:
            averaged[group, of] = maps.mean_across("channels", {group: named[group]}, of=of)
        return averaged[group, of]

    def mean_of(group: str, band: str, window: str, of: str) -> ConditionMaps:
        means = [_mean(grouped(group, of), frequencies, windows[window], of) for frequencies in bands[band]]
        return means[0] if len(means) == 1 else _difference(means[0], means[1], band)

    for test, make in tests.items():
        for group in named:
            for band in bands:
                for window in windows:
                    with problems.gathering():
                        # As for chance first: only the contrast says whether it is held against the baseline.
                        contrast = make(mean_of(group, band, window, for_chance))
                        if contrast.design != AGAINST_BASELINE:
                            contrast = make(mean_of(group, band, window, "units"))
                        cells.append(_Cell(test, band, window, group, contrast))
    if not tests:
        problems.add(
            "band_table, tests", "at least one test", "none", "give a function of maps that returns a contrast"
        )
    problems.raise_if_any()
    return cells


def _mean(maps: ConditionMaps, frequencies: slice, times: slice, of: str) -> ConditionMaps:
    band = (maps.frequencies[frequencies.start], maps.frequencies[frequencies.stop - 1])
    window = (maps.times[times.start], maps.times[times.stop - 1])
    return maps.select(frequencies=band, times=window).mean_across("frequencies", of=of).mean_across("times", of=of)


def _difference(first: ConditionMaps, second: ConditionMaps, band: str) -> ConditionMaps:
    """Relative power of one band less that of another, where the 1/f slope is gone."""
    return ConditionMaps(
        first.values - second.values,
        subjects=first.subjects,
        conditions=first.conditions,
        channels=first.channels,
        frequencies=first.frequencies,
        times=first.times,
        unit=first.unit,
        trial_counts=first.trial_counts,
        participants=first.participants,
        baseline=first.baseline,
        history=(*first.history, f"The compared band was the difference {band}."),
        of_differences=True,
    )


def _tested(cells: list[_Cell], permutations: int, alpha: float, seed: int) -> list[tuple[object, ...]]:
    """Test all cells that share subjects and scheme together, so that the correction knows their correlation."""
    p = np.full(len(cells), np.nan)
    corrected = np.full(len(cells), np.nan)
    effects = [effect_of(cell.contrast, cell.contrast.values[..., 0, 0, :]) for cell in cells]
    families: dict[tuple[object, ...], list[int]] = {}
    for place, cell in enumerate(cells):
        if np.isfinite(cell.contrast.values).all() and _varies(cell.contrast):
            families.setdefault(_family(cell.contrast), []).append(place)
    for members in families.values():
        first = cells[members[0]].contrast
        rows = planned_rows(first, "two-sided", permutations, seed)
        if rows.smallest_p > alpha:
            raise InputError(
                f"band_table: expected relabellings that can reach p = {alpha:g}, got a smallest p of "
                f"{rows.smallest_p:.4g}; add {first.unit_kind}s or relabellings."
            )
        extremeness = _extremeness([cells[place].contrast for place in members], rows)
        tolerance = tie_tolerance(first.values.dtype)
        observed = extremeness[0] * (1.0 - tolerance)
        p[members] = p_of_counts((extremeness >= observed).sum(axis=0), rows.count)
        corrected[members] = _step_down(extremeness, tolerance)
    return [
        (
            cell.test, cell.band, cell.window, cell.channels, effect.estimate[0], cell.contrast.estimate_unit,
            effect.low[0], effect.high[0], effect.statistic[0], effect.df[0], p[place], corrected[place],
            effect.size[0], effect.size_low[0], effect.size_high[0],
        )
        for place, (cell, effect) in enumerate(zip(cells, effects))
    ]  # fmt: skip


def _varies(contrast: Contrast) -> bool:
    return bool(np.any(contrast.values != (0.0 if contrast.labels is None else contrast.values[0])))


def _family(contrast: Contrast) -> tuple[object, ...]:
    """Cells with the same family share subjects, relabellings, statistic and degrees of freedom."""
    arrays = (contrast.labels, contrast.predictor, contrast.nuisance, contrast.components)
    return (
        contrast.unit_names,
        contrast.statistic,
        contrast.relabelling,
        contrast.rank,
        tuple(None if array is None else array.tobytes() for array in arrays),
    )


def _extremeness(contrasts: Sequence[Contrast], rows: Rows) -> NDArray[np.float64]:
    """(relabellings, cells): the cells of a family laid side by side as the times of one small map."""
    together = replace(
        contrasts[0],
        values=np.concatenate([contrast.values for contrast in contrasts], axis=-1),
        times=np.arange(len(contrasts), dtype=np.float64),
    )
    return np.abs(prepared_test(together).statistic_rows(rows))


def _step_down(extremeness: NDArray[np.float64], tolerance: float) -> NDArray[np.float64]:
    """Adjusted p: the i-th largest observed value against the maximum over itself and all smaller ones, kept monotone."""
    order = np.argsort(-extremeness[0], kind="stable")
    ordered = extremeness[:, order]
    maxima = np.maximum.accumulate(ordered[:, ::-1], axis=1)[:, ::-1]
    shares = (maxima >= ordered[0] * (1.0 - tolerance)).mean(axis=0)
    adjusted = np.empty(shares.size)
    adjusted[order] = np.maximum.accumulate(shares)
    return adjusted
