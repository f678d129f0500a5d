"""`.npz` and `.npy`: arrays of numbers and text, never pickled objects."""

from __future__ import annotations

import zipfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from tfstats.foundations.errors import InputError, refusal
from tfstats.foundations.safe_writing import written_whole
from tfstats.power_files.open_file import OpenFile, plain, unreadable

__all__ = ["OpenNpy", "OpenNpz", "label_file", "write_npy", "write_npz"]

_BROKEN = (OSError, ValueError, EOFError, KeyError, zipfile.BadZipFile, NotImplementedError)


def _no_objects(name: str) -> str:
    return f"save it as numbers or text, for instance numpy.savez(file, {name.split('.')[-1]}=numpy.array(values, dtype=str))"


class OpenNpz(OpenFile):
    """A `.npz` archive; each array is read when it is asked for."""

    def __init__(self, path: Path, label: str) -> None:
        super().__init__(path, label)
        self.stream = open(path, "rb")  # noqa: SIM115 - close() closes it
        try:
            if self.stream.read(2) != b"PK":
                raise unreadable(label, ".npz")
            self.stream.seek(0)
            self.archive = np.load(self.stream, allow_pickle=False)
        except _BROKEN as error:
            self.stream.close()
            raise error if isinstance(error, InputError) else unreadable(label, ".npz", error) from error
        self.root = self.archive.files

    def close(self) -> None:
        """Close the archive."""
        self.archive.close()
        self.stream.close()

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """All arrays lie on one level."""
        return {name: (name,) for name in node} if isinstance(node, list) else None

    def plain_value(self, node: Any, name: str) -> Any:
        """An array of numbers, or text."""
        where = f"{self.label}, {name}"
        try:
            array = self.archive[node[0]]
        except ValueError as error:
            if "allow_pickle" in str(error):
                raise refusal(
                    where, "numbers or text", "pickled Python objects, which are never loaded", _no_objects(name)
                ) from error
            raise unreadable(self.label, ".npz", error) from error
        except _BROKEN as error:
            raise unreadable(self.label, ".npz", error) from error
        return plain(array, where, _no_objects(name))


def label_file(path: Path) -> Path:
    """The file beside `X.npy` that holds what an array alone cannot: `X.labels.npz`."""
    return path.with_name(path.stem + ".labels.npz")


class OpenNpy(OpenFile):
    """A `.npy` array, left in its file as memory map, and the labels in the `.labels.npz` beside it if there is one."""

    def __init__(self, path: Path, label: str) -> None:
        super().__init__(path, label)
        with open(path, "rb") as stream:
            if stream.read(6) != b"\x93NUMPY":
                raise unreadable(label, ".npy")
        try:
            array = np.load(path, mmap_mode="r", allow_pickle=False)
        except _BROKEN as error:
            if "Python objects" in str(error):
                raise refusal(
                    label, "numbers", "pickled Python objects, which are never loaded", "save the array as numbers"
                ) from error
            raise unreadable(label, ".npy", error) from error
        beside = label_file(path)
        self.labels = OpenNpz(beside, f"{label.removesuffix(str(path))}{beside}") if beside.is_file() else None
        self.root = {"power": array}
        if self.labels is not None:
            self.root |= self.labels.children(self.labels.root) or {}

    def close(self) -> None:
        """Close the labels; the memory map lives as long as it is used."""
        if self.labels is not None:
            self.labels.close()

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """The array is called "power"."""
        return node if isinstance(node, dict) else None

    def plain_value(self, node: Any, name: str) -> Any:
        """The memory map, or a label array."""
        if isinstance(node, np.ndarray):
            return node
        assert self.labels is not None
        return self.labels.plain_value(node, name)


def write_npz(path: Path, values: Any, parts: Mapping[str, Any]) -> None:
    """All parts under their names in one archive."""
    with written_whole(path) as temporary:
        np.savez(temporary, allow_pickle=False, power=np.asarray(values), **parts)


def write_npy(path: Path, values: Any, parts: Mapping[str, Any]) -> None:
    """The power as one array, all else in the `.labels.npz` beside it."""
    with written_whole(label_file(path)) as temporary:
        np.savez(temporary, allow_pickle=False, **parts)
    with written_whole(path) as temporary:
        np.save(temporary, np.asarray(values), allow_pickle=False)
