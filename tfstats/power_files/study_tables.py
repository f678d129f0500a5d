"""Tables of a study: participants and electrodes, with columns as in the open BIDS standard."""

from __future__ import annotations

from os import PathLike, fspath
from pathlib import Path

import pandas as pd

from tfstats.foundations.axes import label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.power_files.trial_columns import read_table

__all__ = ["read_electrodes", "read_participants"]

IDENTIFIER = "participant_id"
POSITION = ("x", "y", "z")


def read_participants(
    path: str | PathLike[str], *, column: str = IDENTIFIER, subject: str = "{subject}"
) -> pd.DataFrame:
    """Read a table with one row a subject.

    Parameters
    ----------
    path : path
        `.tsv` or `.csv` in UTF-8; "n/a" is missing.
    column : str
        The column that holds the subjects.
    subject : str
        How they are written there: "sub-{subject}" for power files of subjects "01", "02".

    Returns
    -------
    pandas.DataFrame
        First column participant_id with the subjects as text, as in the power files; numbers as numbers.

    Raises
    ------
    InputError
        A column that is not there, empty or repeated subjects, subjects written otherwise; all mistakes at once.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> from tfstats.power_files import read_participants
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder) / "participants.tsv"
    ...     _ = path.write_text("participant_id\\tage\\nsub-01\\t23\\nsub-02\\tn/a\\n", encoding="utf-8")
    ...     table = read_participants(path, subject="sub-{subject}")
    >>> list(table["participant_id"])
    ['01', '02']
    """
    where = f"participants, {fspath(path)}"
    if subject.count("{subject}") != 1:
        raise refusal(f"{where}, subject", "a text with {subject} once", f'"{subject}"', 'write "sub-{subject}"')
    table = read_table(Path(path), where)
    present = list(table.columns)
    if column not in present:
        raise refusal(
            where,
            f'a column "{column}"',
            listed(present),
            f"{closest(column, present)}set column under [participants]",
        )
    before, after = subject.split("{subject}")
    problems, names = Problems(), []
    missing = table[column].isna().to_numpy()
    if missing.any():
        rows = ", ".join(str(number + 2) for number in missing.nonzero()[0])
        problems.add(f"{where}, {column}", "a subject in each row", f"none in line {rows}", "fill in or drop the rows")
    otherwise = []
    for cell, absent in zip(table[column].tolist(), missing):
        text = "" if absent else label_text(cell)
        fits = text.startswith(before) and text.endswith(after) and len(text) > len(before) + len(after)
        if not fits and not absent:
            otherwise.append(text)
        names.append(text[len(before) : len(text) - len(after)])
    if otherwise:
        problems.add(
            f"{where}, {column}", f'subjects written "{subject}"', listed(otherwise), "set subject under [participants]"
        )
    twice = {name for name in names if name and names.count(name) > 1}
    if twice:
        problems.add(
            f"{where}, {column}", "each subject once", f"{listed(twice)} more than once", "keep one row of each"
        )
    if len(table) == 0:
        problems.add(where, "at least one row", "none", "add the subjects")
    problems.raise_if_any()
    rest = table.drop(columns=[column])
    if IDENTIFIER in rest.columns:
        rest = rest.rename(columns={IDENTIFIER: f"{IDENTIFIER}_in_table"})
    rest.insert(0, IDENTIFIER, pd.Series(names, dtype=object))
    return rest


def read_electrodes(path: str | PathLike[str]) -> pd.DataFrame:
    """Read electrode positions: columns name, x, y, z, as in the `electrodes.tsv` of the BIDS standard.

    Parameters
    ----------
    path : path
        `.tsv` or `.csv` in UTF-8; "n/a" is missing.  Any unit of length, the same for all.

    Returns
    -------
    pandas.DataFrame
        name (text), x, y, z (numbers, NaN where missing), in the order of the file; further columns are left out.

    Raises
    ------
    InputError
        Columns that are not there, positions that are not numbers, empty or repeated names; all mistakes at once.

    Examples
    --------
    >>> import tempfile, pathlib
    >>> from tfstats.power_files import read_electrodes
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = pathlib.Path(folder) / "electrodes.tsv"
    ...     _ = path.write_text("name\\tx\\ty\\tz\\nFz\\t0\\t0.7\\t0.7\\nCz\\t0\\t0\\t1\\n", encoding="utf-8")
    ...     read_electrodes(path)["name"].tolist()
    ['Fz', 'Cz']
    """
    where = f"electrodes, {fspath(path)}"
    table = read_table(Path(path), where)
    present, problems = list(table.columns), Problems()
    for column in ("name", *POSITION):
        if column not in present:
            problems.add(where, f'a column "{column}"', listed(present), f"{closest(column, present)}rename the column")
    problems.raise_if_any()
    if len(table) == 0:
        raise refusal(where, "at least one row", "none", "add the electrodes")
    made = pd.DataFrame(
        {"name": ["" if pd.isna(cell) else label_text(cell) for cell in table["name"].tolist()]}, dtype=object
    )
    names = made["name"].tolist()
    if "" in names:
        problems.add(where, "a name for each electrode", "an empty one", "name every electrode")
    twice = {name for name in names if name and names.count(name) > 1}
    if twice:
        problems.add(where, "each electrode once", f"{listed(twice)} more than once", "keep one row of each")
    for column in POSITION:
        numbers = pd.to_numeric(table[column], errors="coerce")
        wrong = numbers.isna() & ~table[column].isna()
        if wrong.any():
            got = f"{table[column][wrong].iloc[0]!r} for {listed(made['name'][wrong])}"
            problems.add(f"{where}, {column}", "numbers, or n/a", got, "correct the cells")
        made[column] = numbers.astype(float)
    problems.raise_if_any()
    return made
