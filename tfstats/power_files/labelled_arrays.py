"""Arrays with named axes: xarray in and out, and files of named arrays for everything that is not power of trials."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tfstats.foundations.errors import listed, refusal
from tfstats.power_files.formats import open_power_file
from tfstats.power_files.hdf5_files import write_hdf5
from tfstats.power_files.matlab_files import write_matlab
from tfstats.power_files.netcdf_files import needed_xarray, write_netcdf_arrays
from tfstats.power_files.trial_power import TrialPower

__all__ = [
    "NamedArray",
    "data_array",
    "is_data_array",
    "power_as_labelled",
    "power_from_labelled",
    "read_arrays",
    "write_arrays",
]

POWER_DIMENSIONS = ("trial", "channel", "frequency", "time")
UNITS = {"frequency": "Hz", "time": "s"}
_NOTE = "notes"


@dataclass(frozen=True)
class NamedArray:
    """An array with the names of its axes, and its unit where it has one."""

    dimensions: tuple[str, ...]
    values: Any
    unit: str | None = None


def data_array(
    name: str, main: NamedArray, coordinates: Mapping[str, NamedArray], attributes: Mapping[str, Any]
) -> Any:
    """An xarray.DataArray; attributes that are None are left out."""
    xarray = needed_xarray(f"as_labelled, {name}")
    coords = {
        key: (one.dimensions, one.values, {} if one.unit is None else {"units": one.unit})
        for key, one in coordinates.items()
    }
    attrs = {key: value for key, value in attributes.items() if value is not None}
    return xarray.DataArray(main.values, dims=main.dimensions, coords=coords, name=name, attrs=attrs)


def is_data_array(thing: object) -> bool:
    """Whether it is an xarray.DataArray, found out without loading xarray."""
    return type(thing).__name__ == "DataArray" and type(thing).__module__.startswith("xarray.")


def power_as_labelled(power: TrialPower) -> Any:
    """One subject's power as an xarray.DataArray (trial, channel, frequency, time); in memory."""
    coordinates = {
        "trial": NamedArray(("trial",), np.arange(len(power.trials))),
        "channel": NamedArray(("channel",), np.array(power.channels, dtype=np.str_)),
        "frequency": NamedArray(("frequency",), power.frequencies, "Hz"),
        "time": NamedArray(("time",), power.times, "s"),
    }
    if power.wavelet_cycles is not None:
        coordinates["wavelet_cycles"] = NamedArray(("frequency",), power.wavelet_cycles)
    clashing = [str(name) for name in power.trials.columns if name in coordinates]
    if clashing:
        raise refusal(
            f"as_labelled, subject {power.subject}", "trial columns that are no names of axes", listed(clashing),
            "rename the columns",
        )  # fmt: skip
    for name in power.trials.columns:
        coordinates[str(name)] = NamedArray(("trial",), power.trials[name].to_numpy())
    attributes = {
        "subject": power.subject,
        "units": power.power_unit,
        "scaling": power.scaling,
        _NOTE: "\n".join(power.notes) or None,
    }
    return data_array("power", NamedArray(POWER_DIMENSIONS, power.as_array()), coordinates, attributes)


def power_from_labelled(array: Any, subject: object = None) -> TrialPower:
    """The reverse of `power_as_labelled`, in any order of axes; an axis that is not there has length one."""
    where = "from_labelled"
    values = axes_in_order(array, POWER_DIMENSIONS, where, may_lack=("trial", "channel", "frequency"))
    coords = array.coords
    columns = {
        str(name): coords[name].values
        for name in coords
        if coords[name].dims == ("trial",) and name not in ("trial", "wavelet_cycles")
    }
    name = array.attrs.get("subject") if subject is None else subject
    if name is None:
        raise refusal(where, "a subject", 'none in attrs["subject"]', "give subject=")
    notes = str(array.attrs.get(_NOTE, ""))
    return TrialPower(
        values,
        frequencies=labels_along(array, "frequency", where),
        times=labels_along(array, "time", where),
        channels=labels_along(array, "channel", where),
        trials=pd.DataFrame(columns, index=pd.RangeIndex(values.shape[0])),
        subject=name,
        power_unit=array.attrs.get("units"),
        scaling=array.attrs.get("scaling"),
        wavelet_cycles=np.atleast_1d(coords["wavelet_cycles"].values) if "wavelet_cycles" in coords else None,
        notes=notes.split("\n") if notes else (),
    )


def axes_in_order(array: Any, dimensions: Sequence[str], where: str, *, may_lack: Sequence[str] = ()) -> Any:
    """The values with their axes in our order; all that is wrong with the names in one sentence."""
    present = [str(dimension) for dimension in array.dims]
    unknown = [name for name in present if name not in dimensions]
    lacking = [name for name in dimensions if name not in present and name not in may_lack]
    if unknown or lacking:
        raise refusal(
            where, f"dimensions among {listed(dimensions)}, all but {listed(may_lack)} needed" if may_lack
            else f"the dimensions {listed(dimensions)}", listed(present), "rename the dimensions",
        )  # fmt: skip
    values = array.transpose(*[name for name in dimensions if name in present]).values
    return values.reshape([array.sizes[name] if name in present else 1 for name in dimensions])


def labels_along(array: Any, dimension: str, where: str) -> list[Any]:
    """The coordinate of a dimension, which has to be there: numbers from 0 would be taken for labels."""
    if dimension not in array.coords:
        raise refusal(
            f"{where}, {dimension}",
            f'a coordinate "{dimension}"',
            listed(array.coords),
            "give the dimension its labels",
        )
    return np.atleast_1d(array.coords[dimension].values).tolist()


def write_arrays(path: Path, main: str, arrays: Mapping[str, NamedArray], texts: Mapping[str, str]) -> None:
    """Named arrays and texts in a `.h5`, `.hdf5`, `.mat` or `.nc` file; axes as given in each.

    `main` is the large one.  In MATLAB and Octave `load` gives arrays of the shape that they have here.
    """
    ending = path.suffix.lower()
    if ending == ".nc":
        write_netcdf_arrays(path, arrays, texts)
        return
    parts: dict[str, Any] = {name: np.asarray(one.values) for name, one in arrays.items() if name != main}
    parts |= {name: np.array(text, dtype=np.str_) for name, text in texts.items()}
    values = np.asarray(arrays[main].values)
    if ending == ".mat":
        write_matlab(path, values, parts, name=main, where=f"write_maps, {path}")
        return
    if ending not in (".h5", ".hdf5"):
        raise refusal(
            f"write_maps, {path}", f"a file that ends in one of {listed(('.h5', '.hdf5', '.mat', '.nc'))}",
            f'"{path.suffix}"', "change its ending; ConditionMaps.save writes .npz",
        )  # fmt: skip
    whole = tuple(slice(0, length) for length in values.shape)
    write_hdf5(path, [(whole, values)], values.shape, values.dtype, parts, name=main)


def read_arrays(path: Path, label: str, names: Sequence[str]) -> tuple[dict[str, Any], list[str]]:
    """Of the names those that are in the file, each an array, a text or a list of texts; and all names in it."""
    with open_power_file(path, label) as file:
        return {name: file.get(name) for name in names if name in file}, file.names()
