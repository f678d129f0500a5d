"""read_power: one file of one subject, as it lies."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import suppress
from dataclasses import dataclass
from os import PathLike, fspath
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.foundations.axes import checked_frequencies, checked_labels, checked_times, label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.power_files.formats import open_power_file
from tfstats.power_files.layout import DIMENSIONS, Layout, assigned_axes, quoted
from tfstats.power_files.open_file import OpenFile, as_texts, single
from tfstats.power_files.stored_values import LazyPower, PickedValues, StoredValues, joined_values
from tfstats.power_files.trial_columns import column_of, combined, kept_rows, read_table, recoded
from tfstats.power_files.trial_power import SCALINGS, TrialPower

__all__ = ["FilePart", "check_length", "finished", "read_part", "read_power", "table_path"]

MILLISECONDS = 1000.0
_NOTES = {
    "decibel": "Power was turned back from decibels, as 10 to the power of a tenth of the value.",
    "amplitude": "Power is the square of the amplitude in the files.",
    "complex": "Power is the squared modulus of the complex values in the files.",
}


@dataclass
class FilePart:
    """What one file holds, before tables are joined and trials are chosen."""

    path: str
    values: Any
    frequencies: NDArray[np.float64]
    times: NDArray[np.float64]
    channels: tuple[str, ...]
    trials: pd.DataFrame
    power_unit: str | None
    scaling: str | None
    wavelet_cycles: Any
    own_subject: str | None
    notes: tuple[str, ...]


def read_power(path: str | PathLike[str], *, subject: object = None, **layout: Any) -> TrialPower:
    """Read one subject's per-trial power from a file.

    Parameters
    ----------
    path : path
        `.npz`, `.npy`, `.h5`, `.hdf5`, `.mat` (all versions), `.nc` (needs the extra `labelled`).
    subject : str, optional
        None: the file's own entry, or the file's name without its ending.
    names : mapping, optional
        Where things lie: part (power, frequencies, times, channels, subject, power_unit, scaling, wavelet_cycles,
        axes, trials, trials.COLUMN) to name in the file; dots go into structs and groups.
    axes : sequence of "trial", "channel", "frequency", "time", optional
        The order of the power's axes in the file (for `.mat` as MATLAB shows it).  None: what the file says in `axes`
        or by its dimension names, else told by the lengths where they leave no doubt.
    contents : "linear_power", "amplitude", "complex" or "decibel"
        Amplitudes are squared, of complex values the squared modulus is taken, decibels are turned back.
    time_unit : "s" or "ms"
    power_unit, scaling, wavelet_cycles : optional
        As in `TrialPower`; what is stated here wins over what the file says.
    trial_table : path, optional
        A `.tsv` or `.csv` file with one row a trial, in the order of the power.  "{subject}" is filled in.
    recode : mapping, optional
        Trial column to {label: new label}; other labels stay.
    keep : mapping, optional
        Trial column to a label, a list of labels, or a mapping with `at_least`, `at_most`, `one_of`; applied after
        recoding.  Trials without a value there are not kept.
    frequencies, times, channels : optional
        For files that hold none, such as a bare `.npy`.

    Returns
    -------
    TrialPower
        From HDF5, MATLAB 7.3, netCDF and `.npy` the values stay in the file and are read in blocks.

    Raises
    ------
    InputError
        What is missing, does not fit or is not linear power; names the subject, the file and what to change.

    Notes
    -----
    Nothing pickled is ever loaded.  Names looked for without `names`: those that `write_power` writes.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tempfile, pathlib, tfstats as tfs
    >>> power = tfs.TrialPower(np.ones((2, 1, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
    ...     channels=["Fz"], trials=pd.DataFrame({"memory": [1, 0]}), subject="S1")
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     tfs.write_power(pathlib.Path(folder) / "S1.npz", power)
    ...     again = tfs.read_power(pathlib.Path(folder) / "S1.npz", recode={"memory": {"1": "recalled", "0": "missed"}})
    >>> list(again.trials["memory"])
    ['recalled', 'missed']
    """
    settings = Layout.of(layout, "read_power")
    named = None if subject is None else label_text(subject)
    label = fspath(path) if named is None else f"subject {named}, {fspath(path)}"
    table = None
    if settings.trial_table is not None:
        if "{subject}" in settings.trial_table and named is None:
            raise refusal(label, "a subject for {subject} in trial_table", "none", "give subject=")
        place = table_path(settings.trial_table, {"subject": named or ""})
        table = read_table(Path(place), f"{label}, trial_table {place}")
    part = read_part(Path(path), label, settings, None if table is None else len(table))
    if table is not None:
        check_length(len(table), len(part.trials), label, place, fspath(path))
        part.trials = combined(part.trials, table, label, (fspath(path), place))
    return finished(named or part.own_subject or Path(path).stem, [part], part.trials, settings)


def table_path(pattern: str, words: Mapping[str, str]) -> str:
    """A trial table's path with its {words} filled in."""
    for word, value in words.items():
        pattern = pattern.replace("{" + word + "}", value)
    return pattern


def check_length(rows: int, trials: int, label: str, table: str, files: str) -> None:
    """One row a trial."""
    if rows != trials:
        raise refusal(
            f"{label}, trial_table {table}",
            f"one row for each of the {trials} trials of {files}",
            f"{rows} rows",
            "mend the table, or correct trial_table or axes under [input]",
        )


def read_part(path: Path, label: str, layout: Layout, table_rows: int | None) -> FilePart:
    """All that one file says, in our order of axes; every mistake of the file at once."""
    with open_power_file(path, label) as file:
        problems = Problems()
        frequencies: Any = np.empty(0)
        times: Any = np.empty(0)
        channels: tuple[str, ...] = ()
        turned = False
        with problems.gathering():
            frequencies, turned = _frequencies(file, layout)
        with problems.gathering():
            times = _times(file, layout)
        with problems.gathering():
            given = layout.channels if layout.channels is not None else as_texts(_required(file, layout, "channels"))
            channels = checked_labels(given, f"{label}, channels", of="channel")
        with problems.gathering():
            stored = _required(file, layout, "power", stored=True)
            _check_kind(stored, layout, f"{label}, {layout.name('power')}")
        columns: dict[str, Any] = {}
        with problems.gathering():
            columns = _trial_columns(file, layout)
        unit, scaling, own_subject, cycles = None, None, None, None
        with problems.gathering():
            unit = _word(file, layout, "power_unit")
        with problems.gathering():
            scaling = _scaling(file, layout)
        with problems.gathering():
            own_subject = _word(file, layout, "subject")
        with problems.gathering():
            cycles = _cycles(file, layout, turned)
        problems.raise_if_any()
        lengths: dict[str, int | None] = dict(
            zip(DIMENSIONS, (_trial_count(columns), len(channels), frequencies.size, times.size))
        )
        axes = _assigned(file, layout, stored, lengths, table_rows)
        values: Any = StoredValues(stored, axes, layout.contents)
        if turned:
            values = PickedValues(
                values,
                [np.arange(n) for n in values.shape[:2]] + [_backwards(values.shape[2]), np.arange(values.shape[3])],
            )
        if isinstance(stored, np.ndarray) and not isinstance(stored, np.memmap):
            values = values[:]
        return FilePart(
            path=str(path),
            values=values,
            frequencies=frequencies,
            times=times,
            channels=channels,
            trials=_trial_frame(columns, values.shape[0], label),
            power_unit=layout.power_unit if layout.power_unit is not None else unit,
            scaling=layout.scaling if layout.scaling is not None else scaling,
            wavelet_cycles=cycles,
            own_subject=own_subject,
            notes=(*_own_notes(file), *((_NOTES[layout.contents],) if layout.contents in _NOTES else ())),
        )


def _backwards(length: int) -> NDArray[np.intp]:
    return np.arange(length)[::-1].astype(np.intp)


def _required(file: OpenFile, layout: Layout, role: str, *, stored: bool = False) -> Any:
    name = layout.name(role)
    try:
        return file.get(name, stored=stored)
    except KeyError:
        present = file.names()
        raise refusal(
            f"{file.label}, {role}",
            f'an array called "{name}"',
            f"a file that holds {listed(present)}",
            f"{closest(name, present)}set {role} under [input.names]",
        ) from None


def _optional(file: OpenFile, layout: Layout, role: str) -> Any:
    """A part that may be absent, unless its name was stated."""
    if role in layout.names:
        return _required(file, layout, role)
    return file.get(role) if role in file else None


def _word(file: OpenFile, layout: Layout, role: str) -> str | None:
    value = single(_optional(file, layout, role))
    text = "" if value is None or isinstance(value, (list, np.ndarray)) else label_text(value)
    return text or None


def _scaling(file: OpenFile, layout: Layout) -> str | None:
    word = _word(file, layout, "scaling")
    # A file of someone else may use the word for something else.
    return word if word in SCALINGS else None


def _cycles(file: OpenFile, layout: Layout, turned: bool) -> Any:
    if layout.wavelet_cycles is not None:
        return layout.wavelet_cycles
    cycles = _optional(file, layout, "wavelet_cycles")
    if not isinstance(cycles, np.ndarray) or cycles.dtype.kind not in "iuf" or cycles.size == 0:
        return None
    cycles = cycles.reshape(-1).astype(np.float64)
    return cycles[::-1] if turned else cycles


def _own_notes(file: OpenFile) -> tuple[str, ...]:
    """What was done to the values before we wrote them; a file of someone else may mean anything by the word."""
    if "notes" not in file or not ("axes" in file or file.axis_names("power") if "power" in file else False):
        return ()
    notes = file.get("notes")
    found = [notes] if isinstance(notes, str) else notes if isinstance(notes, list) else []
    return tuple(note for note in found if note)


def _axis_values(file: OpenFile, layout: Layout, role: str, stated: Any, unit: str) -> NDArray[np.float64]:
    value = stated if stated is not None else _required(file, layout, role)
    try:
        array = np.asarray(value, dtype=np.float64)
    except (TypeError, ValueError):
        array = np.empty((0, 0))
    if array.size == 0 or array.size != max(array.shape, default=1):
        raise refusal(
            f"{file.label}, {role}",
            f"a list of numbers in {unit}",
            f"shape {np.shape(value)}",
            f"set {role} under [input.names]",
        )
    return array.reshape(-1)


def _frequencies(file: OpenFile, layout: Layout) -> tuple[NDArray[np.float64], bool]:
    """The frequencies, and whether file and power have them descending."""
    values = _axis_values(file, layout, "frequencies", layout.frequencies, "Hz")
    turned = bool(values.size > 1 and np.all(np.diff(values) < 0))
    return checked_frequencies(values[::-1] if turned else values, f"{file.label}, frequencies"), turned


def _times(file: OpenFile, layout: Layout) -> NDArray[np.float64]:
    values = _axis_values(file, layout, "times", layout.times, "s" if layout.time_unit == "s" else "ms")
    if layout.time_unit == "s":
        return checked_times(values, f"{file.label}, times")
    if values.size > 1 and np.abs(values).max() < 10.0:
        raise refusal(
            f"{file.label}, times",
            "milliseconds",
            f"{values[0]:g} to {values[-1]:g}, probably seconds",
            'set time_unit = "s"',
        )
    return checked_times(values / MILLISECONDS, f"{file.label}, times")


def _check_kind(stored: Any, layout: Layout, where: str) -> None:
    """Whether the numbers are of the kind that `contents` says."""
    if isinstance(stored, (str, list)):
        raise refusal(where, "an array of numbers", "text", "set power under [input.names]")
    is_complex = stored.dtype.kind == "c" or bool(stored.dtype.names)
    if is_complex and layout.contents != "complex":
        raise refusal(
            where, f'real numbers for contents = "{layout.contents}"', "complex numbers", 'set contents = "complex"'
        )
    if not is_complex and layout.contents == "complex":
        raise refusal(
            where,
            'complex numbers for contents = "complex"',
            "real numbers",
            'set contents = "linear_power" or "amplitude"',
        )
    if not is_complex and stored.dtype.kind not in "iuf":
        raise refusal(where, "an array of numbers", f"type {stored.dtype}", "set power under [input.names]")
    if 0 in stored.shape or len(stored.shape) == 0:
        raise refusal(where, "an array of power", f"shape {tuple(stored.shape)}", "set power under [input.names]")


def _trial_columns(file: OpenFile, layout: Layout) -> dict[str, Any]:
    """Column name to its value in the file."""
    group = layout.name("trials")
    found = file.under(group)
    if "trials" in layout.names and not found:
        raise refusal(
            f"{file.label}, trials",
            f'a group or struct called "{group}" with one vector a column',
            f"a file that holds {listed(file.names())}",
            "set trials, or trials.COLUMN, under [input.names]",
        )
    problems, columns = Problems(), {}
    for column, name in found.items():
        with problems.gathering():
            columns[column] = file.get(name)
    for role in layout.names:
        if role.startswith("trials."):
            with problems.gathering():
                columns[role.removeprefix("trials.")] = _required(file, layout, role)
    problems.raise_if_any()
    return columns


def _count_of(value: Any) -> int:
    return 1 if isinstance(value, str) else int(value.size) if isinstance(value, np.ndarray) else len(value)


def _trial_count(columns: Mapping[str, Any]) -> int | None:
    # A matrix is no column, which is said when the columns are put together.
    vectors = [
        one for one in columns.values() if not isinstance(one, np.ndarray) or one.size == max(one.shape, default=1)
    ]
    counts = {_count_of(value) for value in vectors}
    # Columns of one value stand for all trials and say nothing of their number.
    longer = counts - {1}
    return max(longer) if longer else None


def _assigned(
    file: OpenFile, layout: Layout, stored: Any, lengths: dict[str, int | None], table_rows: int | None
) -> tuple[int | None, ...]:
    where = f"{file.label}, {layout.name('power')}"
    if layout.axes is not None:
        # A wrong number of trials is found with the columns and tables, which says more.
        return assigned_axes(stored.shape, {**lengths, "trial": None}, layout.axes, where)
    own = _own_axes(file, layout, len(stored.shape))
    if own is not None:
        return assigned_axes(stored.shape, {**lengths, "trial": None}, own, where, stated="the file's axes")
    if lengths["trial"] is None and table_rows is None:
        return assigned_axes(stored.shape, lengths, None, where)
    # Told without the number of trials where possible: then a column or table of another length is refused as such.
    with suppress(InputError):
        return assigned_axes(stored.shape, {**lengths, "trial": None}, None, where)
    return assigned_axes(stored.shape, {**lengths, "trial": lengths["trial"] or table_rows}, None, where)


def _own_axes(file: OpenFile, layout: Layout, count: int) -> tuple[str, ...] | None:
    """The axes as the file itself names them."""
    stated = _optional(file, layout, "axes")
    if isinstance(stated, (list, str)):
        names = tuple([stated] if isinstance(stated, str) else stated)
        if len(set(names)) == len(names) >= count and all(name in DIMENSIONS for name in names):
            return names
    if "axes" in layout.names:
        raise refusal(
            f"{file.label}, {layout.name('axes')}",
            f"the names of the {count} axes, each of {listed(DIMENSIONS)} once",
            repr(stated) if isinstance(stated, str) else quoted(list(map(str, as_texts(stated)))),
            "set axes under [input] instead",
        )
    return file.axis_names(layout.name("power"))


def _trial_frame(columns: Mapping[str, Any], trials: int, label: str) -> pd.DataFrame:
    problems, made = Problems(), {}
    for name, value in columns.items():
        with problems.gathering():
            made[name] = column_of(
                value,
                trials,
                f"{label}, trial column {name}",
                f"correct axes under [input], or trials.{name} under [input.names]",
            )
    problems.raise_if_any()
    return pd.DataFrame(made, index=pd.RangeIndex(trials))


def finished(subject: str, parts: list[FilePart], trials: pd.DataFrame, layout: Layout) -> TrialPower:
    """TrialPower of one subject from its joined files: recoded, and only the trials that are kept."""
    first = parts[0]
    source = first.path if len(parts) == 1 else ", ".join(part.path for part in parts)
    where = f"subject {subject}, {source}"
    notes = list(dict.fromkeys(note for part in parts for note in part.notes))
    if layout.recode:
        trials = recoded(trials, layout.recode, where)
    values = joined_values([part.values for part in parts])
    if layout.keep:
        kept = np.flatnonzero(kept_rows(trials, layout.keep, where))
        if kept.size < len(trials):
            notes.append(
                f"Subject {subject}: {kept.size} of {len(trials)} trials were kept ({_rules_in_words(layout.keep)})."
            )
            trials = trials.iloc[kept].reset_index(drop=True)
            if isinstance(values, LazyPower):
                values = PickedValues(values, [kept, *(np.arange(length) for length in values.shape[1:])])
            else:
                values = values[kept]
    return TrialPower(
        values,
        frequencies=first.frequencies,
        times=first.times,
        channels=first.channels,
        trials=trials,
        subject=subject,
        power_unit=first.power_unit,
        wavelet_cycles=first.wavelet_cycles,
        scaling=first.scaling,
        source=source,
        notes=notes,
    )


def _rules_in_words(keep: Mapping[str, Mapping[str, Any]]) -> str:
    words = []
    for column, rule in keep.items():
        if "one_of" in rule:
            words.append(f"{column} {' or '.join(rule['one_of'])}")
        if "at_least" in rule:
            words.append(f"{column} at least {rule['at_least']:g}")
        if "at_most" in rule:
            words.append(f"{column} at most {rule['at_most']:g}")
    return ", ".join(words)
