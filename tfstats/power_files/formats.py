"""The registry of file formats: a further reader or writer is one entry here."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from os import PathLike, fspath
from pathlib import Path
from typing import Any

import numpy as np

from tfstats.foundations.errors import listed, refusal
from tfstats.power_files.hdf5_files import OpenHdf5, write_hdf5
from tfstats.power_files.matlab_files import open_matlab, write_matlab
from tfstats.power_files.netcdf_files import OpenNetcdf, write_netcdf
from tfstats.power_files.numpy_files import OpenNpy, OpenNpz, write_npy, write_npz
from tfstats.power_files.open_file import OpenFile
from tfstats.power_files.trial_power import TrialPower

__all__ = ["FORMATS", "FileFormat", "format_of", "names_in_file", "open_power_file"]

Opener = Callable[[Path, str], OpenFile]
Writer = Callable[[Path, TrialPower, Mapping[str, Any]], None]


@dataclass(frozen=True)
class FileFormat:
    """One kind of power file.

    Parameters
    ----------
    endings : tuple of str
        In lower case, with their dot.
    words : str
    open : callable (path, label) -> OpenFile
    write : callable (path, power, parts)
        `parts` are all but the power under the names of the contract, as arrays of numbers or of text.
    """

    endings: tuple[str, ...]
    words: str
    open: Opener
    write: Writer


def _write_hdf5(path: Path, power: TrialPower, parts: Mapping[str, Any]) -> None:
    write_hdf5(path, power.blocks(), power.values.shape, power.values.dtype, parts)


def _whole(write: Callable[[Path, Any, Mapping[str, Any]], None]) -> Writer:
    return lambda path, power, parts: write(path, power.as_array(), parts)


FORMATS = (
    FileFormat((".npz",), "numpy archive", OpenNpz, _whole(write_npz)),
    FileFormat((".npy",), "numpy array", OpenNpy, _whole(write_npy)),
    FileFormat((".h5", ".hdf5"), "HDF5", OpenHdf5, _write_hdf5),
    FileFormat((".mat",), "MATLAB", open_matlab, _whole(write_matlab)),
    FileFormat((".nc",), "netCDF", OpenNetcdf, _whole(write_netcdf)),
)
"""Every format that `read_power`, `write_power` and `PowerFiles` know."""


def format_of(path: Path, where: str) -> FileFormat:
    """The format that a file's ending stands for."""
    for one in FORMATS:
        if path.suffix.lower() in one.endings:
            return one
    endings = [ending for one in FORMATS for ending in one.endings]
    raise refusal(
        where, f"a file that ends in one of {listed(endings)}", f'"{path.suffix}"', "convert or rename the file"
    )


def open_power_file(path: Path, label: str) -> OpenFile:
    """Open a file by its ending; the caller closes it (`with`)."""
    found = format_of(path, label)
    if not path.is_file():
        got = "a folder" if path.is_dir() else "nothing there"
        raise refusal(label, "a file", got, "check the path")
    try:
        return found.open(path, label)
    except PermissionError as error:
        raise refusal(label, "a file that may be read", "no permission", "change its permissions") from error


def names_in_file(path: str | PathLike[str]) -> dict[str, tuple[tuple[int, ...], str]]:
    """What lies in a power file: each name with its shape and its kind of content, nothing large read.

    Returns
    -------
    dict
        Name to (shape, kind); kind is "number", "text", "logical", "complex", or "unreadable" for what only the
        program that wrote it can read.

    Examples
    --------
    >>> import numpy as np, pathlib, tempfile
    >>> from tfstats.power_files import names_in_file
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     np.savez(pathlib.Path(folder) / "S1.npz", pow=np.ones((12, 20, 100, 64)), label=["Fz", "Cz"])
    ...     names_in_file(pathlib.Path(folder) / "S1.npz")
    {'pow': ((12, 20, 100, 64), 'number'), 'label': ((2,), 'text')}
    """
    found: dict[str, tuple[tuple[int, ...], str]] = {}
    place = Path(path)
    with open_power_file(place, fspath(path)) as file:
        for name in file.names():
            try:
                value = file.get(name, stored=True)
            except ValueError:
                found[name] = ((), "unreadable")
                continue
            if isinstance(value, (str, list)):
                found[name] = (() if isinstance(value, str) else (len(value),), "text")
            else:
                dtype = np.dtype(value.dtype)
                kinds = {"b": "logical", "c": "complex", "V": "complex"}
                found[name] = (tuple(value.shape), kinds.get(dtype.kind, "number"))
    return found
