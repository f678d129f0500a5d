"""HDF5: arrays in groups, left in their file until blocks are read; also as GNU Octave writes them."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np

from tfstats.foundations.safe_writing import written_whole
from tfstats.power_files.open_file import OpenFile, cells_as_value, char_rows, plain, unreadable

__all__ = ["Hdf5Array", "OpenHdf5", "write_hdf5"]

_OCTAVE = "OCTAVE_NEW_FORMAT"


class Hdf5Array:
    """One dataset, opened when it is first read and again in another process.

    With `turned`, the axes are those of a program that stores the first axis fastest: the reverse of HDF5's.
    """

    def __init__(self, path: Path, dataset: Any, *, turned: bool = False) -> None:
        self.path, self.name, self.turned = str(path), dataset.name, turned
        shape, chunks = dataset.shape, dataset.chunks
        self.shape = tuple(shape[::-1] if turned else shape)
        self.dtype = dataset.dtype
        self.chunk = chunks if chunks is None or not turned else tuple(chunks[::-1])
        axes = range(len(shape))
        self.storage_order = tuple(reversed(axes)) if turned else tuple(axes)
        self._file: Any = None
        self._dataset: Any = None

    def __getstate__(self) -> dict[str, Any]:
        return {**self.__dict__, "_file": None, "_dataset": None}

    def __getitem__(self, key: Any) -> Any:
        if self._dataset is None:
            self._file = h5py.File(self.path, "r")
            self._dataset = self._file[self.name]
        keys = key if isinstance(key, tuple) else (key,)
        keys += (slice(None),) * (len(self.shape) - len(keys))
        if self.turned:
            return np.asarray(self._dataset[keys[::-1]]).transpose()
        return np.asarray(self._dataset[keys])


class OpenHdf5(OpenFile):
    """Groups and datasets."""

    def __init__(self, path: Path, label: str, kind: str = "HDF5") -> None:
        super().__init__(path, label)
        self.kind = kind
        try:
            self.file = h5py.File(path, "r")
        except OSError as error:
            raise unreadable(label, kind, error) from error
        self.root = self.file

    def close(self) -> None:
        """Close the file; stored arrays open it again by themselves."""
        self.file.close()

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """Groups have parts; what GNU Octave writes as a group around each variable counts as the variable."""
        if not isinstance(node, h5py.Group):
            return None
        if _OCTAVE in node.attrs:
            inner = node["value"]
            return None if _is_cell(node) or not isinstance(inner, h5py.Group) else self.children(inner)
        return dict(node.items())

    def plain_value(self, node: Any, name: str) -> Any:
        """A dataset in memory."""
        where = f"{self.label}, {name}"
        try:
            if isinstance(node, h5py.Group):
                return self._octave_value(node, where)
            return plain(np.asarray(node[()]), where, "write numbers or UTF-8 text")
        except (OSError, RuntimeError) as error:
            raise unreadable(self.label, self.kind, error) from error

    def stored_value(self, node: Any, name: str) -> Any:
        """A dataset left in its file."""
        if isinstance(node, h5py.Group):
            inner = node["value"]
            if isinstance(inner, h5py.Group) or _octave_type(node).endswith("string"):
                return self.plain_value(node, name)
            return Hdf5Array(self.path, inner, turned=True)
        if node.dtype.kind not in "biufcV" or node.ndim == 0:
            return self.plain_value(node, name)
        return Hdf5Array(self.path, node)

    def _octave_value(self, node: Any, where: str) -> Any:
        inner = node["value"]
        if _is_cell(node):
            keys = sorted((key for key in inner if key != "dims"), key=lambda key: int(key.lstrip("_")))
            cells = [self._octave_value(inner[key], where) for key in keys]
            return cells_as_value(cells, where, "give a cell array of texts, or an array of numbers")
        if "OCTAVE_EMPTY_MATRIX" in node.attrs:
            return np.empty(0)
        array = np.asarray(inner[()]).transpose()
        if _octave_type(node).endswith("string"):
            return char_rows(array)
        return plain(
            array.astype(bool) if _octave_type(node).startswith("bool") else array, where, "give numbers or text"
        )


def _octave_type(node: Any) -> str:
    return bytes(np.asarray(node["type"][()]).item()).decode("ascii", "replace").strip("\0")


def _is_cell(node: Any) -> bool:
    return _octave_type(node) == "cell"


def write_hdf5(
    path: Path, blocks: Any, shape: tuple[int, ...], dtype: Any, parts: Mapping[str, Any], *, name: str = "power"
) -> None:
    """All parts under their names, dots as groups; the large array block by block."""
    with written_whole(path) as temporary, h5py.File(temporary, "w") as file:
        large = file.create_dataset(name, shape=shape, dtype=dtype)
        for place, block in blocks:
            large[place] = block
        for part, value in parts.items():
            array, place = np.asarray(value), part.replace(".", "/")
            if array.dtype.kind == "U":
                file.create_dataset(place, data=array.astype(object), dtype=h5py.string_dtype("utf-8"))
            else:
                file.create_dataset(place, data=array)
