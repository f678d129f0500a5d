"""MATLAB files: v4 to v7 through scipy, v7.3 through h5py with its reversed axes put right."""

from __future__ import annotations

import struct
import warnings
import zlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import scipy.io
import scipy.sparse

from tfstats.foundations.errors import InputError, refusal
from tfstats.foundations.safe_writing import written_whole
from tfstats.power_files.hdf5_files import Hdf5Array, OpenHdf5
from tfstats.power_files.open_file import OpenFile, cells_as_value, char_rows, plain, unreadable

__all__ = ["OpenMatlab5", "OpenMatlab73", "open_matlab", "write_matlab"]

_NUMBERS = ("double", "single", "logical", *(f"{sign}int{bits}" for sign in ("", "u") for bits in (8, 16, 32, 64)))
_CONVERSIONS = {
    "string": "cellstr({0})",
    "categorical": "cellstr({0})",
    "table": 'table2struct({0}, "ToScalar", true)',
    "timetable": 'table2struct(timetable2table({0}), "ToScalar", true)',
    "duration": "seconds({0})",
    "datetime": "cellstr({0})",
    "containers.Map": "cell2struct(values({0}), keys({0}), 2)",
    "function_handle": "func2str({0})",
}
_LARGEST_V5 = 2**31 - 1


def open_matlab(path: Path, label: str) -> OpenFile:
    """Either kind of `.mat` file, told apart by what is inside."""
    return OpenMatlab73(path, label) if h5py.is_hdf5(path) else OpenMatlab5(path, label)


def _object(label: str, path: Path, name: str, kind: str, version: str) -> InputError:
    """The refusal of a value that only MATLAB can read, with the line that turns it into one that all can."""
    made = _CONVERSIONS.get(kind, "struct({0})").format(f"S.{name}")
    line = f'S = load("{path.name}"); S.{name} = {made}; save("{path.name}", "-struct", "S", "{version}")'
    return refusal(
        f"{label}, {name}",
        "numbers, text, cells of text or structs",
        f"a MATLAB {kind} object",
        f"in MATLAB run: {line}",
    )


class OpenMatlab5(OpenFile):
    """Files of MATLAB versions 4 to 7, each variable read when it is asked for."""

    def __init__(self, path: Path, label: str) -> None:
        super().__init__(path, label)
        self._loaded: dict[str, Any] = {}
        try:
            # Objects have no name of their own in scipy's list, and stop it: they are found first.
            self.objects = _objects_in(path)
            names = list(self._read(None)) if self.objects else [name for name, _, _ in scipy.io.whosmat(path)]
        except InputError:
            raise
        except Exception as error:  # scipy raises many kinds for a damaged file
            raise unreadable(label, ".mat", error) from error
        names = [name for name in names if not name.startswith("__") and name != "None"]
        self.root = {name: _Variable(name) for name in (*names, *self.objects)}

    def _read(self, names: list[str] | None) -> dict[str, Any]:
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                return dict(
                    scipy.io.loadmat(self.path, variable_names=names, struct_as_record=False, chars_as_strings=True)
                )
        except (OSError, ValueError, TypeError, EOFError, zlib.error, NotImplementedError, IndexError) as error:
            raise unreadable(self.label, ".mat", error) from error

    def _load(self, name: str) -> Any:
        if name not in self._loaded:
            self._loaded[name] = self._read([name]).get(name)
        return self._loaded[name]

    def _node(self, node: Any) -> Any:
        if isinstance(node, _Variable):
            return None if node.name in self.objects else self._load(node.name)
        return node

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """Variables of the file, fields of structs; the fields of a struct array hold one value an element."""
        if node is self.root:
            return dict(self.root)
        value = self._node(node)
        if not isinstance(value, np.ndarray) or value.dtype != object or value.size == 0:
            return None
        elements = value.ravel().tolist()
        fields = getattr(elements[0], "_fieldnames", None)
        if fields is None or isinstance(value, scipy.io.matlab.MatlabObject):
            return None
        if len(elements) == 1:
            return {name: getattr(elements[0], name) for name in fields}
        return {name: _Cells([getattr(one, name, np.empty(0)) for one in elements]) for name in fields}

    def plain_value(self, node: Any, name: str) -> Any:
        """Numbers, text, or the content of a cell array."""
        where = f"{self.label}, {name}"
        if isinstance(node, _Variable) and node.name in self.objects:
            raise _object(self.label, self.path, name, self.objects[node.name], "-v7")
        value = self._node(node)
        if isinstance(value, (scipy.io.matlab.MatlabOpaque, scipy.io.matlab.MatlabFunction)):
            inside = value.ravel()[0] if value.dtype.names and value.size else None
            kind = (
                "function_handle" if inside is None or len(inside) < 3 else bytes(inside[2]).decode("ascii", "replace")
            )
            raise _object(self.label, self.path, name, kind, "-v7")
        if isinstance(value, scipy.io.matlab.MatlabObject):
            raise _object(self.label, self.path, name, str(value.classname), "-v7")
        if isinstance(value, _Cells) or isinstance(value, np.ndarray) and value.dtype == object:
            cells = value if isinstance(value, _Cells) else value.ravel(order="F").tolist()
            return cells_as_value([self._cell(cell, name) for cell in cells], where, "split it into two variables")
        if scipy.sparse.issparse(value):
            return value.toarray()
        array = np.asarray(value)
        if array.dtype.kind == "U":
            if array.size == 0:
                return ""
            texts = [str(text).rstrip() for text in array.ravel()]
            return texts[0].strip() if len(texts) == 1 else texts
        return plain(array, where, "save it as numbers or text")

    def _cell(self, cell: Any, name: str) -> Any:
        value = self.plain_value(np.asarray(cell) if not isinstance(cell, np.ndarray) else cell, name)
        return np.empty((0, 0)) if isinstance(value, np.ndarray) and value.size == 0 else value


def _objects_in(path: Path) -> dict[str, str]:
    """MATLAB objects among the variables of a version 5 file: name to class.

    The format (MathWorks, "MAT-File Format", level 5) is a list of elements: type, length, data; types 14 and 15 are
    a variable and a packed variable.  Objects have class 17 and three texts: name, type system, class.
    """
    found: dict[str, str] = {}
    with open(path, "rb") as file:
        header = file.read(128)
        if len(header) < 128 or header[:4].count(0) or header[126:128] not in (b"IM", b"MI"):
            return found  # version 4 has no objects
        order = "<" if header[126:128] == b"IM" else ">"
        while len(tag := file.read(8)) == 8:
            kind, length = struct.unpack(f"{order}II", tag)
            start = file.tell()
            data = file.read(min(length, 1024))
            if kind == 15:
                data = zlib.decompressobj().decompress(data, 1024)[8:]
            if kind in (14, 15) and len(data) > 16 and struct.unpack(f"{order}I", data[8:12])[0] & 0xFF == 17:
                texts = _texts_after(data, 16, order)
                if len(texts) == 3 and texts[1] == "MCOS":
                    found[texts[0]] = texts[2]
            file.seek(start + length)
    return found


def _texts_after(data: bytes, place: int, order: str) -> list[str]:
    """Three texts, each an element whose length stands before it or, when short, inside the tag."""
    texts = []
    for _ in range(3):
        if place + 8 > len(data):
            break
        word, length = struct.unpack(f"{order}II", data[place : place + 8])
        if word >> 16:
            length, start, place = word >> 16, place + 4, place + 8
        else:
            start, place = place + 8, place + 8 + length + (-length % 8)
        texts.append(data[start : start + length].decode("ascii", "replace"))
    return texts


class _Variable:
    """A variable of a file that may not have been read yet."""

    def __init__(self, name: str) -> None:
        self.name = name


class _Cells(list[Any]):
    """One value an element of a struct array."""


class OpenMatlab73(OpenHdf5):
    """Files of MATLAB version 7.3: HDF5 with the axes reversed and MATLAB's types in attributes."""

    def __init__(self, path: Path, label: str) -> None:
        super().__init__(path, label, ".mat")

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """Variables of the file and fields of structs."""
        if not isinstance(node, h5py.Group):
            return None
        if node.name != "/" and _class_of(node) not in ("", "struct"):
            return None
        return {name: part for name, part in node.items() if not name.startswith("#")}

    def plain_value(self, node: Any, name: str) -> Any:
        """Numbers, text, or the content of a cell array, axes as MATLAB shows them."""
        try:
            return self._matlab_value(node, name)
        except (OSError, RuntimeError) as error:
            raise unreadable(self.label, ".mat", error) from error

    def stored_value(self, node: Any, name: str) -> Any:
        """A numeric array left in its file, axes as MATLAB shows them."""
        if isinstance(node, h5py.Group) or _class_of(node) not in (*_NUMBERS, "") or "MATLAB_empty" in node.attrs:
            return self.plain_value(node, name)
        return (
            self.plain_value(node, name) if node.dtype.kind not in "biufcV" else Hdf5Array(self.path, node, turned=True)
        )

    def _matlab_value(self, node: Any, name: str) -> Any:
        kind = _class_of(node)
        is_reference = isinstance(node, h5py.Dataset) and h5py.check_ref_dtype(node.dtype) is h5py.Reference
        if "MATLAB_object_decode" in node.attrs or kind not in (*_NUMBERS, "", "char", "cell", "struct"):
            raise _object(self.label, self.path, name, kind or "unknown", "-v7.3")
        if bool(node.attrs.get("MATLAB_empty", 0)):
            return "" if kind == "char" else [] if kind == "cell" else np.empty((0, 0))
        if is_reference:  # a cell array, or a field of a struct array
            # MATLAB's order of elements is HDF5's, both axes and order being reversed.
            cells = [self._matlab_value(self.file[reference], name) for reference in np.asarray(node[()]).ravel()]
            return cells_as_value(cells, f"{self.label}, {name}", "split it into two variables")
        if isinstance(node, h5py.Group):
            raise refusal(
                f"{self.label}, {name}", "numbers or text", "a struct inside a cell", "store its fields apart"
            )
        array = np.asarray(node[()]).transpose()
        if kind == "char":
            return char_rows(array)
        if kind == "logical":
            return array.astype(bool)
        return plain(array, f"{self.label}, {name}", "save it as numbers or text")


def _class_of(node: Any) -> str:
    kind = node.attrs.get("MATLAB_class", b"")
    return kind.decode("ascii", "replace") if isinstance(kind, bytes) else str(kind)


def write_matlab(
    path: Path, values: Any, parts: Mapping[str, Any], *, name: str = "power", where: str | None = None
) -> None:
    """A file of version 5, dots as structs, texts as cells."""
    where = where or f"write_power, {path}"
    if values.nbytes > _LARGEST_V5:
        raise refusal(
            where,
            "at most 2 GiB in a .mat file",
            f"{values.nbytes / 2**30:.1f} GiB",
            'write ".h5", which MATLAB reads too',
        )
    unfit = [one for one in parts if not all(_is_field(word) for word in one.split("."))]
    if unfit:
        raise refusal(
            where,
            "trial columns that are names in MATLAB (letters, digits, underscores)",
            ", ".join(f'"{one.removeprefix("trials.")}"' for one in unfit),
            'rename them or write ".h5"',
        )
    tree: dict[str, Any] = {name: np.asarray(values)}
    for part, value in parts.items():
        *groups, last = part.split(".")
        inside = tree
        for group in groups:
            inside = inside.setdefault(group, {})
        array = np.asarray(value)
        if array.dtype.kind == "U" and array.ndim:
            cells = np.empty((array.size, 1), dtype=object)
            cells[:, 0] = array.tolist()
            inside[last] = cells
        else:
            inside[last] = str(array) if array.dtype.kind == "U" else array
    with written_whole(path) as temporary:
        scipy.io.savemat(temporary, tree, long_field_names=True, oned_as="column")


def _is_field(name: str) -> bool:
    return name.isascii() and name.isidentifier() and not name.startswith("_") and len(name) <= 63
