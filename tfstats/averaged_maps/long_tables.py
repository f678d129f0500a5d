"""Band power as a tidy table: one row a subject, condition, channel or group, band and window."""

from __future__ import annotations

import importlib
from collections.abc import Mapping, Sequence
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.safe_writing import written_whole
from tfstats.foundations.units import symbol_of

__all__ = ["long_table", "write_table"]

COLUMNS = ("subject", "condition", "channel", "band", "window", "value", "unit", "trials")


def long_table(
    maps: ConditionMaps,
    bands: Mapping[str, Sequence[float] | Sequence[str]],
    windows: Mapping[str, Sequence[float]],
    channel_groups: Mapping[str, Sequence[str]] | None = None,
    *,
    of: str = "units",
) -> pd.DataFrame:
    """What is each subject's relative power in each condition, channel, band and window?

    For models and figures made elsewhere; `band_table` tests the same means.

    Parameters
    ----------
    maps : ConditionMaps
    bands : mapping of name to (low, high) in Hz, or to two names of bands
        Two names ask for the first band's value less the second's.
    windows : mapping of name to (start, stop) in s
    channel_groups : mapping of name to channels, optional
        One row a group, its channels averaged; None: one row a channel.
    of : "units" or "ratios"
        How decibels are averaged: see `ConditionMaps.mean_across`.

    Returns
    -------
    DataFrame
        Columns subject, condition, channel (the group's name with groups), band, window, value, unit, trials (None
        where not known), then those of the participants table.  Subjects vary slowest, windows fastest.

    Raises
    ------
    InputError
        Empty bands or windows, channels and bands that are not there; all at once.

    Notes
    -----
    A point that is NaN in one map is left out of the mean in every map.  The mean runs over channels of a group first,
    then over frequencies, then over times.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.ones((2, 1, 1, 3, 2)), subjects=["S1", "S2"], conditions=["recalled"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1], unit="decibel")
    >>> tfs.long_table(maps, {"theta": (4, 8)}, {"early": (0.0, 0.1)})[["subject", "band", "value", "unit"]]
      subject   band  value unit
    0      S1  theta    1.0   dB
    1      S2  theta    1.0   dB
    """
    values, channels = _means(maps, bands, windows, channel_groups, of)
    axes = (maps.subjects, maps.conditions, channels, tuple(bands), tuple(windows))
    index = pd.MultiIndex.from_product(axes, names=COLUMNS[:5])
    table = pd.DataFrame({"value": values.ravel()}, index=index).reset_index()
    table["unit"] = symbol_of(maps.unit)
    per_map = len(channels) * len(bands) * len(windows)
    counts = None if maps.trial_counts is None else maps.trial_counts.to_numpy().ravel()
    table["trials"] = pd.Series([None] * len(table), dtype=object) if counts is None else np.repeat(counts, per_map)
    if maps.participants is None:
        return table
    rows = np.repeat(np.arange(len(maps.subjects)), len(table) // len(maps.subjects))
    for name in maps.participants.columns:
        if name != "participant_id":
            own = name if name not in table.columns else f"participant_{name}"
            table[own] = maps.participants[name].to_numpy()[rows]
    return table


def _means(
    maps: ConditionMaps,
    bands: Mapping[str, Sequence[float] | Sequence[str]],
    windows: Mapping[str, Sequence[float]],
    groups: Mapping[str, Sequence[str]] | None,
    of: str,
) -> tuple[Any, tuple[str, ...]]:
    """(subjects, conditions, channels, bands, windows), and the names of the channels."""
    problems = Problems()
    for name, wanted in (("bands", bands), ("windows", windows)):
        if not isinstance(wanted, Mapping) or not wanted:
            problems.add(
                f"long_table, {name}", f"a mapping of name to edges of {name}", repr(wanted), "name at least one"
            )
    problems.raise_if_any()
    plain = {name: edges for name, edges in bands.items() if len(edges) == 2 and not isinstance(edges[0], str)}
    for name, edges in bands.items():
        unknown = [str(one) for one in edges if name not in plain and one not in plain]
        if unknown or len(edges) != 2:
            problems.add(
                f'long_table, band "{name}"', f"two edges in Hz, or two bands among {listed(plain)}", repr(edges),
                f"{closest(unknown[0], plain) if unknown else ''}correct it",
            )  # fmt: skip
    parts: dict[str, dict[str, Any]] = {name: {} for name in plain}
    channels: tuple[str, ...] = maps.channels
    grouped = maps
    with problems.gathering():
        grouped = maps if groups is None else maps.mean_across("channels", groups, of=of)
        channels = grouped.channels
    for band, edges in plain.items():
        for window, times in windows.items():
            with problems.gathering():
                part = grouped.mean_across("frequencies", {band: edges}, of=of)
                parts[band][window] = part.mean_across("times", {window: times}, of=of).values[..., 0, 0]
    problems.raise_if_any()
    made = {band: np.stack([parts[band][window] for window in windows], axis=-1) for band in plain}
    for band, names in bands.items():
        if band not in plain:
            made[band] = made[str(names[0])] - made[str(names[1])]
    return np.stack([made[band] for band in bands], axis=3), channels


def write_table(path: str | PathLike[str], table: pd.DataFrame) -> None:
    """Write a table for other programs.

    Parameters
    ----------
    path : path
        `.csv` or `.tsv` (UTF-8, numbers with all their digits, "n/a" where missing) or `.parquet` (needs pyarrow).
    table : DataFrame

    Raises
    ------
    InputError
        Another ending, or no pyarrow for parquet.

    Examples
    --------
    >>> import pandas as pd, pathlib, tempfile, tfstats as tfs
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     tfs.write_table(pathlib.Path(folder) / "bands.csv", pd.DataFrame({"subject": ["S1"], "value": [0.1]}))
    ...     print((pathlib.Path(folder) / "bands.csv").read_text(encoding="utf-8"))
    subject,value
    S1,0.1
    <BLANKLINE>
    """
    place, where = Path(path), f"write_table, {path}"
    ending = place.suffix.lower()
    if ending not in (".csv", ".tsv", ".parquet"):
        endings = listed((".csv", ".tsv", ".parquet"))
        raise refusal(where, f"a file that ends in one of {endings}", f'"{place.suffix}"', "change its ending")
    if ending == ".parquet":
        try:
            importlib.import_module("pyarrow")
        except ImportError as error:
            raise refusal(
                where, "pyarrow for parquet files", "no pyarrow", "run: python -m pip install pyarrow, or write .csv"
            ) from error
    with written_whole(place) as temporary:
        if ending == ".parquet":
            table.to_parquet(temporary, engine="pyarrow", index=False)
        else:
            separator = "," if ending == ".csv" else "\t"
            table.to_csv(temporary, sep=separator, index=False, encoding="utf-8", lineterminator="\n", na_rep="n/a")
