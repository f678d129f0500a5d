"""What every reader offers: names with dots that go into groups and structs, and plain values under them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.errors import InputError, refusal

__all__ = ["OpenFile", "as_texts", "cells_as_value", "char_rows", "plain", "single", "unreadable"]


class OpenFile:
    """A file opened for reading.  A reader of a further format subclasses this.

    Parameters
    ----------
    path : Path
    label : str
        How refusals begin: "subject S1, power/S1.mat".

    Notes
    -----
    Subclasses set `root` and define `children` (the named parts of a node, None for a leaf), `plain_value` (a leaf
    as array, text or list of text) and, where a leaf can stay in its file, `stored_value`.
    """

    root: Any

    def __init__(self, path: Path, label: str) -> None:
        self.path, self.label = path, label

    def __enter__(self) -> OpenFile:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Let go of the file; stored values that were handed out keep what they need."""

    def children(self, node: Any) -> Mapping[str, Any] | None:
        """The named parts of a node; None for a leaf."""
        raise NotImplementedError

    def plain_value(self, node: Any, name: str) -> Any:
        """A leaf in memory: array of numbers, text, or list of text."""
        raise NotImplementedError

    def stored_value(self, node: Any, name: str) -> Any:
        """A leaf as StoredArray, read by slices; in memory where the format allows no less."""
        return self.plain_value(node, name)

    def axis_names(self, name: str) -> tuple[str, ...] | None:
        """The file's own names of an array's axes, where the format has such names."""
        return None

    def get(self, name: str, *, stored: bool = False) -> Any:
        """The value under a name; KeyError where there is none or it is a group."""
        node = self._find(self.root, name)
        if self.children(node) is not None:
            raise KeyError(name)
        return self.stored_value(node, name) if stored else self.plain_value(node, name)

    def __contains__(self, name: str) -> bool:
        try:
            return self.children(self._find(self.root, name)) is None
        except KeyError:
            return False

    def under(self, group: str) -> dict[str, str]:
        """The leaves under a group or struct: their names inside it, and their full names."""
        prefix = group + "."
        found = {}
        for name, node in (self.children(self.root) or {}).items():
            if name.startswith(prefix) and self.children(node) is None:
                found[name[len(prefix) :]] = name
        try:
            node = self._find(self.root, group)
        except KeyError:
            return found
        if self.children(node) is not None:
            found |= {name: prefix + name for name in self._leaves(node)}
        return found

    def names(self) -> list[str]:
        """The full names of all leaves."""
        return self._leaves(self.root)

    def _find(self, node: Any, name: str) -> Any:
        parts = self.children(node)
        if parts is None:
            raise KeyError(name)
        if name in parts:
            return parts[name]
        # A dot goes into a group or struct, unless the file has a name with that dot in it.
        for place in [number for number, letter in enumerate(name) if letter == "."]:
            head, rest = name[:place], name[place + 1 :]
            if head in parts:
                try:
                    return self._find(parts[head], rest)
                except KeyError:
                    continue
        raise KeyError(name)

    def _leaves(self, node: Any) -> list[str]:
        found: list[str] = []
        for name, part in (self.children(node) or {}).items():
            if self.children(part) is None:
                found.append(name)
            else:
                found += [f"{name}.{inner}" for inner in self._leaves(part)]
        return found


def plain(array: NDArray[Any], where: str, remedy: str) -> Any:
    """Numbers as they are; text as str or list of str; anything else is refused with the remedy."""
    kind = array.dtype.kind
    if kind in "biufc" or array.dtype.names:
        return array
    if kind in "US":
        return _text(array)
    if kind == "O" and all(isinstance(cell, (str, bytes)) for cell in array.ravel()):
        return _text(array)
    raise refusal(where, "numbers or text", f"type {array.dtype}", remedy)


def _text(array: NDArray[Any]) -> str | list[str]:
    cells = [
        cell.decode("utf-8", "replace") if isinstance(cell, bytes) else str(cell) for cell in array.ravel().tolist()
    ]
    cells = [cell.strip().strip("\0") for cell in cells]
    return cells[0] if array.ndim == 0 else cells


def unreadable(label: str, kind: str, error: BaseException | None = None) -> InputError:
    """The refusal of a file that is not what its ending says, or ends too early."""
    # Library messages carry addresses and offsets: the kind of error is what helps.
    reason = f" ({type(error).__name__})" if error is not None else ""
    return refusal(label, f"a whole {kind} file", f"one that cannot be read{reason}", "copy or write the file again")


def single(value: Any) -> Any:
    """A text or number that may come as an array of one."""
    if isinstance(value, (list, tuple)) and len(value) == 1:
        return value[0]
    if isinstance(value, np.ndarray) and value.size == 1:
        return value.reshape(-1)[0].item()
    return value


def as_texts(value: Any) -> Sequence[Any]:
    """A list of labels that may come as one text or as an array of numbers."""
    if isinstance(value, str):
        return [value]
    return value.reshape(-1).tolist() if isinstance(value, np.ndarray) else value


def char_rows(codes: Any) -> str | list[str]:
    """Character codes (rows, columns) as text; several rows are a list."""
    rows = np.atleast_2d(codes)
    texts = ["".join(map(chr, row.astype(np.int64) & 0xFFFF)).strip().strip("\0") for row in rows]
    return texts[0] if len(texts) == 1 else texts


def cells_as_value(cells: list[Any], where: str, remedy: str) -> Any:
    """A cell array: all texts give a list of texts, all single numbers an array."""
    if all(isinstance(cell, str) or isinstance(cell, np.ndarray) and cell.size == 0 for cell in cells):
        return [cell if isinstance(cell, str) else "" for cell in cells]
    if all(isinstance(cell, np.ndarray) and cell.size <= 1 and cell.dtype.kind in "biuf" for cell in cells):
        return np.array([cell.item() if cell.size else np.nan for cell in cells])
    raise refusal(where, "cells that are all text or all single numbers", "a mixture", remedy)
