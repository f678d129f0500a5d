"""PowerFiles: the power of all subjects, found by a pattern and read one subject at a time."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import asdict
from os import PathLike, fspath
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tfstats.foundations.axes import label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.power_files.layout import Layout
from tfstats.power_files.numpy_files import label_file
from tfstats.power_files.power_reading import FilePart, check_length, finished, read_part, table_path
from tfstats.power_files.trial_columns import combined, read_table
from tfstats.power_files.trial_power import TrialPower

__all__ = ["PowerFiles"]

_WORD = re.compile(r"\{([^{}/\\]*)\}")
_AXIS_TOLERANCE = 1e-9


class PowerFiles:
    """Per-trial power of many subjects, as files that a pattern describes.

    Iterating yields one `TrialPower` a subject, subjects in the order of `subjects`; it can be done again and again,
    and holds the values of no more than one subject.

    Parameters
    ----------
    pattern : path
        With {subject} and any other {word}: "power/S{subject}_run{run}.mat".  The files of one subject are joined along
        the trials, in the order of the words (numbers by size), and each word becomes a trial column.  A relative
        pattern starts at the current folder.
    names, axes, contents, time_unit, power_unit, scaling, wavelet_cycles, recode, keep, frequencies, times, channels
        How the power lies in each file: see `read_power`.
    trial_table : path pattern, optional
        A table with one row a trial, with {subject} and any of the other words.  A table without one of the words
        holds the trials of all those files, in their order.
    channel_groups : mapping of name to channels, optional
        The power of each group's channels is averaged as a subject is read, and the groups are its channels: see
        `TrialPower.mean_across`.
    subjects : sequence of str, optional
        Only these, in this order.

    Attributes
    ----------
    subjects : tuple of str

    Raises
    ------
    InputError
        A pattern that no file fits, subjects without files; when read, all that is wrong with a subject's files.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tempfile, pathlib, tfstats as tfs
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     for subject in ("1", "2"):
    ...         power = tfs.TrialPower(np.ones((2, 1, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
    ...             channels=["Fz"], trials=pd.DataFrame({"memory": [1, 0]}), subject=subject)
    ...         tfs.write_power(pathlib.Path(folder) / f"S{subject}.npz", power)
    ...     powers = tfs.PowerFiles(pathlib.Path(folder) / "S{subject}.npz")
    ...     print(powers.subjects, [len(power.trials) for power in powers])
    ('1', '2') [2, 2]
    """

    subjects: tuple[str, ...]

    def __init__(
        self,
        pattern: str | PathLike[str],
        *,
        names: Any = None,
        axes: Any = None,
        contents: str = "linear_power",
        time_unit: str = "s",
        power_unit: str | None = None,
        scaling: str | None = None,
        wavelet_cycles: Any = None,
        trial_table: str | PathLike[str] | None = None,
        recode: Any = None,
        keep: Any = None,
        frequencies: Any = None,
        times: Any = None,
        channels: Any = None,
        channel_groups: Mapping[str, Sequence[object]] | None = None,
        subjects: Iterable[object] | None = None,
    ) -> None:
        self.channel_groups = None if channel_groups is None else {str(k): list(v) for k, v in channel_groups.items()}
        self.pattern = fspath(pattern)
        problems = Problems()
        keywords = {
            "names": names, "axes": axes, "contents": contents, "time_unit": time_unit, "power_unit": power_unit,
            "scaling": scaling, "wavelet_cycles": wavelet_cycles, "trial_table": trial_table, "recode": recode,
            "keep": keep, "frequencies": frequencies, "times": times, "channels": channels,
        }  # fmt: skip
        with problems.gathering():
            self.layout = Layout.of(keywords, "input")
        with problems.gathering():
            self.words = _words_of(self.pattern)
        problems.raise_if_any()
        self._table_words = tuple(word for word in self.words if "{" + word + "}" in (self.layout.trial_table or ""))
        _check_table_words(self.layout.trial_table, self.words)
        found = _found(self.pattern, self.words)
        self._files: dict[str, list[tuple[dict[str, str], Path]]] = {}
        for words, path in found:
            self._files.setdefault(words["subject"], []).append((words, path))
        self.subjects = tuple(self._files) if subjects is None else self._chosen(subjects)

    def _chosen(self, subjects: Iterable[object]) -> tuple[str, ...]:
        if isinstance(subjects, str):
            subjects = [subjects]
        chosen = tuple(label_text(subject) for subject in subjects)
        problems = Problems()
        absent = [subject for subject in chosen if subject not in self._files]
        if absent:
            problems.add(
                f"input, files {self.pattern}",
                f"a file for each subject, as for {listed(self._files)}",
                f"none for {listed(absent)}",
                "add the files, correct the pattern, or leave the subjects out",
            )
        twice = {subject for subject in chosen if chosen.count(subject) > 1}
        if twice:
            problems.add(
                "input, subjects", "each subject once", f"{listed(twice)} more than once", "drop the repeated ones"
            )
        if not chosen:
            problems.add("input, subjects", "at least one subject", "none", "leave out less")
        problems.raise_if_any()
        return chosen

    def __repr__(self) -> str:
        files = sum(len(self._files[subject]) for subject in self.subjects)
        return f"<PowerFiles {self.pattern}: {len(self)} subjects, {files} files>"

    def __len__(self) -> int:
        return len(self.subjects)

    def __iter__(self) -> Iterator[TrialPower]:
        for subject in self.subjects:
            yield self.of(subject)

    def files_of(self, subject: object) -> tuple[Path, ...]:
        """The files of one subject, in the order in which they are joined."""
        return tuple(path for _, path in self._files[self._known(subject)])

    def labels_of_words(self, subject: object) -> dict[str, tuple[str, ...]]:
        """What each word of the pattern besides {subject} stands for in one subject's files."""
        words = [words for words, _ in self._files[self._known(subject)]]
        return {name: tuple(dict.fromkeys(one[name] for one in words)) for name in self.words if name != "subject"}

    def sources_of(self, subject: object) -> tuple[Path, ...]:
        """All files that `of` reads for one subject: power, label files of bare arrays, trial tables."""
        name, found = self._known(subject), []
        for words, path in self._files[name]:
            found.append(path)
            labels = label_file(path)
            if path.suffix.lower() == ".npy" and labels.is_file():
                found.append(labels)
            if self.layout.trial_table is not None:
                table = Path(table_path(self.layout.trial_table, words))
                if table.is_file() and table not in found:
                    found.append(table)
        return tuple(found)

    def layout_words(self) -> dict[str, Any]:
        """How the files are read, in a form that tells two readings apart."""
        return {"pattern": self.pattern, **asdict(self.layout), "channel_groups": self.channel_groups}

    def trial_tables_of(self, subject: object) -> tuple[Path, ...]:
        """The trial tables of one subject, each once; none without the option."""
        if self.layout.trial_table is None:
            return ()
        places = [table_path(self.layout.trial_table, words) for words, _ in self._files[self._known(subject)]]
        return tuple(Path(place) for place in dict.fromkeys(places))

    def _known(self, subject: object) -> str:
        name = label_text(subject)
        if name not in self.subjects:
            raise refusal(
                f"input, files {self.pattern}",
                f"a subject among {listed(self.subjects)}",
                f'"{name}"',
                f"{closest(name, self.subjects)}use one of them",
            )
        return name

    def of(self, subject: object) -> TrialPower:
        """The power of one subject, its files joined.

        Raises
        ------
        InputError
            All that is wrong with the subject's files, tables and rules.
        """
        name = self._known(subject)
        files, tables = self._files[name], self._tables_of(name)
        problems, parts = Problems(), []
        for words, path in files:
            table = tables.get(self._key(words))
            rows = len(table[1]) if table is not None and self._files_under(name, words) == 1 else None
            with problems.gathering():
                part = read_part(path, f"subject {name}, {path}", self.layout, rows)
                part.trials = self._with_words(part, words, name)
                parts.append(part)
        problems.raise_if_any()
        _check_agreement(parts, name)
        trials = pd.concat([part.trials for part in parts], ignore_index=True) if len(parts) > 1 else parts[0].trials
        if tables:
            trials = self._joined_with_tables(name, parts, trials, tables)
        power = finished(name, parts, trials, self.layout)
        return power if self.channel_groups is None else power.mean_across("channels", self.channel_groups)

    def _key(self, words: dict[str, str]) -> tuple[str, ...]:
        return tuple(words[word] for word in self._table_words)

    def _files_under(self, subject: str, words: dict[str, str]) -> int:
        return sum(self._key(other) == self._key(words) for other, _ in self._files[subject])

    def _tables_of(self, subject: str) -> dict[tuple[str, ...], tuple[str, pd.DataFrame]]:
        """Each trial table of the subject, by the words that tell the tables apart."""
        if self.layout.trial_table is None:
            return {}
        problems, tables = Problems(), {}
        for words, _ in self._files[subject]:
            key = self._key(words)
            if key not in tables:
                place = table_path(self.layout.trial_table, words)
                with problems.gathering():
                    tables[key] = (place, read_table(Path(place), f"subject {subject}, trial_table {place}"))
        problems.raise_if_any()
        return tables

    def _with_words(self, part: FilePart, words: dict[str, str], subject: str) -> pd.DataFrame:
        others = {word: [value] * len(part.trials) for word, value in words.items() if word != "subject"}
        if not others:
            return part.trials
        from_name = pd.DataFrame(others, index=part.trials.index, dtype=object)
        return combined(part.trials, from_name, f"subject {subject}, {part.path}", ("the file", "its name"))

    def _joined_with_tables(
        self,
        subject: str,
        parts: list[FilePart],
        trials: pd.DataFrame,
        tables: dict[tuple[str, ...], tuple[str, pd.DataFrame]],
    ) -> pd.DataFrame:
        problems, rows = Problems(), []
        starts = np.cumsum([0, *(len(part.trials) for part in parts)])
        keys = [self._key(words) for words, _ in self._files[subject]]
        for key, (place, table) in tables.items():
            mine = [number for number, one in enumerate(keys) if one == key]
            positions = np.concatenate([np.arange(starts[number], starts[number + 1]) for number in mine])
            files = " and ".join(parts[number].path for number in mine)
            with problems.gathering():
                check_length(len(table), positions.size, f"subject {subject}", place, files)
                rows.append(table.set_index(positions))
        problems.raise_if_any()
        table = pd.concat(rows).sort_index()
        names = ", ".join(dict.fromkeys(place for place, _ in tables.values()))
        sources = (", ".join(dict.fromkeys(part.path for part in parts)), names)
        return combined(trials, table, f"subject {subject}", sources)

    def check(self) -> pd.DataFrame:
        """Read all files of all subjects once; refuse everything that is wrong with them, all together.

        Returns
        -------
        pandas.DataFrame
            One row a subject: subject, files, trials, channels, frequencies, times.

        Raises
        ------
        InputError
            The problems of every subject, and subjects whose frequencies or times differ from the first's.

        Notes
        -----
        Reads every byte; memory as for one subject.
        """
        problems, rows = Problems(), []
        first: TrialPower | None = None
        for subject in self.subjects:
            with problems.gathering():
                power = self.of(subject)
                if first is None:
                    first = power._changed(values=None)  # its axes only
                else:
                    _compare_axes(power, first, problems)
                power.check()
                rows.append(
                    (
                        subject,
                        len(self._files[subject]),
                        *(power.values.shape[:2]),
                        power.frequencies.size,
                        power.times.size,
                    )
                )
        problems.raise_if_any()
        return pd.DataFrame(rows, columns=["subject", "files", "trials", "channels", "frequencies", "times"])


def _words_of(pattern: str) -> tuple[str, ...]:
    where, problems = f"input, files {pattern}", Problems()
    words = tuple(dict.fromkeys(_WORD.findall(pattern)))
    if "subject" not in words:
        problems.add(where, "a pattern with {subject}", "one without", "write {subject} where the files' names differ")
    odd = [word for word in words if not word.isidentifier()]
    if odd:
        problems.add(where, "words of letters, digits and underscores in braces", listed(odd), "rename them")
    if "*" in pattern or "?" in pattern:
        problems.add(where, "words in braces", "a wildcard", "write {run} or another word in its place")
    problems.raise_if_any()
    return words


def _check_table_words(table: str | None, words: tuple[str, ...]) -> None:
    if table is None:
        return
    unknown = [word for word in _WORD.findall(table) if word not in words]
    if unknown:
        raise refusal(
            f"input, trial_table {table}",
            f"words of the files' pattern, {listed(words)}",
            listed(unknown),
            "use these words",
        )
    if "{subject}" not in table:
        raise refusal(
            f"input, trial_table {table}", "a pattern with {subject}", "one without", "give each subject its table"
        )


def _found(pattern: str, words: tuple[str, ...]) -> list[tuple[dict[str, str], Path]]:
    """All files that fit, with what the words stand for, in order."""
    parts = Path(pattern).parts
    fixed = next((number for number, part in enumerate(parts) if _WORD.search(part)), len(parts))
    start = Path(*parts[:fixed]) if fixed else Path()
    found: list[tuple[dict[str, str], Path]] = []
    _walk(start, parts[fixed:], {}, found)
    if not found:
        got = "no such folder" if not start.is_dir() else "none"
        raise refusal(f"input, files {pattern}", "files that fit the pattern", got, "correct files under [input]")
    return sorted(found, key=lambda pair: [_natural(pair[0][word]) for word in ("subject", *words)])


def _walk(
    folder: Path, parts: tuple[str, ...], words: dict[str, str], found: list[tuple[dict[str, str], Path]]
) -> None:
    if not folder.is_dir():
        return
    expression = _expression(parts[0], words)
    for entry in sorted(folder.iterdir()):
        match = expression.fullmatch(entry.name)
        # Files that are being written, and the label files of bare arrays, are not power files.
        if match is None or entry.name.startswith(".") or entry.name.endswith(".labels.npz"):
            continue
        here = {**words, **match.groupdict()}
        if len(parts) == 1:
            if entry.is_file():
                found.append((here, entry))
        else:
            _walk(entry, parts[1:], here, found)


def _expression(part: str, known: dict[str, str]) -> re.Pattern[str]:
    """A part of the pattern as a regular expression; a word seen before must stand for the same again."""
    made, end, here = "", 0, set()
    for match in _WORD.finditer(part):
        made += re.escape(part[end : match.start()])
        word = match.group(1)
        if word in known:
            made += re.escape(known[word])
        elif word in here:
            made += f"(?P={word})"
        else:
            made += f"(?P<{word}>.+?)"
            here.add(word)
        end = match.end()
    return re.compile(made + re.escape(part[end:]))


def _natural(text: str) -> list[tuple[int, int, str]]:
    """Sorts numbers inside text by size: run2 before run10."""
    return [(0, int(piece), piece) if piece.isdigit() else (1, 0, piece) for piece in re.split(r"(\d+)", text) if piece]


def _check_agreement(parts: list[FilePart], subject: str) -> None:
    """Frequencies, times and channels of a subject's files must be the same."""
    first, problems = parts[0], Problems()
    for part in parts[1:]:
        where = f"subject {subject}, {part.path}"
        for name in ("frequencies", "times"):
            ours, theirs = getattr(first, name), getattr(part, name)
            if not _same(ours, theirs):
                problems.add(
                    f"{where}, {name}", f"the same as in {first.path}, {_range(ours)}", _range(theirs), _AXES_REMEDY
                )
        if part.channels != first.channels:
            differing = set(first.channels) ^ set(part.channels)
            got = f"{listed(differing)} in one of them only" if differing else "another order"
            problems.add(
                f"{where}, channels",
                f"the same as in {first.path}",
                got,
                "give both files the same channels in one order",
            )
        for name in ("scaling", "power_unit"):
            ours, theirs = (getattr(one, name) or "unknown" for one in (first, part))
            if ours != theirs:
                problems.add(
                    f"{where}, {name}", f"the same as in {first.path}, {ours}", theirs, f"set {name} under [input]"
                )
    problems.raise_if_any()


_AXES_REMEDY = "compute the power of both at the same points, or leave one out"


def _same(ours: Any, theirs: Any) -> bool:
    return ours.shape == theirs.shape and bool(np.allclose(ours, theirs, rtol=_AXIS_TOLERANCE, atol=_AXIS_TOLERANCE))


def _range(axis: Any) -> str:
    return f"{axis.size} from {axis[0]:g} to {axis[-1]:g}"


def _compare_axes(power: TrialPower, first: TrialPower, problems: Problems) -> None:
    for name in ("frequencies", "times"):
        ours, theirs = getattr(first, name), getattr(power, name)
        if not _same(ours, theirs):
            problems.add(
                f"subject {power.subject}, {power.source}, {name}",
                f"the same as in {first.source}, {_range(ours)}",
                _range(theirs),
                _AXES_REMEDY,
            )
