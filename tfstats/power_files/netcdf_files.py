"""netCDF through xarray, which is an extra: `pip install "tfstats[labelled]"`."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from tfstats.foundations.errors import refusal
from tfstats.foundations.safe_writing import written_whole
from tfstats.power_files.open_file import OpenFile, plain, unreadable

__all__ = ["NetcdfArray", "OpenNetcdf", "needed_xarray", "write_netcdf", "write_netcdf_arrays"]

_DIMENSIONS = {
    "trial": "trial", "trials": "trial",
    "channel": "channel", "channels": "channel",
    "frequency": "frequency", "frequencies": "frequency",
    "time": "time", "times": "time",
}  # fmt: skip


def needed_xarray(where: str) -> Any:
    """The library, or a refusal that says how to get it."""
    try:
        import h5netcdf  # noqa: F401
        import xarray
    except ImportError as error:
        raise refusal(
            where,
            "xarray and h5netcdf for netCDF files",
            f"no {error.name}",
            'run: python -m pip install "tfstats[labelled]"',
        ) from error
    return xarray


def _is_classic(path: str | Path) -> bool:
    """Whether it is netCDF 3, which is not HDF5."""
    with open(path, "rb") as file:
        return file.read(3) == b"CDF"


def _opened(path: str, where: str, group: str | None = None) -> Any:
    engine = "scipy" if _is_classic(path) else "h5netcdf"
    # Times stay the numbers they are: a unit such as "seconds" must not become a date.
    return needed_xarray(where).open_dataset(path, engine=engine, group=group, decode_times=False, decode_timedelta=False)


class NetcdfArray:
    """One variable, read by slices; the file is opened again in another process."""

    def __init__(self, path: Path, group: str | None, name: str, variable: Any) -> None:
        self.path, self.group, self.name = str(path), group, name
        self.shape, self.dtype = tuple(variable.shape), variable.dtype
        chunks = variable.encoding.get("chunksizes")
        self.chunk = None if chunks is None else tuple(chunks)
        self._dataset: Any = None

    def __getstate__(self) -> dict[str, Any]:
        return {**self.__dict__, "_dataset": None}

    def __getitem__(self, key: Any) -> Any:
        if self._dataset is None:
            self._dataset = _opened(self.path, self.path, self.group)
        return np.asarray(self._dataset[self.name][key].values)


class OpenNetcdf(OpenFile):
    """Variables and coordinates, in groups."""

    def __init__(self, path: Path, label: str) -> None:
        super().__init__(path, label)
        self._open: list[Any] = []
        needed_xarray(label)
        try:
            self.root = self._group(None)
            for name in [] if _is_classic(path) else _group_names(path):
                self._place(name.split("/"), self._group(name))
        except (OSError, ValueError, TypeError, KeyError) as error:
            raise unreadable(label, ".nc", error) from error

    def _group(self, group: str | None) -> dict[str, Any]:
        dataset = _opened(str(self.path), self.label, group)
        self._open.append(dataset)
        return {str(name): (group, str(name), dataset[name].variable) for name in dataset.variables}

    def _place(self, parts: list[str], variables: dict[str, Any]) -> None:
        inside = self.root
        for part in parts:
            inside = inside.setdefault(part, {})
        inside.update(variables)

    def close(self) -> None:
        """Close all groups; stored arrays open the file again by themselves."""
        for dataset in self._open:
            dataset.close()

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """Groups have parts."""
        return node if isinstance(node, dict) else None

    def plain_value(self, node: Any, name: str) -> Any:
        """A variable in memory."""
        return plain(np.asarray(node[2].values), f"{self.label}, {name}", "write numbers or text")

    def stored_value(self, node: Any, name: str) -> Any:
        """A variable left in its file."""
        group, own_name, variable = node
        if variable.dtype.kind not in "biufcV":
            return self.plain_value(node, name)
        return NetcdfArray(self.path, group, own_name, variable)

    def axis_names(self, name: str) -> tuple[str, ...] | None:
        """The dimensions, where all of them are called what they are."""
        dims = [_DIMENSIONS.get(str(dim).lower()) for dim in self._find(self.root, name)[2].dims]
        known = tuple(dim for dim in dims if dim is not None)
        return known if len(set(known)) == len(dims) else None


def _group_names(path: Path) -> list[str]:
    import h5netcdf

    with h5netcdf.File(path, "r") as file:
        return _groups(file, "")


def _groups(group: Any, prefix: str) -> list[str]:
    found = []
    for name, inner in group.groups.items():
        found += [prefix + name, *_groups(inner, prefix + name + "/")]
    return found


def write_netcdf(path: Path, values: Any, parts: Mapping[str, Any]) -> None:
    """Power with named dimensions and units, all else as variables along them."""
    xarray = needed_xarray(f"write_power, {path}")
    along = {
        "frequencies": ("frequency", "Hz"), "times": ("time", "s"), "channels": ("channel", None),
        "wavelet_cycles": ("frequency", None), "notes": ("note", None),
    }  # fmt: skip
    unit = {} if "power_unit" not in parts else {"units": str(parts["power_unit"])}
    variables: dict[str, Any] = {"power": (("trial", "channel", "frequency", "time"), np.asarray(values), unit)}
    for name, value in parts.items():
        array = np.asarray(value)
        if array.dtype.kind == "U":
            array = array.astype(object)
        if name == "axes":
            continue  # the dimensions say it
        dimension, unit_of_axis = ("trial", None) if name.startswith("trials.") else along.get(name, (None, None))
        attributes = {} if unit_of_axis is None else {"units": unit_of_axis}
        variables[name] = ((), array) if dimension is None else ((dimension,), array, attributes)
    with written_whole(path) as temporary:
        xarray.Dataset(variables).to_netcdf(temporary, engine="h5netcdf", invalid_netcdf=False)


def write_netcdf_arrays(path: Path, arrays: Mapping[str, Any], texts: Mapping[str, str]) -> None:
    """Arrays as variables along their named dimensions with their units, texts as variables without any."""
    xarray = needed_xarray(f"write_maps, {path}")
    variables: dict[str, Any] = {}
    for name, one in arrays.items():
        array = np.asarray(one.values)
        attributes = {} if one.unit is None else {"units": one.unit}
        variables[name] = (one.dimensions, array.astype(object) if array.dtype.kind == "U" else array, attributes)
    for name, text in texts.items():
        variables[name] = ((), np.array(text, dtype=object))
    with written_whole(path) as temporary:
        xarray.Dataset(variables).to_netcdf(temporary, engine="h5netcdf", invalid_netcdf=False)
