"""AnalysisPlan: a plan file, read and checked."""

from __future__ import annotations

import hashlib
import json
import tomllib
from dataclasses import dataclass, field
from datetime import UTC, datetime
from os import PathLike
from pathlib import Path
from typing import Any

from tfstats.foundations.errors import InputError, refusal
from tfstats.normalization import Baseline
from tfstats.plan_file.blanks import refuse_blanks
from tfstats.plan_file.line_numbers import KeyPath, lines_of_keys
from tfstats.plan_file.messages import place_text
from tfstats.plan_file.plan_checks import DesignCall, checked_plan
from tfstats.plan_file.tables import (
    ChannelsTable,
    ConditionsTable,
    InputTable,
    ParticipantsTable,
    StudyTable,
    SubjectsTable,
)

__all__ = ["AnalysisPlan", "DesignCall"]

DATA_TABLES = ("input", "participants", "subjects", "conditions", "channels", "baseline")


@dataclass(frozen=True)
class AnalysisPlan:
    """What is to be analysed, and how: one TOML file, fixed before the data are seen.

    Examples
    --------
    >>> import tempfile, pathlib, tfstats as tfs
    >>> text = '''
    ... [study]
    ... name = "lamp sequences"
    ... [input]
    ... files = "power/S{subject}.h5"
    ... [conditions]
    ... columns = ["memory"]
    ... [baseline]
    ... window = [-0.5, -0.2]
    ... [[contrast]]
    ... name = "recalled against missed"
    ... design = "paired"
    ... first = "recalled"
    ... second = "missed"
    ... '''
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder) / "plan.toml"
    ...     _ = path.write_text(text, encoding="utf-8")
    ...     plan = tfs.AnalysisPlan.read(path)
    >>> plan.contrasts[0].arguments
    {'first': 'recalled', 'second': 'missed'}
    """

    path: Path
    text: str = field(repr=False)
    hash: str
    study: StudyTable
    input: InputTable
    participants: ParticipantsTable | None
    subjects: SubjectsTable
    conditions: ConditionsTable | None
    channels: ChannelsTable
    baseline: Baseline
    trial_counts: str
    contrasts: tuple[DesignCall, ...]
    bands: dict[str, tuple[float, float] | tuple[str, str]]
    windows: dict[str, tuple[float, float]]
    band_tests: tuple[DesignCall, ...]
    families: dict[str, tuple[str, ...]]
    hashed_at: str = field(compare=False, default="")
    """When the plan was read and hashed, in UTC: what it set, it set no later."""
    _data: dict[str, Any] = field(repr=False, compare=False, default_factory=dict)
    _lines: dict[KeyPath, int] = field(repr=False, compare=False, default_factory=dict)

    @property
    def folder(self) -> Path:
        """Where relative paths of the plan start."""
        return self.path.parent

    @property
    def cache_folder(self) -> Path:
        """Where each subject's averages are kept between runs: `plan.cache` beside plan.toml."""
        return self.path.with_suffix(".cache")

    def place(self, relative: str) -> Path:
        """A path of the plan as it is on this machine; a plan written on Windows may have backslashes in it."""
        return self.folder / relative.replace("\\", "/")

    def where(self, *key: str | int) -> str:
        """Where a key stands, for refusals: `plan.toml, line 12, baseline, window`."""
        return place_text(self.path.name, key, self._data, self._lines)

    @classmethod
    def read(cls, path: str | PathLike[str]) -> AnalysisPlan:
        """Read and check a plan file.

        Raises
        ------
        InputError
            No such file, no TOML, and all mistakes of the plan together, each with line, key and remedy.
        """
        path = Path(path)
        text = _text_of(path)
        return _plan(path, text, _parsed(text, path.name))

    @classmethod
    def data_part(cls, path: str | PathLike[str]) -> AnalysisPlan | None:
        """Only what says where the data lie and how they are read; None where that part is wrong itself.

        With it the data can be checked although a contrast, say, has a mistake.
        """
        path = Path(path)
        try:
            text = _text_of(path)
            found = _parsed(text, path.name)
            data = {key: found[key] for key in DATA_TABLES if key in found}
            return _plan(path, text, {"study": {"name": "data"}, **data}, compares=False)
        except InputError:
            return None


def _plan(path: Path, text: str, data: dict[str, Any], *, compares: bool = True) -> AnalysisPlan:
    """The plan that the data of a file make; without `compares` it need not compare anything."""
    lines = lines_of_keys(text)
    refuse_blanks(path.name, data, lines)
    tables, baseline, contrasts, band_tests = checked_plan(path.name, data, lines, compares=compares)
    return AnalysisPlan(
        path=path,
        text=text,
        hash=hashlib.sha256(json.dumps(data, sort_keys=True, default=str).encode("utf-8")).hexdigest(),
        study=tables.study,
        input=tables.input,
        participants=tables.participants,
        subjects=tables.subjects,
        conditions=tables.conditions,
        channels=tables.channels,
        baseline=baseline,
        trial_counts=str(tables.baseline.get("trial_counts", "as_recorded")),
        contrasts=contrasts,
        bands={entry.name: entry.frequencies for entry in tables.band},
        windows={entry.name: entry.times for entry in tables.window},
        band_tests=band_tests,
        families={entry.name: tuple(entry.contrasts) for entry in tables.family},
        hashed_at=datetime.now(UTC).isoformat(timespec="seconds"),
        _data=data,
        _lines=lines,
    )


def _text_of(path: Path) -> str:
    if not path.is_file():
        got = "a folder" if path.is_dir() else "nothing of that name"
        raise refusal(str(path), "a plan file", got, "check the path")
    try:
        # utf-8-sig: some editors put a mark at the start, which is no TOML.
        return path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        raise refusal(str(path), "text in UTF-8", f"a byte that is not ({error.reason})", "save it as UTF-8") from error


def _parsed(text: str, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        remedy = "mend that place; texts stand in double quotes"
        if "\\" in str(error) or "Invalid hex value" in str(error):
            remedy = "write / between folders, which Windows takes too"
        elif "overwrite" in str(error) or "twice" in str(error):
            remedy = "keep one of the two; contrasts, bands and windows stand in double brackets, [[contrast]]"
        raise refusal(name, "a file in TOML", f"{error}", remedy) from error
    except RecursionError:
        raise refusal(name, "a file in TOML", "brackets nested too deeply", "write the plan anew") from None
