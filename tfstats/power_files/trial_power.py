"""TrialPower: one subject's per-trial time-frequency power, in memory or still in its file."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from os import PathLike, fspath
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from tfstats.foundations.axes import (
    checked_frequencies,
    checked_labels,
    checked_times,
    closed_window,
    label_positions,
    label_text,
)
from tfstats.foundations.checks import closest, one_of
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.power_files.stored_values import (
    LazyPower,
    PickedValues,
    Place,
    StoredValues,
    block_places,
    storage_order,
)
from tfstats.power_files.value_checks import ValueCheck

__all__ = ["AXES", "SCALINGS", "TrialPower"]

AXES = ("trials", "channels", "frequencies", "times")
SCALINGS = ("amplitude", "density")


class TrialPower:
    """Linear time-frequency power of one subject, trial by trial.

    Parameters
    ----------
    values : array (trials, channels, frequencies, times)
        Linear power above 0, NaN where it could not be estimated.  An array, a memory map or an HDF5 dataset; the
        last two stay in their file and are read block by block.  float32 stays float32, all else becomes float64.
    frequencies : array, Hz
        Positive, ascending, any spacing.
    times : array, s
        Ascending, even to within half a step, relative to the event.
    channels : sequence of str
    trials : pandas.DataFrame
        One row a trial, in the order of the values; its columns are what conditions are made of.
    subject : str
    power_unit : str, optional
        For instance "µV²/Hz".
    wavelet_cycles : float or array, optional
        Cycles of the wavelets, one number or one a frequency; None where unknown.
    scaling : "density", "amplitude" or None
        "density": unit-energy wavelets, power per Hz; "amplitude": unit gain at the centre; None: unknown.
    source : path, optional
        The file it came from, for refusals and provenance.
    notes : sequence of str, optional
        Sentences on what was done to the values ("... turned back from decibels").

    Attributes
    ----------
    values, frequencies, times, power_unit, scaling
        As given; `values` is a numpy array, or a view of the file with `shape`, `dtype`, slicing and `numpy.asarray`.
    channels : tuple of str
    trials : pandas.DataFrame with a RangeIndex
    wavelet_cycles : None or array with one number a frequency
    source : str or None
    notes : tuple of str

    Raises
    ------
    InputError
        All mistakes at once: axes that do not fit, labels twice, values that are not linear power (0, negative,
        infinite, NaN everywhere, decibels).  Values in a file are looked at when blocks are read, or by `check`.

    Notes
    -----
    Arrays are looked through once when the object is made (two passes over memory) and never copied unless their
    type must change.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tfstats as tfs
    >>> power = tfs.TrialPower(np.ones((2, 1, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
    ...     channels=["Fz"], trials=pd.DataFrame({"memory": ["recalled", "missed"]}), subject="S1")
    >>> power
    <TrialPower S1: 2 trials x 1 channels x 3 frequencies x 4 times>
    >>> power.select(trials={"memory": "missed"}).values.shape
    (1, 1, 3, 4)
    """

    values: Any
    frequencies: NDArray[np.float64]
    times: NDArray[np.float64]
    channels: tuple[str, ...]
    trials: pd.DataFrame
    subject: str
    power_unit: str | None
    wavelet_cycles: NDArray[np.float64] | None
    scaling: str | None
    source: str | None
    notes: tuple[str, ...]

    def __init__(
        self,
        values: Any,
        *,
        frequencies: ArrayLike,
        times: ArrayLike,
        channels: Iterable[object],
        trials: pd.DataFrame,
        subject: object,
        power_unit: str | None = None,
        wavelet_cycles: ArrayLike | None = None,
        scaling: str | None = None,
        source: str | PathLike[str] | None = None,
        notes: Iterable[str] = (),
    ) -> None:
        self.subject = label_text(subject)
        self.source = None if source is None else fspath(source)
        self.notes = (notes,) if isinstance(notes, str) else tuple(notes)
        self.power_unit = None if power_unit is None else str(power_unit)
        self._whole = False
        problems = Problems()
        if not self.subject:
            problems.add("power, subject", "a name", "an empty one", "name the subject")
        with problems.gathering():
            self.frequencies = checked_frequencies(frequencies, self._where("frequencies"))
        with problems.gathering():
            self.times = checked_times(times, self._where("times"))
        with problems.gathering():
            self.channels = checked_labels(channels, self._where("channels"), of="channel")
        with problems.gathering():
            self.values = _numbers(values, self._where("values"))
        if isinstance(trials, pd.DataFrame):
            self.trials = trials.reset_index(drop=True)
        else:
            problems.add(
                self._where("trials"),
                "a DataFrame with one row a trial",
                type(trials).__name__,
                'write pandas.DataFrame({"memory": [...]})',
            )
        self.scaling = scaling
        if scaling is not None:
            with problems.gathering():
                one_of(scaling, SCALINGS, self._where("scaling"), remedy="choose one of them, or None where unknown")
        problems.raise_if_any()  # what follows compares the parts with each other
        for axis, name in enumerate(AXES):
            length = len(getattr(self, name))
            if self.values.shape[axis] != length:
                problems.add(
                    self._where(name),
                    f"as many as axis {axis} of the values has, {self.values.shape[axis]}",
                    length,
                    f"order the values as ({', '.join(AXES)}) and give each its label",
                )
        with problems.gathering():
            self.wavelet_cycles = _checked_cycles(wavelet_cycles, self.frequencies.size, self._where("wavelet_cycles"))
        problems.raise_if_any()
        if not isinstance(self.values, LazyPower):
            self.check()

    def _where(self, part: str) -> str:
        parts = [f"subject {self.subject}" if self.subject else "power", self.source, part]
        return ", ".join(one for one in parts if one is not None)

    def __repr__(self) -> str:
        sizes = " x ".join(f"{size} {name}" for size, name in zip(self.values.shape, AXES))
        return f"<TrialPower {self.subject}: {sizes}>"

    def _changed(self, **changes: Any) -> TrialPower:
        """A part of this one: axes that were checked before are not checked again, values keep their verdict."""
        made = object.__new__(TrialPower)
        made.__dict__.update({**self.__dict__, **changes})
        return made

    def blocks(self) -> Iterator[tuple[Place, NDArray[Any]]]:
        """All values, block by block, along the axis that is stored slowest.

        Yields
        ------
        place : four slices
            Where the block stands: trials, channels, frequencies, times.
        block : array (trials, channels, frequencies, times)
            float32 or float64, about 32 MiB; a view where the values are in memory, so do not write to it.

        Raises
        ------
        InputError
            Values that are not linear power, when a file's values are read for the first time; the text speaks of
            the whole file.

        Examples
        --------
        >>> import numpy as np, pandas as pd, tfstats as tfs
        >>> power = tfs.TrialPower(np.ones((2, 1, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
        ...     channels=["Fz"], trials=pd.DataFrame(index=range(2)), subject="S1")
        >>> sum(block.sum() for place, block in power.blocks())
        np.float64(24.0)
        """
        check = None if self._whole else ValueCheck()
        for place, block in self._blocks():
            if check is not None and not check.look(block, place):
                self.check()
            yield place, block
        if check is not None:
            self._judge(check)

    def _blocks(self) -> Iterator[tuple[Place, NDArray[Any]]]:
        values = self.values
        lazy = isinstance(values, LazyPower)
        order = values.storage_order if lazy else storage_order(values)
        for place in block_places(values.shape, order, values.dtype.itemsize, values.chunk if lazy else None):
            yield place, values[place]

    def check(self) -> None:
        """Read all values once and refuse what is not linear power.

        Raises
        ------
        InputError
            Zero, negative or infinite values (how many, the smallest, the first trial and channel), NaN everywhere,
            or values spread like decibels.
        """
        if self._whole:
            return
        check = ValueCheck()
        for place, block in self._blocks():
            check.look(block, place)
        self._judge(check)

    def _judge(self, check: ValueCheck) -> None:
        found = check.problems(self._where("values"), self.channels)
        if found:
            raise InputError(found)
        self._whole = True

    def as_array(self) -> NDArray[Any]:
        """All values in memory, checked; the array itself where it is in memory already."""
        if not isinstance(self.values, LazyPower):
            return np.asarray(self.values)
        array = np.empty(self.values.shape, dtype=self.values.dtype)
        for place, block in self.blocks():
            array[place] = block
        return array

    def select(
        self,
        *,
        trials: ArrayLike | Mapping[str, Any] | None = None,
        channels: Iterable[object] | None = None,
        frequencies: Sequence[float] | None = None,
        times: Sequence[float] | None = None,
    ) -> TrialPower:
        """A part of the power; values in a file stay there.

        Parameters
        ----------
        trials : bool mask, positions, or mapping of column to label (or list of labels)
            Labels are compared as text: 2.0 is "2", a logical true "1".
        channels : sequence of str
            In the order given.
        frequencies : (low, high) in Hz, closed
        times : (start, stop) in s, closed

        Raises
        ------
        InputError
            What is not there: columns, labels, channels, windows without a point; all mistakes at once.

        Examples
        --------
        >>> import numpy as np, pandas as pd, tfstats as tfs
        >>> power = tfs.TrialPower(np.ones((2, 2, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
        ...     channels=["Fz", "Cz"], trials=pd.DataFrame({"load": [2, 4]}), subject="S1")
        >>> power.select(trials={"load": "4"}, channels=["Cz"], frequencies=(4, 6), times=(0, 0.1)).values.shape
        (1, 1, 2, 2)
        """
        problems = Problems()
        rows = np.arange(self.values.shape[0])
        places = list(range(len(self.channels)))
        band, window = slice(0, self.frequencies.size), slice(0, self.times.size)
        if trials is not None:
            with problems.gathering():
                rows = self._rows(trials)
        if channels is not None:
            with problems.gathering():
                places = label_positions(channels, self.channels, self._where("select, channels"), of="channel")
                checked_labels(
                    [self.channels[place] for place in places], self._where("select, channels"), of="channel"
                )
        if frequencies is not None:
            with problems.gathering():
                band = closed_window(self.frequencies, frequencies, self._where("select, frequencies"), "Hz")
        if times is not None:
            with problems.gathering():
                window = closed_window(self.times, times, self._where("select, times"), "s")
        problems.raise_if_any()
        return self._changed(
            values=self._picked(rows, np.array(places), band, window),
            trials=self.trials.iloc[rows].reset_index(drop=True),
            channels=tuple(self.channels[place] for place in places),
            frequencies=self.frequencies[band],
            times=self.times[window],
            wavelet_cycles=None if self.wavelet_cycles is None else self.wavelet_cycles[band],
        )

    def _rows(self, trials: ArrayLike | Mapping[str, Any]) -> NDArray[np.intp]:
        where, count = self._where("select, trials"), len(self.trials)
        if isinstance(trials, Mapping):
            mask = np.ones(count, dtype=bool)
            for column, wanted in trials.items():
                mask &= self._labelled(str(column), wanted, where)
            if not mask.any():
                words = ", ".join(f"{column} {wanted!r}" for column, wanted in trials.items())
                raise refusal(where, "labels that some trial has together", words, "choose other labels")
            return np.flatnonzero(mask)
        rows = np.asarray(trials)
        if rows.dtype == bool:
            if rows.shape != (count,):
                raise refusal(
                    where,
                    f"one true or false for each of the {count} trials",
                    f"shape {rows.shape}",
                    "give one a trial",
                )
            return np.flatnonzero(rows)
        if rows.ndim != 1 or rows.dtype.kind not in "iu" or np.any((rows < 0) | (rows >= count)):
            raise refusal(
                where,
                f"a mask, positions from 0 to {count - 1}, or a mapping of column to label",
                repr(trials),
                "give one of these",
            )
        return rows.astype(np.intp)

    def _labelled(self, column: str, wanted: Any, where: str) -> NDArray[np.bool_]:
        names = [str(name) for name in self.trials.columns]
        if column not in names:
            raise refusal(
                where,
                f"a trial column among {listed(names)}",
                f'"{column}"',
                f"{closest(column, names)}use the name in the trial table",
            )
        several = isinstance(wanted, (list, tuple, set, frozenset, np.ndarray))
        texts = {label_text(one) for one in wanted} if several else {label_text(wanted)}
        return np.array(
            [label_text(cell) in texts for cell in self.trials.iloc[:, names.index(column)].tolist()], dtype=bool
        )

    def _picked(self, rows: NDArray[np.intp], places: NDArray[np.intp], band: slice, window: slice) -> Any:
        values = self.values
        if isinstance(values, LazyPower):
            return PickedValues(
                values, [rows, places, np.arange(band.start, band.stop), np.arange(window.start, window.stop)]
            )
        values = values[:, :, band, window]
        for axis, positions in ((1, places), (0, rows)):
            if positions.size != values.shape[axis] or np.any(positions != np.arange(positions.size)):
                values = np.take(values, positions, axis=axis)
        return values

    def mean_across(self, axis: str, groups: Mapping[str, Sequence[object]] | None = None) -> TrialPower:
        """Power averaged over groups of channels, before anything is made relative.

        Parameters
        ----------
        axis : "channels"
        groups : mapping of name to channels, optional
            The new channels, in order; None: one of all channels.

        Returns
        -------
        TrialPower
            In memory.  Channels carry the names of the groups and `notes` says which channels they are.

        Raises
        ------
        InputError
            Another axis, an empty group, channels that are not there.

        Notes
        -----
        The mean is arithmetic, of linear power, with equal weights.  A channel that is NaN throughout is left out of
        its groups and named in `notes`; elsewhere a point of a trial where any channel of the group is NaN becomes
        NaN, so that a trial's mean never runs over other channels than that of the next trial.

        Examples
        --------
        >>> import numpy as np, pandas as pd, tfstats as tfs
        >>> values = np.stack([np.full((3, 4), 1.0), np.full((3, 4), 3.0)])[None]
        >>> power = tfs.TrialPower(values, frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], channels=["Fz", "Cz"],
        ...     trials=pd.DataFrame(index=range(1)), subject="S1")
        >>> power.mean_across("channels", {"midline": ["Fz", "Cz"]}).values[0, 0, 0, 0]
        np.float64(2.0)
        """
        one_of(axis, ("channels",), self._where("mean_across, axis"), remedy="average the other axes on maps")
        members = self._members(groups)
        silent = self._silent_channels()
        heard = {name: [place for place in places if place not in silent] for name, places in members.items()}
        trials, _, frequencies, times = self.values.shape
        sums = np.zeros((trials, len(members), frequencies, times))
        for place, block in self.blocks():
            for number, places in enumerate(heard.values()):
                inside = [one - place[1].start for one in places if place[1].start <= one < place[1].stop]
                if inside:
                    sums[place[0], number, place[2], place[3]] += block[:, inside].sum(axis=1, dtype=np.float64)
        for number, places in enumerate(heard.values()):
            sums[:, number] *= 1.0 / len(places) if places else np.nan
        words = "; ".join(f"{name}: {', '.join(self.channels[place] for place in p)}" for name, p in members.items())
        notes = [f"Power was averaged over channels ({words}), each channel weighing the same."]
        left_out = sorted({place for places in members.values() for place in places} & silent)
        if left_out:
            named = ", ".join(self.channels[place] for place in left_out)
            notes.append(f"In that mean channels without any power were left out: {named} (subject {self.subject}).")
        return self._changed(
            values=sums.astype(self.values.dtype, copy=False),
            channels=tuple(members),
            notes=(*self.notes, *notes),
        )

    def _members(self, groups: Mapping[str, Sequence[object]] | None) -> dict[str, list[int]]:
        if groups is None:
            return {f"mean of {len(self.channels)} channels": list(range(len(self.channels)))}
        where = self._where("mean_across, channels")
        if not isinstance(groups, Mapping) or not groups:
            raise refusal(
                where,
                "a mapping of group name to channels",
                repr(groups),
                'write {"frontal": ["F3", "Fz"]} for instance',
            )
        problems, members = Problems(), {}
        for name, wanted in groups.items():
            place = f'{where}, group "{name}"'
            with problems.gathering():
                # dict.fromkeys: a channel named twice must not weigh twice.
                members[str(name)] = list(dict.fromkeys(label_positions(wanted, self.channels, place, of="channel")))
                if not members[str(name)]:
                    problems.add(place, "at least one channel", "none", "name its channels")
        problems.raise_if_any()
        return members

    def _silent_channels(self) -> set[int]:
        heard = np.zeros(len(self.channels), dtype=bool)
        for place, block in self.blocks():
            heard[place[1]] |= ~np.isnan(np.fmax.reduce(np.fmax.reduce(np.fmax.reduce(block, axis=3), axis=2), axis=0))
        return set(np.flatnonzero(~heard).tolist())


def _numbers(values: Any, where: str) -> Any:
    """An array of float32 or float64, or a view of what lies in a file."""
    if isinstance(values, LazyPower):
        return values
    in_file = isinstance(values, np.memmap) or not isinstance(values, np.ndarray) and hasattr(values, "dtype")
    try:
        array: Any = values if in_file else np.asarray(values)
        kind, shape = array.dtype.kind, tuple(array.shape)
    except (ValueError, AttributeError) as error:
        raise refusal(where, f"an array ({', '.join(AXES)})", "rows of unequal length", "fill gaps with NaN") from error
    if kind not in "fiu":
        remedy = 'read it with contents = "complex"' if kind == "c" else "convert it to numbers"
        raise refusal(where, "real numbers", f"type {array.dtype}", remedy)
    if len(shape) != 4 or 0 in shape:
        raise refusal(where, f"four axes, none empty ({', '.join(AXES)})", f"shape {shape}", "add axes of length one")
    if in_file:
        return StoredValues(array)
    return array if array.dtype in (np.float32, np.float64) else array.astype(np.float64)


def _checked_cycles(cycles: ArrayLike | None, frequencies: int, where: str) -> NDArray[np.float64] | None:
    """Cycles as one number a frequency."""
    if cycles is None:
        return None
    try:
        array = np.asarray(cycles, dtype=np.float64).reshape(-1)
    except (TypeError, ValueError):
        array = np.empty(0)
    if array.size not in (1, frequencies) or not np.all(array > 0) or not np.all(np.isfinite(array)):
        raise refusal(
            where,
            f"one positive number, or one for each of the {frequencies} frequencies",
            repr(cycles) if array.size < 5 else f"{array.size} numbers, smallest {array.min():g}",
            "give the cycles of the wavelets",
        )
    return np.full(frequencies, array[0]) if array.size == 1 else array
