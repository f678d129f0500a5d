"""A first plan for someone's own files: what they say is written down, what they do not say is guessed or left blank."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass, field
from os import PathLike
from pathlib import Path
from typing import Any

import pandas as pd

from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.plan_file.drafted_text import Study, plan_text
from tfstats.plan_file.file_name_patterns import common_pattern, pattern_with_subject
from tfstats.power_files import FORMATS, FileContents, PowerFiles, looked_into
from tfstats.power_files.file_contents import LabelCounts, label_counts
from tfstats.power_files.trial_columns import read_table

__all__ = ["Draft", "DraftedTable", "draft_plan", "write_draft"]

TABLE_ENDINGS = (".tsv", ".csv", ".txt")
MOST_OPENED = 3
"""Power files that are looked into: the first, the middle and the last; some formats must be read whole for that."""


@dataclass(frozen=True)
class DraftedTable:
    """A table among the files, and what it was taken for."""

    path: Path
    table: pd.DataFrame
    role: str
    """participants, electrodes, trials, unknown"""


@dataclass(frozen=True)
class Draft:
    """What was found in the files, and the plan made of it."""

    text: str
    contents: tuple[FileContents, ...]
    """Of the files that were looked into."""
    tables: tuple[DraftedTable, ...]
    files: int
    """Power files given."""
    blanks: int
    remarks: tuple[str, ...] = ()
    trial: str = field(default="")
    """Whether the first subject could be read as drafted, in words; empty where blanks come first."""


def draft_plan(files: Sequence[str | PathLike[str]], folder: str | PathLike[str] = ".") -> Draft:
    """Look into power files and tables, and draft a commented plan for them.

    Parameters
    ----------
    files : sequence of path
        Power files (`.npz`, `.npy`, `.h5`, `.hdf5`, `.mat`, `.nc`), and the tables beside them: participants,
        electrodes, trial tables (`.tsv`, `.csv`).
    folder : path
        Where the plan will lie; paths in it are relative to this.

    Returns
    -------
    Draft
        `.text` is the plan.  What the files say stands there as it is; guesses are marked `# guess`; blanks are texts
        that begin with FILL IN, which `tfstats check` refuses one by one.

    Raises
    ------
    InputError
        No power file among the files, files that are not there or cannot be read, all together.

    Notes
    -----
    Of many power files the first, the middle and the last are looked into; nothing large is kept in memory.
    """
    powers, tables = _sorted_by_kind([Path(one) for one in files])
    opened = sorted({0, len(powers) // 2, len(powers) - 1})[:MOST_OPENED]
    read, problems = [], Problems()
    for path in tables:
        with problems.gathering():
            read.append((path, read_table(path, str(path))))
    contents = []
    for place in opened:
        with problems.gathering():
            contents.append(looked_into(powers[place], [len(table) for _, table in read]))
    problems.raise_if_any()
    base = Path(folder).resolve()
    known = [one.values_of_text("subject") for one in contents] if len(contents) == len(powers) else []
    pattern = common_pattern(
        [_relative(path, base) for path in powers], [one or "" for one in known] if all(known) else ()
    )
    subjects, words, remarks = _subjects_of(pattern, base, len(powers))
    first = contents[0]
    sorted_tables = tuple(_with_role(path, table, first, subjects) for path, table in read)
    study = _study(first, pattern, subjects, words, sorted_tables, base)
    remarks += _differences(contents)
    text, blanks = plan_text(study, [*first.remarks, *remarks])
    trial = _tried(study, base) if not study.input_blanks else ""
    return Draft(text, tuple(contents), sorted_tables, len(powers), blanks, (*first.remarks, *remarks), trial)


def write_draft(files: Sequence[str | PathLike[str]], out: str | PathLike[str]) -> Draft:
    """Draft a plan and write it to a file that is not there yet."""
    place = Path(out)
    if place.exists():
        raise refusal(f"draft, --out {place}", "a new file", "one that exists", "choose another name")
    if not place.parent.is_dir():
        raise refusal(f"draft, --out {place}", "a folder that is there", "none", "make the folder first")
    draft = draft_plan(files, place.parent)
    # "x": a plan that appeared meanwhile is not overwritten either.
    with open(place, "x", encoding="utf-8", newline="\n") as stream:
        stream.write(draft.text)
    return draft


def _sorted_by_kind(paths: Sequence[Path]) -> tuple[list[Path], list[Path]]:
    endings = [ending for one in FORMATS for ending in one.endings]
    problems, powers, tables = Problems(), [], []
    for path in dict.fromkeys(paths):
        ending = path.suffix.lower()
        if not path.is_file():
            folder = path.is_dir()
            remedy = f"name the files in it, as {path.name}/*.mat" if folder else "check the path"
            problems.add(f"draft, {path}", "a file", "a folder" if folder else "nothing there", remedy)
        elif ending in TABLE_ENDINGS:
            tables.append(path)
        elif path.name.endswith(".labels.npz"):
            continue  # belongs to the bare array beside it
        elif ending in endings:
            powers.append(path)
        else:
            problems.add(
                f"draft, {path}", f"a file that ends in one of {listed([*endings, *TABLE_ENDINGS], most=20)}",
                f'"{path.suffix}"', "leave it out",
            )  # fmt: skip
    if not powers and not problems.found:
        got = "tables only" if tables else "none"
        problems.add("draft", "at least one power file", got, "name the files that hold the power")
    problems.raise_if_any()
    return powers, tables


def _relative(path: Path, base: Path) -> str:
    try:
        return Path(os.path.relpath(path.resolve(), base)).as_posix()
    except ValueError:  # on another drive
        return path.resolve().as_posix()


def _subjects_of(
    pattern: str | None, base: Path, given: int
) -> tuple[tuple[str, ...], dict[str, tuple[str, ...]], list[str]]:
    """Subjects that the pattern finds, labels of its other words in the first subject, and what is odd about it."""
    if pattern is None:
        return (), {}, ["The names of the files have no common form that tells subjects apart."]
    try:
        found = PowerFiles(base / pattern)
    except InputError as error:
        return (), {}, list(error.problems)
    files = sum(len(found.files_of(subject)) for subject in found.subjects)
    remarks = []
    if files > given:
        remarks.append(f"The pattern {pattern} also finds {files - given} files that were not named.")
    return found.subjects, found.labels_of_words(found.subjects[0]), remarks


def _with_role(path: Path, table: pd.DataFrame, first: FileContents, subjects: Sequence[str]) -> DraftedTable:
    columns = [str(name) for name in table.columns]
    if {"name", "x", "y", "z"} <= set(columns):
        return DraftedTable(path, table, "electrodes")
    if _subject_column(table, subjects) is not None and (len(subjects) > 1 or "participant_id" in columns):
        return DraftedTable(path, table, "participants")
    trials = first.lengths.get("trial")
    if (
        trials == len(table)
        or first.axes is None
        and first.names
        and len(table) in first.array(first.names["power"]).shape
    ):
        return DraftedTable(path, table, "trials")
    if any(subject in path.as_posix() for subject in subjects):
        return DraftedTable(path, table, "trials")
    return DraftedTable(path, table, "unknown")


def _subject_column(table: pd.DataFrame, subjects: Sequence[str]) -> tuple[str, str] | None:
    """The column that holds the subjects, one a row, and how they are written there."""
    names = sorted(map(str, table.columns), key=lambda name: name != "participant_id")
    for name in names:
        cells = ["" if pd.isna(cell) else label_text(cell) for cell in table[name].tolist()]
        if len(set(cells)) != len(cells) or len(cells) < len(subjects):
            continue
        forms = set()
        for subject in subjects:
            fitting = [cell for cell in cells if cell.endswith(subject)]
            forms.add(fitting[0].removesuffix(subject) if fitting else None)
            if len(fitting) > 1:
                exact = {cell.removesuffix(subject) for cell in fitting}
                forms |= exact if len(exact) == 1 else set()
        common = [form for form in forms if form is not None]
        if None not in forms and len(set(common)) == 1:
            return name, f"{common[0]}{{subject}}"
    return None


def _study(
    first: FileContents,
    pattern: str | None,
    subjects: tuple[str, ...],
    words: dict[str, tuple[str, ...]],
    tables: Sequence[DraftedTable],
    base: Path,
) -> Study:
    of_role = {role: [one for one in tables if one.role == role] for role in ("participants", "electrodes", "trials")}
    columns: dict[str, LabelCounts | None] = {name: first.labels_of(name) for name in first.trial_columns}
    trial_table = None
    for one in of_role["trials"][:1]:
        paths = [_relative(table.path, base) for table in of_role["trials"]]
        trial_table = pattern_with_subject(paths, subjects)
        for name in one.table.columns if trial_table is not None else ():
            columns[str(name)] = label_counts(one.table[name].to_numpy())
    for word, labels in words.items():
        columns[word] = dict.fromkeys(labels, 0) if 2 <= len(labels) <= 6 else None
    participants = None
    for one in of_role["participants"][:1]:
        found = _subject_column(one.table, subjects)
        assert found is not None
        participants = (_relative(one.path, base), *found)
    electrodes = None
    channels = first.values_of("channels")
    for one in of_role["electrodes"][:1]:
        names = {label_text(cell) for cell in one.table["name"].tolist()}
        missing = sorted(set(channels or ()) - names)
        electrodes = (_relative(one.path, base), tuple(missing))
    return Study(
        name=base.name or "study",
        first=first,
        pattern=pattern,
        subjects=subjects,
        words=tuple(words),
        columns=columns,
        trial_table=trial_table,
        participants=participants,
        electrodes=electrodes,
    )


def _differences(contents: Sequence[FileContents]) -> list[str]:
    """Where other files that were looked into have other variables than the first."""
    remarks = []
    ours = {one.name for one in contents[0].arrays}
    for other in contents[1:]:
        theirs = {one.name for one in other.arrays}
        if ours != theirs:
            remarks.append(f"{other.path.name} differs from {contents[0].path.name} in {listed(ours ^ theirs)}.")
        first, here = contents[0].lengths, other.lengths
        plural = {"channel": "channels", "frequency": "frequencies", "time": "times"}
        unlike = [words for name, words in plural.items() if here.get(name) != first.get(name)]
        if unlike:
            remarks.append(f"{other.path.name} has not as many {', '.join(unlike)} as {contents[0].path.name}.")
    return remarks


def _tried(study: Study, base: Path) -> str:
    """Read the first subject as drafted: the quickest way to see whether the guesses about the files hold."""
    layout: dict[str, Any] = dict(study.layout())
    if study.trial_table is not None:
        layout["trial_table"] = str(base / study.trial_table)
    try:
        power = PowerFiles(base / str(study.pattern), **layout).of(study.subjects[0])
    except InputError as error:
        return "The first subject cannot be read as drafted: " + " ".join(error.problems)
    trials, channels, frequencies, times = power.values.shape
    return (
        f"The first subject was read as drafted: {trials} trials, {channels} channels, {frequencies} frequencies from "
        f"{power.frequencies[0]:g} to {power.frequencies[-1]:g} Hz, {times} times from {power.times[0]:g} to "
        f"{power.times[-1]:g} s."
    )
