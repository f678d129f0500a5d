"""ConditionMaps: one map a subject and condition, with everything that is known of how it was made."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike, NDArray

from tfstats.averaged_maps.axis_means import AxisMean, mean_over_axis
from tfstats.averaged_maps.map_files import read_map_file, write_map_file
from tfstats.averaged_maps.subject_tables import aligned_counts, aligned_participants
from tfstats.foundations.axes import (
    checked_frequencies,
    checked_labels,
    checked_times,
    closed_window,
    label_positions,
)
from tfstats.foundations.errors import Problems, refusal
from tfstats.foundations.units import symbol_of
from tfstats.normalization import Baseline, averaging_for_chance

__all__ = ["ConditionMaps"]

GEOMETRIC_AS_RATIOS = (
    "Decibels against a geometric baseline mean were averaged as ratios: under no change such a mean lies above zero, "
    'the mean of decibels (of="units") does not.'
)

AXES = ("subjects", "conditions", "channels", "frequencies", "times")


class ConditionMaps:
    """What is the relative power of each subject in each condition?

    Made by `condition_maps`, or from arrays that come from elsewhere.

    Parameters
    ----------
    values : array (subjects, conditions, channels, frequencies, times)
        Any sign, in `unit`; NaN where not estimable.  float32 and float64 stay as they are.
    subjects, conditions, channels : sequence of str
        Labels, each once; numbers become text (2.0 becomes "2").
    frequencies : array
        Hz, ascending, any spacing.
    times : array
        s, ascending, even to within half a step.
    unit : str
        "decibel", "percent_change", "ratio", "z_score", "power" (averaged power without a baseline), or the name of
        a unit from elsewhere.
    trial_counts : DataFrame or array (subjects, conditions), optional
        Trials behind each map.
    participants : DataFrame, optional
        One row a subject, with a column `participant_id`; kept in the order of `subjects`.
    baseline : Baseline, optional
        How the values were made relative; None where that is not known.
    history, cautions : sequence of str
        Sentences: what was done, fit for a methods paragraph; what to mind.
    wavelet_cycles, scaling : optional
        As in TrialPower.
    averaged_by : sequence of (axis, "units" or "ratios")
        Which axes were averaged on maps, and as what.
    of_differences : bool
        Whether the values are differences or slopes of relative power, whose value under no effect is 0 in every unit.

    Raises
    ------
    InputError
        All mistakes at once, each naming its axis.

    Notes
    -----
    No copy of the values is made where they are a float array already.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.zeros((2, 2, 1, 3, 4)), subjects=["S1", "S2"], conditions=["recalled", "missed"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="decibel")
    >>> maps
    <ConditionMaps 2 subjects x 2 conditions x 1 channels x 3 frequencies x 4 times, dB>
    """

    values: NDArray[Any]
    subjects: tuple[str, ...]
    conditions: tuple[str, ...]
    channels: tuple[str, ...]
    frequencies: NDArray[np.float64]
    times: NDArray[np.float64]
    unit: str
    trial_counts: pd.DataFrame | None
    participants: pd.DataFrame | None
    baseline: Baseline | None
    history: tuple[str, ...]
    cautions: tuple[str, ...]
    wavelet_cycles: NDArray[np.float64] | None
    scaling: str | None
    averaged_by: tuple[tuple[str, str], ...]
    of_differences: bool

    def __init__(
        self,
        values: ArrayLike,
        *,
        subjects: Iterable[object],
        conditions: Iterable[object],
        channels: Iterable[object],
        frequencies: ArrayLike,
        times: ArrayLike,
        unit: str,
        trial_counts: pd.DataFrame | ArrayLike | None = None,
        participants: pd.DataFrame | None = None,
        baseline: Baseline | None = None,
        history: Iterable[str] = (),
        cautions: Iterable[str] = (),
        wavelet_cycles: ArrayLike | None = None,
        scaling: str | None = None,
        averaged_by: Iterable[tuple[str, str]] = (),
        of_differences: bool = False,
    ) -> None:
        problems = Problems()
        with problems.gathering():
            self.subjects = checked_labels(subjects, "maps, subjects", of="subject")
        with problems.gathering():
            self.conditions = checked_labels(conditions, "maps, conditions", of="condition")
        with problems.gathering():
            self.channels = checked_labels(channels, "maps, channels", of="channel")
        with problems.gathering():
            self.frequencies = checked_frequencies(frequencies, "maps, frequencies")
        with problems.gathering():
            self.times = checked_times(times, "maps, times")
        with problems.gathering():
            self.values = _checked_values(values)
        if not isinstance(unit, str) or not unit.strip():
            problems.add("maps, unit", "the name of a unit", repr(unit), 'write "decibel" for instance')
        if baseline is not None and not isinstance(baseline, Baseline):
            problems.add("maps, baseline", "a Baseline or None", type(baseline).__name__, "make one with Baseline(...)")
        problems.raise_if_any()  # what follows compares the parts with each other
        # "none" is the absence of a baseline, the unit of what is left is power.
        self.unit = "power" if unit == "none" else unit
        self._check_shape(problems)
        with problems.gathering():
            self.trial_counts = aligned_counts(trial_counts, self.subjects, self.conditions)
        with problems.gathering():
            self.participants = aligned_participants(participants, self.subjects)
        with problems.gathering():
            self.wavelet_cycles = _checked_cycles(wavelet_cycles, self.frequencies.size)
        problems.raise_if_any()
        self.scaling = scaling
        self.baseline = baseline
        self.history = (history,) if isinstance(history, str) else tuple(history)
        self.cautions = (cautions,) if isinstance(cautions, str) else tuple(cautions)
        self.averaged_by = tuple((str(axis), str(of)) for axis, of in averaged_by)
        self.of_differences = bool(of_differences)

    def _check_shape(self, problems: Problems) -> None:
        for axis, name in enumerate(AXES):
            length = len(getattr(self, name))
            if self.values.shape[axis] != length:
                problems.add(
                    f"maps, {name}",
                    f"as many as axis {axis} of the values has, {self.values.shape[axis]}",
                    length,
                    f"order the values as ({', '.join(AXES)}) and give each its label",
                )

    def __repr__(self) -> str:
        sizes = " x ".join(f"{size} {name}" for size, name in zip(self.values.shape, AXES))
        return f"<ConditionMaps {sizes}, {symbol_of(self.unit)}>"

    def _changed(self, **changes: Any) -> ConditionMaps:
        parts = {name: getattr(self, name) for name in _PARTS}
        parts.update(changes)
        return ConditionMaps(parts.pop("values"), **parts)

    def select(
        self,
        *,
        subjects: Iterable[object] | None = None,
        conditions: Iterable[object] | None = None,
        channels: Iterable[object] | None = None,
        frequencies: Sequence[float] | None = None,
        times: Sequence[float] | None = None,
    ) -> ConditionMaps:
        """A part of the maps: labels in the order given, frequencies and times as closed windows (low, high).

        Parameters
        ----------
        subjects, conditions, channels : sequence of str, optional
        frequencies : (low, high) in Hz, optional
        times : (start, stop) in s, optional

        Raises
        ------
        InputError
            Labels that are not there, windows that hold no point; all mistakes at once.

        Examples
        --------
        >>> import numpy as np, tfstats as tfs
        >>> maps = tfs.ConditionMaps(np.zeros((2, 1, 1, 3, 2)), subjects=["S1", "S2"], conditions=["recalled"],
        ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1], unit="decibel")
        >>> maps.select(subjects=["S2"], frequencies=(5, 8)).frequencies
        array([6., 8.])
        """
        problems = Problems()
        chosen: list[Any] = []
        for name, wanted in (("subjects", subjects), ("conditions", conditions), ("channels", channels)):
            chosen.append(list(range(len(getattr(self, name)))))
            if wanted is not None:
                with problems.gathering():
                    chosen[-1] = label_positions(wanted, getattr(self, name), f"select, {name}", of=name[:-1])
        for name, window, unit in (("frequencies", frequencies, "Hz"), ("times", times, "s")):
            chosen.append(slice(None))
            if window is not None:
                with problems.gathering():
                    chosen[-1] = closed_window(getattr(self, name), window, f"select, {name}", unit)
        problems.raise_if_any()
        people, kinds, places, band, when = chosen
        values = self.values[:, :, :, band, when]
        for axis, positions in ((0, people), (1, kinds), (2, places)):
            if positions != list(range(values.shape[axis])):
                values = np.take(values, positions, axis=axis)
        return self._changed(
            values=values,
            subjects=[self.subjects[place] for place in people],
            conditions=[self.conditions[place] for place in kinds],
            channels=[self.channels[place] for place in places],
            frequencies=self.frequencies[band],
            times=self.times[when],
            trial_counts=None if self.trial_counts is None else self.trial_counts.iloc[people, kinds],
            participants=None if self.participants is None else self.participants.iloc[people],
            wavelet_cycles=self._cycles_of(band),
        )

    def _cycles_of(self, band: Any) -> Any:
        cycles = self.wavelet_cycles
        return cycles[band] if cycles is not None and cycles.size > 1 else cycles

    def mean_across(
        self, axis: str, groups: Mapping[str, Sequence[Any]] | None = None, of: str = "units"
    ) -> ConditionMaps:
        """Averages over channels, frequencies or times, each point weighing the same.

        Parameters
        ----------
        axis : "channels", "frequencies" or "times"
        groups : mapping, optional
            Name to members: channel labels for channels, a closed window (low, high) for the others, in ascending
            order.  None: one group of all.
        of : "units" or "ratios"
            For decibels: the mean of decibels, or the decibel of the mean ratio.  Between conditions the first; for a
            test against no change the second, since the decibel of a mean over few trials is biased and the bias
            does not shrink by averaging decibels.  The other units are linear in the ratio, so both agree.

        Returns
        -------
        ConditionMaps
            Channels carry the names of their groups; a band or window stands at the mean of its points.
            `history` says what was averaged, `averaged_by` as what.

        Raises
        ------
        InputError
            An unknown axis or option, an empty group, members that are not there, bands or windows out of order.

        Notes
        -----
        A point that is NaN in a map is left out of the mean in every map, so that subjects and conditions are
        compared over the same points; maps that are NaN in the whole group stay NaN and have no say.

        Examples
        --------
        >>> import numpy as np, tfstats as tfs
        >>> maps = tfs.ConditionMaps(np.array([[[[[0.0], [10.0]]]]]), subjects=["S1"], conditions=["recalled"],
        ...     channels=["Fz"], frequencies=[4, 6], times=[0.0], unit="decibel")
        >>> float(maps.mean_across("frequencies").values.item())
        5.0
        >>> round(float(maps.mean_across("frequencies", of="ratios").values.item()), 4)
        7.4036
        """
        made: AxisMean = mean_over_axis(
            self.values,
            axis,
            groups,
            of,
            decibel=self.unit == "decibel",
            channels=self.channels,
            frequencies=self.frequencies,
            times=self.times,
        )
        changes: dict[str, Any] = {axis: made.labels, "values": made.values}
        if axis == "frequencies" and self.wavelet_cycles is not None and self.wavelet_cycles.size > 1:
            changes["wavelet_cycles"] = None  # one number a frequency has no meaning for a band
        cautions = self.cautions
        if of == "ratios" and self.unit == "decibel" and averaging_for_chance(self.baseline) == "units":
            cautions = (*cautions, GEOMETRIC_AS_RATIOS)
        return self._changed(
            history=(*self.history, *made.history),
            cautions=tuple(dict.fromkeys(cautions)),
            averaged_by=(*self.averaged_by, (axis, of)),
            **changes,
        )

    def save(self, path: str | PathLike[str]) -> None:
        """Write to a `.npz` file that `ConditionMaps.load` reads; whole or not at all, nothing pickled."""
        write_map_file(Path(path), {name: getattr(self, name) for name in _PARTS})

    @classmethod
    def load(cls, path: str | PathLike[str]) -> ConditionMaps:
        """Read what `save` wrote.

        Raises
        ------
        InputError
            A file that is not there, cannot be read, or was not written by `ConditionMaps.save`.
        """
        parts = read_map_file(Path(path))
        return cls(parts.pop("values"), **parts)


_PARTS = (
    "values",
    *AXES,
    "unit",
    "trial_counts",
    "participants",
    "baseline",
    "history",
    "cautions",
    "wavelet_cycles",
    "scaling",
    "averaged_by",
    "of_differences",
)


def _checked_values(values: ArrayLike) -> NDArray[Any]:
    where = "maps, values"
    try:
        array = np.asarray(values)
    except ValueError as error:
        raise refusal(where, f"an array ({', '.join(AXES)})", "rows of unequal length", "fill gaps with NaN") from error
    if array.dtype.kind not in "fiu":
        raise refusal(where, "real numbers", f"type {array.dtype}", "convert them")
    if array.dtype not in (np.float32, np.float64):
        array = array.astype(np.float64)
    if array.ndim != 5:
        raise refusal(where, f"five axes ({', '.join(AXES)})", f"shape {array.shape}", "add axes of length one")
    infinite = int(np.count_nonzero(np.isinf(array)))
    if infinite:
        raise refusal(where, "finite numbers or NaN", f"{infinite} infinite", "set what cannot be estimated to NaN")
    return array


def _checked_cycles(cycles: ArrayLike | None, frequencies: int) -> NDArray[np.float64] | None:
    if cycles is None:
        return None
    array = np.atleast_1d(np.asarray(cycles, dtype=np.float64))
    if array.ndim != 1 or array.size not in (1, frequencies) or not np.all(array > 0):
        raise refusal(
            "maps, wavelet_cycles",
            f"one positive number, or one for each of the {frequencies} frequencies",
            f"shape {np.shape(cycles)}, smallest {float(np.min(array)) if array.size else float('nan'):g}",
            "give the cycles of the wavelets",
        )
    return array
