"""The condition of each trial, read from one trial column or several."""

from __future__ import annotations

from collections.abc import Sequence

import pandas as pd

from tfstats.foundations.axes import label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import Problems, listed

__all__ = ["JOINT", "checked_columns", "trial_labels"]

JOINT = "/"
"""Between the labels of several columns: "2/recalled"."""


def checked_columns(by: str | Sequence[str]) -> tuple[str, ...]:
    """The trial columns named by `by`, each once."""
    columns = (by,) if isinstance(by, str) else tuple(by) if isinstance(by, Sequence) else ()
    problems = Problems()
    wrong = not columns or any(not isinstance(name, str) or not name for name in columns)
    if wrong or len(set(columns)) != len(columns):
        problems.add("by", "a trial column or several, each once", repr(by), 'write "memory" or ["load", "memory"]')
    problems.raise_if_any()
    return columns


def trial_labels(trials: pd.DataFrame, columns: Sequence[str], subject: str) -> list[str | None]:
    """One label a trial, several columns joined; None where a cell is empty."""
    present = [str(name) for name in trials.columns]
    problems = Problems()
    for name in columns:
        if name not in present:
            problems.add(
                f"subject {subject}, trials",
                f"a trial column among {listed(present)}",
                f'"{name}"',
                f"{closest(name, present)}use the name in the trial table",
            )
    problems.raise_if_any()
    cells = [
        [None if pd.isna(value) or not label_text(value) else label_text(value) for value in trials[name].tolist()]
        for name in columns
    ]
    return [None if None in row else JOINT.join(str(cell) for cell in row) for row in zip(*cells)]
