"""Tables with one row a subject: trial counts and participants, put in the order of the maps."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import ArrayLike

from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import Problems, listed, refusal

__all__ = ["aligned_counts", "aligned_participants"]

IDENTIFIER = "participant_id"


def aligned_counts(
    counts: pd.DataFrame | ArrayLike | None, subjects: Sequence[str], conditions: Sequence[str]
) -> pd.DataFrame | None:
    """Trial counts as a DataFrame, subjects x conditions, whole numbers."""
    if counts is None:
        return None
    where = "maps, trial_counts"
    if isinstance(counts, pd.DataFrame):
        table = counts.copy()
        table.index = pd.Index([label_text(value) for value in table.index])
        table.columns = pd.Index([label_text(value) for value in table.columns])
        absent = [name for name in subjects if name not in table.index]
        absent += [name for name in conditions if name not in table.columns]
        if absent:
            raise refusal(
                where,
                "a row for each subject and a column for each condition",
                f"none for {listed(absent)}",
                "add them",
            )
        array = table.loc[list(subjects), list(conditions)].to_numpy()
    else:
        array = np.asarray(counts)
    expected = (len(subjects), len(conditions))
    if array.shape != expected:
        raise refusal(where, f"shape {expected}, subjects x conditions", f"shape {array.shape}", "give one count a map")
    numbers = array.astype(np.float64) if array.dtype.kind in "fiuO" else np.full(expected, np.nan)
    if not np.all((numbers >= 0) & (numbers == np.floor(numbers))):
        raise refusal(
            where, "whole numbers of at least 0", f"{array.ravel().tolist()[:6]} ...", "give the number of trials"
        )
    return pd.DataFrame(numbers.astype(np.int64), index=list(subjects), columns=list(conditions))


def aligned_participants(
    participants: pd.DataFrame | None, subjects: Sequence[str], where: str = "participants"
) -> pd.DataFrame | None:
    """The participants table in the order of the subjects; rows without maps and maps without a row are refused."""
    if participants is None:
        return None
    if not isinstance(participants, pd.DataFrame):
        raise refusal(
            where, "a DataFrame with one row a subject", type(participants).__name__, "read the table with pandas"
        )
    table = participants
    if IDENTIFIER not in table.columns and table.index.name == IDENTIFIER:
        table = table.reset_index()
    if IDENTIFIER not in table.columns:
        raise refusal(
            where, f'a column "{IDENTIFIER}"', listed(table.columns), "rename the column that holds the subjects"
        )
    names = [label_text(value) for value in table[IDENTIFIER]]
    problems = Problems()
    twice = {name for name in names if names.count(name) > 1}
    if twice:
        problems.add(where, "one row a subject", f"several for {listed(twice)}", "keep one row of each")
    without_row = [name for name in subjects if name not in names]
    if without_row:
        problems.add(
            where, f"a row for each of the {len(subjects)} subjects", f"none for {listed(without_row)}", "add the rows"
        )
    without_power = [name for name in names if name not in subjects]
    if without_power:
        problems.add(
            where, "power for each row", f"none for {listed(without_power)}", "add the power or take the rows out"
        )
    problems.raise_if_any()
    aligned = table.iloc[[names.index(name) for name in subjects]].reset_index(drop=True)
    return aligned.assign(**{IDENTIFIER: list(subjects)})
