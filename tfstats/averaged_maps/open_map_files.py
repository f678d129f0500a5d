"""Condition maps in open formats that others read and write too: HDF5, MATLAB, netCDF, and arrays from elsewhere."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import asdict
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np

from tfstats.averaged_maps.map_files import is_saved_maps, table_as_lists, table_from_lists
from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.foundations.errors import listed, refusal
from tfstats.foundations.units import symbol_of
from tfstats.normalization import Baseline
from tfstats.power_files.labelled_arrays import (
    NamedArray,
    axes_in_order,
    data_array,
    labels_along,
    read_arrays,
    write_arrays,
)

__all__ = ["maps_as_labelled", "maps_from_labelled", "read_maps", "write_maps"]

DIMENSIONS = ("subject", "condition", "channel", "frequency", "time")
LABELS = dict(zip(("subjects", "conditions", "channels", "frequencies", "times"), DIMENSIONS))
NEEDED = ("values", *LABELS, "unit")
OPTIONAL = ("trial_counts", "wavelet_cycles", "about")


def write_maps(path: str | PathLike[str], maps: ConditionMaps) -> None:
    """Write condition maps for other programs to read.

    `ConditionMaps.save` is for reading them again here; this is for MATLAB, Octave, R, and whatever reads HDF5 or netCDF.

    Parameters
    ----------
    path : path
        Its ending chooses the format: `.h5`, `.hdf5`, `.mat` (version 5, at most 2 GiB), `.nc` (needs the extra
        `labelled`; dimensions subject, condition, channel, frequency, time, and units).
    maps : ConditionMaps

    Raises
    ------
    InputError
        An ending that is not known, or more than the format holds.

    Notes
    -----
    Names in the file: values (subjects, conditions, channels, frequencies, times), subjects, conditions, channels,
    frequencies in Hz, times in s, unit, trial_counts (subjects, conditions) and wavelet_cycles where known, and about,
    a text with all else (baseline, history, participants) as JSON.  `load` in MATLAB gives arrays of these shapes.

    Examples
    --------
    >>> import numpy as np, pathlib, tempfile, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.zeros((2, 1, 1, 3, 2)), subjects=["S1", "S2"], conditions=["recalled"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1], unit="decibel")
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     tfs.write_maps(pathlib.Path(folder) / "maps.h5", maps)
    ...     tfs.read_maps(pathlib.Path(folder) / "maps.h5")
    <ConditionMaps 2 subjects x 1 conditions x 1 channels x 3 frequencies x 2 times, dB>
    """
    if not isinstance(maps, ConditionMaps):
        raise refusal(f"write_maps, {path}", "ConditionMaps", type(maps).__name__, "make them with condition_maps")
    arrays = {"values": NamedArray(DIMENSIONS, maps.values, symbol_of(maps.unit))}
    for name, dimension in LABELS.items():
        labels: Any = getattr(maps, name)
        unit = {"frequencies": "Hz", "times": "s"}.get(name)
        arrays[name] = NamedArray((dimension,), labels if unit else np.array(labels, dtype=np.str_), unit)
    if maps.trial_counts is not None:
        arrays["trial_counts"] = NamedArray(DIMENSIONS[:2], maps.trial_counts.to_numpy())
    if maps.wavelet_cycles is not None:
        along = "frequency" if maps.wavelet_cycles.size == maps.frequencies.size else "wavelet_cycles"
        arrays["wavelet_cycles"] = NamedArray((along,), maps.wavelet_cycles)
    write_arrays(Path(path), "values", arrays, {"unit": maps.unit, "about": json.dumps(_about(maps))})


def read_maps(path: str | PathLike[str], *, unit: str | None = None) -> ConditionMaps:
    """Read condition maps: what `ConditionMaps.save` or `write_maps` wrote, or arrays of the same names from elsewhere.

    Parameters
    ----------
    path : path
        `.npz`, `.h5`, `.hdf5`, `.mat` (all versions) or `.nc`.  It holds values (subjects, conditions, channels,
        frequencies, times), subjects, conditions, channels, frequencies (Hz), times (s) and unit; trial_counts
        (subjects, conditions) and wavelet_cycles where known.
    unit : str, optional
        For files that do not say: "decibel", "percent_change", "ratio", "z_score", or "power" for averaged power, which
        `relative_maps` makes relative.

    Raises
    ------
    InputError
        Arrays that are not there or do not fit together, a unit that is nowhere stated or stated otherwise.

    Examples
    --------
    >>> import numpy as np, pathlib, tempfile, tfstats as tfs
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder) / "averages.npz"
    ...     np.savez(path, values=np.ones((2, 1, 1, 2, 3)), subjects=["01", "02"], conditions=["recalled"],
    ...         channels=["Fz"], frequencies=[4, 8], times=[0.0, 0.1, 0.2])
    ...     tfs.read_maps(path, unit="power")
    <ConditionMaps 2 subjects x 1 conditions x 1 channels x 2 frequencies x 3 times, power>
    """
    place = Path(path)
    where = f"read_maps, {place}"
    if place.suffix.lower() == ".npz" and is_saved_maps(place):
        maps = ConditionMaps.load(place)
        stated: str | None = maps.unit
    else:
        parts, present = read_arrays(place, where, (*NEEDED, *OPTIONAL))
        stated = _text(parts.get("unit"))
        absent = [name for name in NEEDED if name not in parts and name != "unit"]
        if absent:
            raise refusal(
                where, f"arrays called {listed(NEEDED)}", f"none called {listed(absent)} among {listed(present)}",
                "write the maps with these names",
            )  # fmt: skip
        if stated is None and unit is None:
            raise refusal(
                f"{where}, unit", 'the unit of the values, such as "decibel" or "power"', "none in the file",
                "add it to the file, or give unit=",
            )  # fmt: skip
        maps = _made(parts, unit if stated is None else stated, where)
    if unit is not None and stated is not None and unit != maps.unit:
        raise refusal(f"{where}, unit", f'"{maps.unit}", which the file says', f'"{unit}"', "leave unit out")
    return maps


def _made(parts: Mapping[str, Any], unit: str | None, where: str) -> ConditionMaps:
    about = _known(json.loads(_text(parts.get("about")) or "{}"))
    values = np.asarray(parts["values"])
    # MATLAB drops axes of length one at the end.
    values = values.reshape([*values.shape, *[1] * (5 - values.ndim)])
    counts = parts.get("trial_counts")
    return ConditionMaps(
        values,
        subjects=_labels(parts["subjects"]),
        conditions=_labels(parts["conditions"]),
        channels=_labels(parts["channels"]),
        frequencies=np.ravel(parts["frequencies"]),
        times=np.ravel(parts["times"]),
        unit=unit or "",
        trial_counts=None if counts is None else np.asarray(counts).reshape(values.shape[:2]),
        wavelet_cycles=None if "wavelet_cycles" not in parts else np.ravel(parts["wavelet_cycles"]),
        **about,
    )


def _labels(value: Any) -> list[Any]:
    return (
        [value]
        if isinstance(value, str)
        else np.ravel(value).tolist()
        if isinstance(value, np.ndarray)
        else list(value)
    )


def _text(value: Any) -> str | None:
    if isinstance(value, (list, tuple, np.ndarray)) and len(np.atleast_1d(np.asarray(value))) == 1:
        value = np.atleast_1d(np.asarray(value))[0]
    return str(value) if isinstance(value, str) and value else None


def _about(maps: ConditionMaps) -> dict[str, Any]:
    """What has no array of its own."""
    return {
        "scaling": maps.scaling,
        "history": maps.history,
        "cautions": maps.cautions,
        "averaged_by": maps.averaged_by,
        "of_differences": maps.of_differences,
        "baseline": None if maps.baseline is None else asdict(maps.baseline),
        "participants": None if maps.participants is None else table_as_lists(maps.participants),
    }


def _known(about: dict[str, Any]) -> dict[str, Any]:
    if about.get("baseline") is not None:
        about["baseline"] = Baseline(**about["baseline"])
    if about.get("participants") is not None:
        about["participants"] = table_from_lists(about["participants"])
    return about


def maps_as_labelled(maps: ConditionMaps) -> Any:
    """Condition maps as an xarray.DataArray (subject, condition, channel, frequency, time)."""
    coordinates = {}
    for name, dimension in LABELS.items():
        labels: Any = getattr(maps, name)
        unit = {"frequencies": "Hz", "times": "s"}.get(name)
        coordinates[dimension] = NamedArray((dimension,), labels if unit else np.array(labels, dtype=np.str_), unit)
    if maps.trial_counts is not None:
        coordinates["trial_counts"] = NamedArray(DIMENSIONS[:2], maps.trial_counts.to_numpy())
    if maps.wavelet_cycles is not None and maps.wavelet_cycles.size == maps.frequencies.size:
        coordinates["wavelet_cycles"] = NamedArray(("frequency",), maps.wavelet_cycles)
    attributes = {"unit": maps.unit, "units": symbol_of(maps.unit), "about": json.dumps(_about(maps))}
    return data_array("relative_power", NamedArray(DIMENSIONS, maps.values), coordinates, attributes)


def maps_from_labelled(array: Any) -> ConditionMaps:
    """The reverse of `maps_as_labelled`, in any order of axes."""
    where = "from_labelled"
    values = axes_in_order(array, DIMENSIONS, where)
    if not array.attrs.get("unit"):
        raise refusal(where, 'the unit in attrs["unit"], such as "decibel" or "power"', "none", "add it")
    parts = {"values": values, **{name: labels_along(array, dim, where) for name, dim in LABELS.items()}}
    if "trial_counts" in array.coords:
        parts["trial_counts"] = array.coords["trial_counts"].transpose(*DIMENSIONS[:2]).values
    if "wavelet_cycles" in array.coords:
        parts["wavelet_cycles"] = array.coords["wavelet_cycles"].values
    if array.attrs.get("about"):
        parts["about"] = str(array.attrs["about"])
    return _made(parts, str(array.attrs["unit"]), where)
