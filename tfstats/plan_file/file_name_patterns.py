"""The {subject}/{run} pattern that several file names have in common."""

from __future__ import annotations

import re
from collections.abc import Sequence

__all__ = ["common_pattern", "pattern_with_subject"]

_PIECE = re.compile(r"\d+|[^\W\d_]+|[\W_]")
_SUBJECT_WORDS = ("sub", "subject", "subj", "s", "p", "participant", "patient", "vp", "id")
_OTHER_WORDS = {
    "run": "run",
    "block": "block",
    "ses": "session",
    "session": "session",
    "task": "task",
    "cond": "condition",
}


def common_pattern(paths: Sequence[str], known_subjects: Sequence[str] = ()) -> str | None:
    """A pattern with {subject}, and other {word}s for what else differs; None where the names have no common form.

    Parameters
    ----------
    paths : relative paths with "/" between folders
    known_subjects : what the files say of their subjects, in the order of the paths, where they do

    Examples
    --------
    >>> from tfstats.plan_file.file_name_patterns import common_pattern
    >>> common_pattern(["power/S01_run1.mat", "power/S01_run2.mat", "power/S02_run1.mat"])
    'power/S{subject}_run{run}.mat'
    """
    rows = [_PIECE.findall(path) for path in paths]
    if len({len(row) for row in rows}) > 1:
        return _by_ends(paths)
    columns = list(zip(*rows))
    varies = [len(set(column)) > 1 for column in columns]
    if any(differs and any(not piece.isalnum() for piece in column) for differs, column in zip(varies, columns)):
        return _by_ends(paths)
    fields = _joined_fields(columns, varies)
    words = _named(rows, fields, known_subjects)
    if "subject" not in words.values():
        place = _constant_subject(rows[0], varies)
        if place is None:
            return None if fields else _by_ends(paths)
        fields[place] = place + 1
        words[place] = "subject"
    made, position = "", 0
    while position < len(rows[0]):
        if position in fields:
            made += "{" + words[position] + "}"
            position = fields[position]
        else:
            made += rows[0][position]
            position += 1
    return made


def _joined_fields(columns: Sequence[Sequence[str]], varies: Sequence[bool]) -> dict[int, int]:
    """Start to end of each run of pieces that differ; letters and digits side by side are one word."""
    fields, position = {}, 0
    while position < len(columns):
        end = position
        while end < len(columns) and varies[end]:
            end += 1
        if end > position:
            fields[position] = end
        position = max(end, position + 1)
    return fields


def _named(rows: Sequence[Sequence[str]], fields: dict[int, int], known_subjects: Sequence[str]) -> dict[int, str]:
    words: dict[int, str] = {}
    said: dict[tuple[str, ...], str] = {}
    values = {start: tuple("".join(row[start:end]) for row in rows) for start, end in fields.items()}
    for start in fields:
        if values[start] in said:
            words[start] = said[values[start]]  # the same in folder and file name
            continue
        before = rows[0][start - 1].lower() if start and rows[0][start - 1].isalpha() else ""
        if start > 1 and rows[0][start - 1] in "-_" and not before:
            before = rows[0][start - 2].lower()
        word = ""
        if known_subjects and values[start] == tuple(known_subjects) or before in _SUBJECT_WORDS:
            word = "subject"
        elif before in _OTHER_WORDS:
            word = _OTHER_WORDS[before]
        words[start] = "" if word in words.values() else word
        said[values[start]] = words[start]
    nameless = [start for start in fields if not words[start]]
    for start in nameless:
        if "subject" not in words.values():
            name = "subject"
        else:
            name = "condition" if not "".join(values[start]).isdigit() else "part"
            while name in words.values():
                name += "_"
        for other in fields:
            if values[other] == values[start]:
                words[other] = name
    return words


def _constant_subject(row: Sequence[str], varies: Sequence[bool]) -> int | None:
    """Digits after "S", "sub-" and the like, where one subject's files were given."""
    slash = max((place for place, piece in enumerate(row) if piece == "/"), default=-1)
    for place in [*range(slash + 1, len(row)), *range(slash + 1)]:
        before = row[place - 1] if place else ""
        if before in ("-", "_") and place > 1:
            before = row[place - 2]
        if row[place].isdigit() and not varies[place] and before.lower() in _SUBJECT_WORDS:
            return place
    return None


def _by_ends(paths: Sequence[str]) -> str | None:
    """All between what the names share at their start and at their end."""
    start = 0
    while all(start < len(path) and path[start] == paths[0][start] for path in paths):
        start += 1
    end = 0
    while all(end < len(path) - start and path[-1 - end] == paths[0][-1 - end] for path in paths):
        end += 1
    if len(paths) == 1:
        folder, slash, name = paths[0].rpartition("/")
        stem, dot, ending = name.rpartition(".")
        return f"{folder}{slash}{{subject}}{dot}{ending}" if stem else None
    middles = [path[start : len(path) - end] for path in paths]
    if any("/" in middle or not middle for middle in middles):
        return None
    return paths[0][:start] + "{subject}" + (paths[0][-end:] if end else "")


def pattern_with_subject(paths: Sequence[str], subjects: Sequence[str]) -> str | None:
    """A pattern for tables that are named after their subjects; None where they are not."""
    made = set()
    for path in paths:
        for subject in sorted(subjects, key=len, reverse=True):
            if subject in path:
                folder, slash, name = path.rpartition("/")
                replaced = name.replace(subject, "{subject}") if subject in name else name
                made.add((folder if subject in name else folder.replace(subject, "{subject}")) + slash + replaced)
                break
        else:
            return None
    return made.pop() if len(made) == 1 else None
