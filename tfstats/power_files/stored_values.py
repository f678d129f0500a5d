"""Power that stays in its file: read block by block, seen as (trials, channels, frequencies, times)."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any, Protocol

import numpy as np
from numpy.typing import DTypeLike, NDArray

__all__ = [
    "BLOCK_BYTES",
    "JoinedValues",
    "LazyPower",
    "PickedValues",
    "Place",
    "StoredArray",
    "StoredValues",
    "block_places",
    "joined_values",
    "storage_order",
]

BLOCK_BYTES = 32 * 2**20
"""Blocks are about this large: far below the memory of any computer, far above the cost of one read."""

WASTE = 8
"""Gaps of up to this many rows along the slowest axis are read through, since a further read costs more."""

Place = tuple[slice, slice, slice, slice]
Positions = NDArray[np.intp]


class StoredArray(Protocol):
    """What a reader hands over for the power: an array in the file's own order of axes, read by slices."""

    @property
    def shape(self) -> tuple[int, ...]: ...
    @property
    def dtype(self) -> np.dtype[Any]: ...
    def __getitem__(self, key: Any) -> Any: ...


def storage_order(array: Any) -> tuple[int, ...]:
    """Axes from the one stored slowest to the one stored fastest."""
    stated = getattr(array, "storage_order", None)
    if stated is not None:
        return tuple(stated)
    if isinstance(array, np.ndarray):
        return tuple(
            sorted(range(array.ndim), key=lambda axis: -abs(array.strides[axis]) if array.shape[axis] > 1 else 0)
        )
    return tuple(range(len(array.shape)))


def block_places(
    shape: Sequence[int], order: Sequence[int], item_bytes: int, chunk: Sequence[int] | None = None
) -> Iterator[Place]:
    """Places of blocks that cover the array, each as a run along the axis stored slowest.

    Where one step along that axis is larger than a block, the steps are taken one at a time and split along the
    next axis.  `chunk` are the pieces in which a file is packed: a block takes whole ones.
    """
    spans = [int(length) for length in shape]
    if 0 in spans:
        return
    split = len(order) - 1
    inner = item_bytes
    for number in range(len(order) - 1, -1, -1):
        split = number
        if inner * spans[order[number]] > BLOCK_BYTES:
            break
        inner *= spans[order[number]]
    else:
        inner = inner // spans[order[0]]
    axis = order[split]
    step = max(1, BLOCK_BYTES // max(inner, 1))
    if chunk is not None and chunk[axis] > 1:
        step = max(1, -(-step // chunk[axis])) * chunk[axis]
    outer = order[:split]
    for combination in np.ndindex(*(spans[one] for one in outer)):
        place = [slice(0, length) for length in spans]
        for one, number in zip(outer, combination):
            place[one] = slice(number, number + 1)
        for first in range(0, spans[axis], step):
            place[axis] = slice(first, min(first + step, spans[axis]))
            yield place[0], place[1], place[2], place[3]


class LazyPower:
    """Base of the views: slices and lists of positions as numpy takes them, one list at a time."""

    shape: tuple[int, int, int, int]
    dtype: np.dtype[Any]
    storage_order: tuple[int, ...] = (0, 1, 2, 3)
    chunk: tuple[int, ...] | None = None
    ndim = 4

    def read(self, positions: Sequence[Positions]) -> NDArray[Any]:
        """The values at the positions along each of the four axes (as if by `numpy.ix_`)."""
        raise NotImplementedError

    @property
    def size(self) -> int:
        """Number of values."""
        return int(np.prod(self.shape))

    @property
    def nbytes(self) -> int:
        """Bytes in memory if all were read."""
        return self.size * self.dtype.itemsize

    def __len__(self) -> int:
        return self.shape[0]

    def __getitem__(self, key: Any) -> NDArray[Any]:
        keys = list(key) if isinstance(key, tuple) else [key]
        if Ellipsis in [one for one in keys if not isinstance(one, np.ndarray)]:
            gap = next(number for number, one in enumerate(keys) if one is Ellipsis)
            keys[gap : gap + 1] = [slice(None)] * (5 - len(keys))
        keys += [slice(None)] * (4 - len(keys))
        if len(keys) > 4 or sum(not isinstance(one, (slice, int, np.integer)) for one in keys) > 1:
            raise IndexError("power in a file is indexed by up to four slices or numbers and one list of positions")
        positions, dropped = [], []
        for axis, (one, length) in enumerate(zip(keys, self.shape)):
            chosen = np.arange(length)[one]
            if chosen.ndim == 0:
                dropped.append(axis)
            positions.append(chosen.reshape(-1))
        values = self.read(positions)
        return values.reshape([length for axis, length in enumerate(values.shape) if axis not in dropped])

    def __array__(self, dtype: DTypeLike | None = None, copy: bool | None = None) -> NDArray[Any]:
        if copy is False:
            raise ValueError("power in a file cannot become an array without being read")
        values = self[:]
        return values if dtype is None else values.astype(dtype, copy=False)


class StoredValues(LazyPower):
    """A stored array as (trials, channels, frequencies, times) linear power.

    Parameters
    ----------
    source : StoredArray
    axes : four of int or None
        The source's axis that holds trials, channels, frequencies and times; None where it has none (length 1).
        Axes of the source that are not named must have length 1.
    contents : "linear_power", "amplitude", "complex" or "decibel"
        What the source holds; it is turned into linear power as it is read.
    """

    def __init__(self, source: Any, axes: Sequence[int | None] = (0, 1, 2, 3), contents: str = "linear_power") -> None:
        self.source, self.axes, self.contents = source, tuple(axes), contents
        lengths = [1 if axis is None else int(source.shape[axis]) for axis in self.axes]
        self.shape = (lengths[0], lengths[1], lengths[2], lengths[3])
        single = (
            source.dtype in (np.dtype(np.float32), np.dtype(np.complex64)) or _half_of_pair(source.dtype) == np.float32
        )
        self.dtype = np.dtype(np.float32) if single else np.dtype(np.float64)
        absent = [axis for axis in range(4) if self.axes[axis] is None]
        self.storage_order = (*absent, *(self.axes.index(axis) for axis in storage_order(source) if axis in self.axes))
        chunk = getattr(source, "chunk", getattr(source, "chunks", None))
        self.chunk = None if chunk is None else tuple(1 if axis is None else int(chunk[axis]) for axis in self.axes)

    def read(self, positions: Sequence[Positions]) -> NDArray[Any]:
        """See LazyPower; the slowest axis is read in runs, the others from first to last position."""
        slowest = next(axis for axis in self.storage_order if self.axes[axis] is not None)
        keys: list[slice] = [slice(0, 1)] * len(self.source.shape)
        taken: list[Positions | None] = [None] * 4
        for axis, wanted in enumerate(positions):
            if wanted.size == 0:
                return np.empty([one.size for one in positions], dtype=self.dtype)
            home = self.axes[axis]
            low, high = int(wanted.min()), int(wanted.max()) + 1
            if home is not None:
                keys[home] = slice(low, high)
            if axis != slowest and (wanted.size != high - low or np.any(np.diff(wanted) != 1)):
                taken[axis] = wanted - low
        parts = []
        rows, back = np.unique(positions[slowest], return_inverse=True)
        home = self.axes[slowest]
        assert home is not None
        for run in np.split(rows, np.flatnonzero(np.diff(rows) > WASTE) + 1):
            keys[home] = slice(int(run[0]), int(run[-1]) + 1)
            part = self._in_order(np.asarray(self.source[tuple(keys)]))
            parts.append(part if part.shape[slowest] == run.size else np.take(part, run - run[0], axis=slowest))
        values = parts[0] if len(parts) == 1 else np.concatenate(parts, axis=slowest)
        if back.size != rows.size or np.any(np.diff(back) != 1):
            taken[slowest] = back
        for axis, wanted_or_none in enumerate(taken):
            if wanted_or_none is not None:
                values = np.take(values, wanted_or_none, axis=axis)
        return self._as_power(values)

    def _in_order(self, raw: NDArray[Any]) -> NDArray[Any]:
        present = [axis for axis in self.axes if axis is not None]
        turned = raw.transpose(present + [axis for axis in range(raw.ndim) if axis not in present])
        shape = iter(turned.shape)
        return turned.reshape([1 if axis is None else next(shape) for axis in self.axes])

    def _as_power(self, raw: NDArray[Any]) -> NDArray[Any]:
        if raw.dtype.names:
            real, imaginary = (raw[name].astype(self.dtype) for name in raw.dtype.names)
            return np.asarray(real**2 + imaginary**2)
        if raw.dtype.kind == "c":
            real, imaginary = raw.real.astype(self.dtype), raw.imag.astype(self.dtype)
            return np.asarray(real**2 + imaginary**2)
        values = raw.astype(self.dtype, copy=False)
        if self.contents == "amplitude":
            return np.asarray(values**2)
        if self.contents == "decibel":
            return np.asarray(np.power(values.dtype.type(10.0), values / 10))
        return values


def _half_of_pair(dtype: np.dtype[Any]) -> np.dtype[Any] | None:
    """The type of the real part where complex numbers are stored as pairs."""
    return None if not dtype.names or len(dtype.names) != 2 else dtype[0]


class PickedValues(LazyPower):
    """Some positions along each axis of a view."""

    def __init__(self, source: LazyPower, positions: Sequence[Positions]) -> None:
        self.source, self.positions = source, [np.asarray(one, dtype=np.intp) for one in positions]
        lengths = [one.size for one in self.positions]
        self.shape = (lengths[0], lengths[1], lengths[2], lengths[3])
        self.dtype, self.storage_order, self.chunk = source.dtype, source.storage_order, source.chunk

    def read(self, positions: Sequence[Positions]) -> NDArray[Any]:
        """See LazyPower."""
        return self.source.read([own[wanted] for own, wanted in zip(self.positions, positions)])


class JoinedValues(LazyPower):
    """Several views one after the other along the trials."""

    def __init__(self, parts: Sequence[LazyPower]) -> None:
        self.parts = tuple(parts)
        self.starts = np.cumsum([0, *(len(part) for part in parts)])
        self.shape = (int(self.starts[-1]), *self.parts[0].shape[1:])
        self.dtype = np.result_type(*(part.dtype for part in parts))
        self.storage_order, self.chunk = self.parts[0].storage_order, self.parts[0].chunk

    def read(self, positions: Sequence[Positions]) -> NDArray[Any]:
        """See LazyPower."""
        trials, *others = positions
        home = np.searchsorted(self.starts, trials, side="right") - 1
        first = int(home[0]) if trials.size else 0
        if np.all(home == first):
            only = self.parts[first].read([trials - self.starts[first], *others])
            return only.astype(self.dtype, copy=False)
        values = np.empty([one.size for one in positions], dtype=self.dtype)
        for number, part in enumerate(self.parts):
            mine = home == number
            if mine.any():
                values[mine] = part.read([trials[mine] - self.starts[number], *others])
        return values


def joined_values(parts: Sequence[Any]) -> Any:
    """Arrays and views one after the other along the trials; in their files where one of them lies there."""
    if len(parts) == 1:
        return parts[0]
    if all(not isinstance(part, LazyPower) for part in parts):
        return np.concatenate(parts)
    return JoinedValues([part if isinstance(part, LazyPower) else StoredValues(part) for part in parts])
