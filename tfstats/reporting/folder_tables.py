"""The tables of a results folder as CSV, written and read so that labels stay text and numbers stay the same."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import pandas as pd

from tfstats.findings.band_tables import BAND_COLUMNS
from tfstats.foundations.safe_writing import written_whole
from tfstats.reporting.study_results import StudyResults

__all__ = [
    "all_clusters",
    "read_bands",
    "read_electrodes",
    "read_families",
    "read_participants",
    "read_review",
    "read_trial_counts",
    "write_table",
]

BAND_LABELS = ("test", "band", "window", "channels", "unit")


def write_table(table: pd.DataFrame, path: Path) -> None:
    """CSV in UTF-8 with the same line ends on every system; numbers with all their digits."""
    with written_whole(path) as temporary:
        table.to_csv(temporary, index=False, encoding="utf-8", lineterminator="\n")


def _read(path: Path, labels: tuple[str, ...]) -> pd.DataFrame:
    # A channel or subject may be called "NA" or "007": labels are read as they stand, gaps are for numbers only.
    table = pd.read_csv(path, encoding="utf-8", dtype=str, keep_default_na=False)
    for name in table.columns:
        if name not in labels:
            table[name] = _typed(table[name].tolist())
    return table


def _typed(cells: list[str]) -> list[Any]:
    """Cells as whole numbers, numbers (every digit kept), truth values or, failing these, texts."""
    if set(cells) <= {"True", "False"}:
        return [cell == "True" for cell in cells]
    for kind in (int, lambda cell: float(cell) if cell else math.nan):
        try:
            return [kind(cell) for cell in cells]
        except ValueError:
            continue
    return cells


def read_bands(path: Path) -> pd.DataFrame:
    """The band table."""
    table = _read(path, BAND_LABELS)
    numbers = [name for name in BAND_COLUMNS if name not in BAND_LABELS]
    return table.astype({name: float for name in numbers if name in table.columns})


def read_trial_counts(path: Path) -> pd.DataFrame:
    """Trial counts (subjects x conditions) from the long table that `long_trial_counts` makes."""
    table = _read(path, ("subject", "condition"))
    subjects = list(dict.fromkeys(table["subject"]))
    conditions = list(dict.fromkeys(table["condition"]))
    wide = table.pivot(index="subject", columns="condition", values="trials").loc[subjects, conditions]
    wide.index.name = wide.columns.name = None
    return wide


def long_trial_counts(counts: pd.DataFrame) -> pd.DataFrame:
    """One row a subject and condition, so that no condition's name can clash with a column's."""
    rows = [
        (str(subject), str(condition), counts.iat[row, column])
        for row, subject in enumerate(counts.index)
        for column, condition in enumerate(counts.columns)
    ]
    return pd.DataFrame(rows, columns=["subject", "condition", "trials"])


def read_participants(path: Path) -> pd.DataFrame:
    """The participants table."""
    return _read(path, ("participant_id",))


def read_review(path: Path) -> pd.DataFrame:
    """Findings of the baseline review: all text."""
    return _read(path, ("severity", "topic", "words", "remedy"))


def read_families(path: Path) -> pd.DataFrame:
    """Contrasts corrected for each other."""
    return _read(path, ("family", "contrast"))


def read_electrodes(path: Path) -> pd.DataFrame:
    """Electrode positions."""
    return _read(path, ("name",))


def all_clusters(study: StudyResults) -> pd.DataFrame:
    """The cluster tables of all contrasts under each other, with a column `contrast` in front."""
    parts = []
    for name, result in study.contrasts.items():
        part = result.clusters.copy()
        part.insert(0, "contrast", name)
        part["unit"] = result.estimate_unit
        part["effect_name"] = result.effect_name
        parts.append(part)
    filled = [part for part in parts if len(part)] or parts[:1]
    return pd.concat(filled, ignore_index=True) if filled else pd.DataFrame(columns=["contrast"])
