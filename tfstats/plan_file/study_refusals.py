"""What is wrong with a study's data, said with the file and the line of the plan that can be changed."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

from tfstats.foundations.errors import InputError
from tfstats.plan_file.line_numbers import KeyPath
from tfstats.plan_file.plan import AnalysisPlan

__all__ = ["in_entry", "in_plan"]

MOST_SUBJECTS = 8

_SLASH = re.compile(r"[/\\]")

# What the beginning of a refusal names, and the key of the plan that settles it; the first that fits.
_KEYS: tuple[tuple[str, KeyPath], ...] = (
    (r"trial_table", ("input", "trial_table")),
    (r"baseline|trial counts", ("baseline",)),
    (r"fewest_trials", ("subjects", "fewest_trials")),
    (r"conditions|trial column|, trials$", ("conditions",)),
    (r"regions", ("channels", "regions")),
    (r"^electrodes|channels, electrodes", ("channels", "electrodes")),
    (r"pairs", ("channels", "pairs")),
    (r"^mean_across|, group ", ("channels", "groups")),
    (r"channels$", ("channels", "missing")),
    (r"^participants", ("participants", "file")),
    (r"^subjects, incomplete", ("subjects", "incomplete")),
    (r"^subjects", ("subjects", "exclude")),
    (r"^subject |^input", ("input", "files")),
)


@contextmanager
def in_plan(plan: AnalysisPlan, files_of: Callable[[str], Sequence[Path]] | None = None) -> Iterator[None]:
    """Add the subject's file and the plan's line to each problem; say once what several subjects share.

    `files_of` gives the files of a subject, where they are known.
    """
    try:
        yield
    except InputError as error:
        raise InputError(_placed(plan, text, files_of) for text in _shared(error.problems)) from error


@contextmanager
def in_entry(place: str) -> Iterator[None]:
    """Put the place of a contrast or band test in front of what is refused inside."""
    try:
        yield
    except InputError as error:
        raise InputError(f"{place}: {text}" for text in error.problems) from error


def _shared(problems: Sequence[str]) -> list[str]:
    """One sentence for what is the same in several subjects."""
    subjects: dict[str, list[str]] = {}
    for text in problems:
        name, rest = _subject_of(text)
        subjects.setdefault(rest, []).extend([name] if name else [])
    merged = []
    for rest, names in subjects.items():
        if not names:
            merged.append(rest)
        elif len(names) == 1:
            merged.append(f"subject {names[0]}, {rest}")
        else:
            left = len(names) - MOST_SUBJECTS
            more = f" and {left} more" if left > 0 else ""
            merged.append(f"subjects {', '.join(names[:MOST_SUBJECTS])}{more}, {rest}")
    return merged


def _subject_of(text: str) -> tuple[str, str]:
    """(`S1`, `conditions: expected ...`) of `subject S1, conditions: expected ...`."""
    found = re.match(r"subject ([^,:]+), (.*)", text, re.DOTALL)
    return (found.group(1), found.group(2)) if found else ("", text)


def _placed(plan: AnalysisPlan, text: str, files_of: Callable[[str], Sequence[Path]] | None) -> str:
    if text.startswith(f"{plan.path.name}, ") or f"({plan.path.name}, " in text:
        return text
    said = text.partition(": expected ")[0]
    name, rest = _subject_of(text)
    files = [str(path) for path in files_of(name)] if files_of is not None and "," not in name and name else []
    if files and not any(path in text for path in files):
        text = f"subject {name}, {_few(files)}, {rest}"
    bare = ", ".join(_without_path(part) for part in said.split(", "))
    own = re.match(r"input, (\w+)", said)
    entry = re.match(r'(band|window) "(.*)"$', said)
    if entry:
        listing = plan.bands if entry.group(1) == "band" else plan.windows
        key: KeyPath | None = (
            (entry.group(1), list(listing).index(entry.group(2))) if entry.group(2) in listing else None
        )
    elif own and own.group(1) != "files":
        key = ("input", own.group(1))
    else:
        key = next((key for pattern, key in _KEYS if re.search(pattern, bare)), None)
    if key == ("baseline",) and "window" in bare:
        key = ("baseline", "window")
    if key == ("input", "files") and "set contents = " in text:
        key = ("input", "contents")
    return text if key is None else f"{text.removesuffix('.')} ({plan.where(*key)})."


def _without_path(part: str) -> str:
    """Paths are no keys: a folder may be called "baseline"."""
    first = part.split(" ", 1)[0]
    return part if not _SLASH.search(part) else "" if _SLASH.search(first) else first


def _few(files: Sequence[str]) -> str:
    return files[0] if len(files) == 1 else f"{files[0]} and {len(files) - 1} more"
