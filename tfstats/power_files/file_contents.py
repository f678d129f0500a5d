"""What lies in a file of someone else, and what each array in it may be."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import InputError
from tfstats.power_files.formats import open_power_file
from tfstats.power_files.layout import DIMENSIONS, assigned_axes
from tfstats.power_files.stored_values import StoredValues
from tfstats.power_files.trial_columns import MISSING
from tfstats.power_files.value_checks import ValueCheck

__all__ = ["FileContents", "FoundArray", "LabelCounts", "label_counts", "looked_into"]

MOST_VALUES = 100_000
"""Arrays up to this size are read and judged by what is in them; larger ones by their shape."""

SAMPLE = 40
"""Positions along each axis that the power is judged by."""

MOST_LABELS = 6
STEP_OF_MILLISECONDS = 0.5
"""Times are at most this far apart in seconds and at least this far apart in milliseconds."""

LARGEST_FREQUENCY = 2000.0

LabelCounts = dict[str, int]


@dataclass(frozen=True)
class FoundArray:
    """A variable of a file."""

    name: str
    shape: tuple[int, ...]
    kind: str
    """number, text, logical, complex, unreadable"""
    values: Any = None
    """Array, text or list of texts, where it is small."""
    meaning: str = ""
    """What it may be, in words."""

    @property
    def length(self) -> int:
        """Of a vector; 0 for anything else."""
        size = int(np.prod(self.shape)) if self.shape else 0
        return size if self.shape and size == max(self.shape) else 0


@dataclass(frozen=True)
class FileContents:
    """The variables of one file, and which of them is what, as far as names, shapes and values tell."""

    path: Path
    arrays: tuple[FoundArray, ...]
    names: dict[str, str] = field(default_factory=dict)
    """Part (power, frequencies, times, channels) to name in the file; what could not be told is absent."""
    trial_columns: dict[str, str] = field(default_factory=dict)
    """Column to name in the file."""
    axes: tuple[str, ...] | None = None
    """Names of the power's axes in the file's order; None where the lengths do not tell."""
    candidates: tuple[tuple[str, ...], ...] = ()
    """What the axes may be where they are not told apart."""
    contents: str = "linear_power"
    time_unit: str = "s"
    lengths: dict[str, int | None] = field(default_factory=dict)
    remarks: tuple[str, ...] = ()

    def array(self, name: str) -> FoundArray:
        """A variable by its name in the file."""
        return next(one for one in self.arrays if one.name == name)

    def values_of(self, part: str) -> Any:
        """Frequencies, times or channels as they lie in the file; None where not found."""
        return self.array(self.names[part]).values if part in self.names else None

    def values_of_text(self, name: str) -> str | None:
        """A single text of the file, such as its subject; None where there is none."""
        found = next((one.values for one in self.arrays if one.name == name and one.kind == "text"), None)
        text = found[0] if isinstance(found, list) and len(found) == 1 else found
        return text if isinstance(text, str) and text else None

    def labels_of(self, column: str) -> LabelCounts | None:
        """Labels of a trial column with their counts; None where there are many."""
        return label_counts(self.array(self.trial_columns[column]).values)


def label_counts(values: Any) -> LabelCounts | None:
    """Labels with their counts, where they are few enough to be conditions: 2 to 6, each in two trials at least."""
    cells = values.ravel().tolist() if isinstance(values, np.ndarray) else list(values) if values is not None else []
    texts = [
        label_text(cell) for cell in cells if not (isinstance(cell, float) and np.isnan(cell)) and cell not in MISSING
    ]
    counts = {label: texts.count(label) for label in sorted(set(texts))} if len(set(texts)) <= MOST_LABELS else {}
    return counts if len(counts) >= 2 and min(counts.values()) >= 2 else None


def looked_into(path: Path, table_rows: Sequence[int] = ()) -> FileContents:
    """Look into a power file.

    Parameters
    ----------
    path : Path
    table_rows : numbers of rows of tables that may hold the file's trials

    Raises
    ------
    InputError
        A file that is not there or cannot be read at all.
    """
    arrays = _arrays(path)
    found = FileContents(path, tuple(arrays))
    power = _power(arrays)
    if power is None:
        return replace(found, remarks=("No array of three or four axes was found that could be power.",))
    names = {"power": power.name}
    rest = [one for one in arrays if one.name != power.name]
    names |= _axes_of(rest, power)
    columns = _trial_columns(rest, power, names)
    lengths: dict[str, int | None] = {
        "trial": None,
        **{
            dimension: next(one.length or len(one.values) for one in arrays if one.name == names[part])
            if part in names
            else None
            for part, dimension in (("channels", "channel"), ("frequencies", "frequency"), ("times", "time"))
        },
    }
    counts = {one.length for one in rest if one.name in columns.values()}
    rows = [count for count in (*sorted(counts), *table_rows) if count in power.shape]
    axes, candidates = _assigned(path, power, lengths, rows)
    if axes is not None:
        trials = power.shape[axes.index("trial")] if "trial" in axes else 1
        lengths["trial"] = trials
        columns = {column: name for column, name in columns.items() if found.array(name).length == trials}
    times = next((one.values for one in rest if one.name == names.get("times")), None)
    contents, remarks = _contents(path, power, axes)
    return FileContents(
        path,
        tuple(_with_meaning(one, names, columns, axes, times) for one in arrays),
        names,
        columns,
        axes,
        candidates,
        contents,
        "ms" if _is_milliseconds(times) else "s",
        lengths,
        remarks,
    )


def _arrays(path: Path) -> list[FoundArray]:
    found = []
    with open_power_file(path, str(path)) as file:
        for name in file.names():
            try:
                value = file.get(name, stored=True)
            except ValueError:
                found.append(FoundArray(name, (), "unreadable"))
                continue
            if isinstance(value, (str, list)):
                found.append(FoundArray(name, () if isinstance(value, str) else (len(value),), "text", value))
                continue
            dtype, shape = np.dtype(value.dtype), tuple(int(length) for length in value.shape)
            kind = {"b": "logical", "c": "complex", "V": "complex"}.get(dtype.kind, "number")
            small = kind in ("number", "logical") and 0 < np.prod(shape, dtype=np.int64) <= MOST_VALUES
            found.append(FoundArray(name, shape, kind, np.asarray(value[...] if shape else value) if small else None))
    return found


def _power(arrays: Sequence[FoundArray]) -> FoundArray | None:
    numeric = [
        one for one in arrays if one.kind in ("number", "complex") and sum(length > 1 for length in one.shape) >= 3
    ]
    named = [one for one in numeric if one.name == "power"]
    ranked = named or sorted(numeric, key=lambda one: -int(np.prod(one.shape, dtype=np.int64)))
    return ranked[0] if ranked else None


def _last_word(name: str) -> str:
    return name.rpartition(".")[2].lower()


def _axes_of(arrays: Sequence[FoundArray], power: FoundArray) -> dict[str, str]:
    """Frequencies, times and channels among the vectors that are as long as an axis of the power."""
    vectors = [one for one in arrays if one.kind == "number" and one.length in power.shape and one.length > 1]
    names: dict[str, str] = {}
    times = [one for one in vectors if _may_be_times(one.values)]
    frequencies = [one for one in vectors if _may_be_frequencies(one.values)]
    # What crosses zero cannot be frequencies; among the others the name decides.
    chosen = _best(times, ("time", "t"), lambda one: bool(np.min(one.values) < 0))
    if chosen is not None:
        names["times"] = chosen.name
    chosen = _best([one for one in frequencies if one is not chosen], ("freq", "f", "hz"), lambda one: False)
    if chosen is not None:
        names["frequencies"] = chosen.name
    texts = [
        one for one in arrays
        if one.kind == "text" and one.length in power.shape and len(set(one.values)) == one.length > 0
    ]  # fmt: skip
    channel = _best(texts, ("chan", "label", "elec", "name"), lambda one: False)
    if channel is not None:
        names["channels"] = channel.name
    return names


def _best(candidates: Sequence[FoundArray], words: Sequence[str], surely: Any) -> FoundArray | None:
    """By its values, else by its name, else the only one."""
    sure = [one for one in candidates if surely(one)]
    if len(sure) == 1:
        return sure[0]
    pool = sure or list(candidates)
    for word in words:
        # A single letter has to be the whole name.
        own = [(_last_word(one.name), one) for one in pool]
        named = [one for name, one in own if name == word or len(word) > 1 and name.startswith(word)]
        if len(named) == 1:
            return named[0]
    return pool[0] if len(pool) == 1 else None


def _vector(values: Any) -> NDArray[np.float64]:
    array = np.ravel(np.asarray(values, dtype=np.float64)) if values is not None else np.empty(0)
    return array if array.size > 1 and bool(np.all(np.isfinite(array))) else np.empty(0)


def _may_be_times(values: Any) -> bool:
    steps = np.diff(_vector(values))
    return bool(steps.size and np.all(steps > 0) and np.ptp(steps) < 0.5 * np.median(steps))


def _may_be_frequencies(values: Any) -> bool:
    array = _vector(values)
    steps = np.diff(array)
    monotone = steps.size and (bool(np.all(steps > 0)) or bool(np.all(steps < 0)))
    return bool(monotone and array.min() > 0 and array.max() <= LARGEST_FREQUENCY)


def _is_milliseconds(values: Any) -> bool:
    array = _vector(values)
    return bool(array.size and np.median(np.diff(array)) >= STEP_OF_MILLISECONDS)


def _trial_columns(arrays: Sequence[FoundArray], power: FoundArray, names: Mapping[str, str]) -> dict[str, str]:
    found: dict[str, str] = {}
    taken = set(names.values())
    own_parts = ("axes", "notes", "wavelet_cycles", "frequencies", "times", "channels")
    for one in arrays:
        fits = one.kind in ("number", "text", "logical") and one.values is not None and one.length in power.shape
        if fits and one.name not in taken and one.length > 1 and _last_word(one.name) not in own_parts:
            column = one.name.rpartition(".")[2]
            found[column if column not in found else one.name.replace(".", "_")] = one.name
    return found


def _assigned(
    path: Path, power: FoundArray, lengths: dict[str, int | None], rows: Sequence[int]
) -> tuple[tuple[str, ...] | None, tuple[tuple[str, ...], ...]]:
    """The axes, or what they may be."""
    own = _own_axes(path, power)
    if own is not None:
        return own, ()
    for trial in (None, *dict.fromkeys(rows)):
        try:
            homes = assigned_axes(power.shape, {**lengths, "trial": trial}, None, "axes")
        except InputError:
            continue
        return _in_file_order(homes, power.shape), ()
    return None, tuple(_possible(power.shape, lengths))


def _own_axes(path: Path, power: FoundArray) -> tuple[str, ...] | None:
    with open_power_file(path, str(path)) as file:
        stated = file.get("axes") if "axes" in file else None
        if isinstance(stated, list) and sorted(stated) == sorted(DIMENSIONS) and len(power.shape) == 4:
            return tuple(stated)
        return file.axis_names(power.name)


def _in_file_order(homes: Sequence[int | None], shape: Sequence[int]) -> tuple[str, ...]:
    pairs = sorted((axis, name) for axis, name in zip(homes, DIMENSIONS) if axis is not None)
    return tuple(name for _, name in pairs)


def _possible(shape: Sequence[int], lengths: Mapping[str, int | None]) -> list[tuple[str, ...]]:
    long_axes = [axis for axis, length in enumerate(shape) if length != 1]
    return [
        chosen
        for chosen in itertools.permutations(DIMENSIONS, len(long_axes))
        if all(lengths[name] in (None, shape[axis]) for name, axis in zip(chosen, long_axes))
    ]


def _contents(path: Path, power: FoundArray, axes: tuple[str, ...] | None) -> tuple[str, tuple[str, ...]]:
    """What the numbers are, by a sample of them."""
    if power.kind == "complex":
        return "complex", ("The values are complex: their squared modulus is taken as power.",)
    if axes is None:
        return "linear_power", ()
    with open_power_file(path, str(path)) as file:
        stored = file.get(power.name, stored=True)
        every = list(range(len(power.shape)))
        long_axes = [axis for axis in every if power.shape[axis] != 1] if len(axes) < len(every) else every
        home = dict(zip(axes, long_axes))
        values = StoredValues(stored, [home.get(name) for name in DIMENSIONS])
        positions = [np.arange(min(length, SAMPLE)) for length in values.shape]
        block = values.read(positions)
    check = ValueCheck()
    check.look(block, tuple(slice(0, length) for length in block.shape))  # type: ignore[arg-type]
    if check.negative:
        return "decibel", (
            f"{check.negative} of {block.size} values looked at are negative, so these are not linear power. If they are "
            "decibels of power, they are turned back; values that are relative to a baseline already cannot be used here.",
        )
    if check.judged and check.decibel_shaped > 0.6 * check.judged:
        return "decibel", ("The values are spread like decibels (about 5.6 dB, skewed to the left).",)
    remarks = []
    if check.zero:
        remarks.append(
            f"{check.zero} of {block.size} values looked at are exactly 0, which is no power: set them to NaN."
        )
    return "linear_power", tuple(remarks)


def _with_meaning(
    one: FoundArray, names: Mapping[str, str], columns: Mapping[str, str], axes: tuple[str, ...] | None, times: Any
) -> FoundArray:
    part = next((part for part, name in names.items() if name == one.name), None)
    column = next((column for column, name in columns.items() if name == one.name), None)
    words = ""
    if part == "power":
        words = "power (" + (" x ".join(axes) if axes else "axes not told apart") + ")"
    elif part in ("frequencies", "times"):
        array = _vector(one.values)
        unit = "Hz" if part == "frequencies" else "ms" if _is_milliseconds(times) else "s"
        words = f"{part} ({array[0]:g} to {array[-1]:g} {unit})"
    elif part == "channels":
        words = "channel names"
    elif column is not None:
        counts = label_counts(one.values)
        words = "trial column"
        if counts:
            words += " (" + ", ".join(f"{label}: {count}" for label, count in counts.items()) + ")"
    elif one.kind == "text" and isinstance(one.values, str):
        words = f'"{one.values[:40]}"'
    elif one.kind == "unreadable":
        words = "only the program that wrote it can read it"
    return replace(one, meaning=words)
