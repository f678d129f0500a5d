"""The trial table: columns from the file and from a table beside it, recoded, and the trials that are kept."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.foundations.axes import label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import Problems, listed, refusal

__all__ = ["column_of", "combined", "kept_rows", "read_table", "recoded"]

MISSING = ("", "n/a", "N/A", "NaN", "nan", "NA")
"""Cells that say that there is no value; "n/a" is that of the BIDS standard."""

_NUMBER = re.compile(r"[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?")
_PADDED = re.compile(r"[+-]?0\d")


def read_table(path: Path, where: str) -> pd.DataFrame:
    """A `.tsv` or `.csv` file in UTF-8; spaces trimmed, columns of numbers as numbers, "n/a" as missing."""
    if path.suffix.lower() not in (".tsv", ".csv", ".txt"):
        raise refusal(where, 'a table that ends in ".csv" or ".tsv"', f'"{path.suffix}"', "write the table as text")
    if not path.is_file():
        raise refusal(where, "a table", "nothing there", "check the path")
    separator = "," if path.suffix.lower() == ".csv" else "\t"
    try:
        # utf-8-sig: spreadsheets put a mark at the start that would become part of the first name.
        cells = pd.read_csv(
            path, sep=separator, dtype=str, keep_default_na=False, encoding="utf-8-sig", skipinitialspace=True,
            index_col=False, header=None,
        )  # fmt: skip
    except pd.errors.EmptyDataError as error:
        raise refusal(where, "a header and rows", "an empty file", "write the table again") from error
    except (UnicodeDecodeError, pd.errors.ParserError) as error:
        kind = "comma" if separator == "," else "tab"
        raise refusal(
            where,
            f"{kind}-separated text in UTF-8",
            f"text that is not ({type(error).__name__})",
            "save it as UTF-8 text",
        ) from error
    names = [str(name).strip() for name in cells.iloc[0].tolist()]
    twice = {name for name in names if names.count(name) > 1}
    if twice or "" in names:
        got = f"{listed(twice)} more than once" if twice else "a column without a name"
        raise refusal(where, "a name for each column, each once", got, "rename the columns")
    rows = cells.iloc[1:].reset_index(drop=True)
    return pd.DataFrame(
        {name: _as_column(rows[number].tolist()) for number, name in enumerate(names)}, index=rows.index
    )


def _as_column(cells: Iterable[Any]) -> pd.Series[Any]:
    texts = [str(cell).strip() for cell in cells]
    missing = [text in MISSING for text in texts]
    given = [text for text, absent in zip(texts, missing) if not absent]
    # A zero in front is part of a label ("01"), which a number would lose.
    if given and all(_NUMBER.fullmatch(text) and not _PADDED.match(text) for text in given):
        numbers = pd.Series(
            [np.nan if absent else float(text) for text, absent in zip(texts, missing)], dtype=np.float64
        )
        whole = not any(missing) and all(re.fullmatch(r"[+-]?\d{1,15}", text) for text in given)
        return numbers.astype(np.int64) if whole else numbers
    return pd.Series([np.nan if absent else text for text, absent in zip(texts, missing)], dtype=object)


def column_of(value: Any, trials: int, where: str, remedy: str) -> pd.Series[Any]:
    """A column from an array or list in a power file; a single value stands for all trials of the file."""
    if isinstance(value, str):
        return pd.Series([value] * trials, dtype=object)
    if isinstance(value, np.ndarray):
        if value.dtype.kind not in "biuf" or value.ndim > 1 and value.size != max(value.shape):
            raise refusal(where, "one value a trial", f"type {value.dtype}, shape {value.shape}", remedy)
        cells: Any = value.reshape(-1)
    else:
        cells = [np.nan if cell in MISSING else cell for cell in value]
    if len(cells) == 1 and trials != 1:
        cells = np.repeat(cells, trials) if isinstance(cells, np.ndarray) else list(cells) * trials
    if len(cells) != trials:
        raise refusal(where, f"one value for each of the {trials} trials", f"{len(cells)} values", remedy)
    return pd.Series(cells if isinstance(cells, np.ndarray) else np.array(cells, dtype=object))


def combined(first: pd.DataFrame, second: pd.DataFrame, where: str, sources: tuple[str, str]) -> pd.DataFrame:
    """The columns of both; a column in both must say the same in each trial."""
    problems = Problems()
    made = first.copy()
    for name in second.columns:
        if name in first.columns:
            ours, theirs = [_label_list(table[name]) for table in (first, second)]
            differing = sum(one != other for one, other in zip(ours, theirs))
            if differing:
                problems.add(
                    f"{where}, trial column {name}",
                    f"the same in {sources[0]} and {sources[1]}",
                    f"{differing} of {len(ours)} trials that differ",
                    "rename or drop one of the two columns",
                )
        else:
            made[name] = second[name].to_numpy()
    problems.raise_if_any()
    return made


def _label_list(column: pd.Series[Any]) -> list[str]:
    return ["" if pd.isna(cell) else label_text(cell) for cell in column.tolist()]


def _column(trials: pd.DataFrame, name: str, where: str, line: str) -> pd.Series[Any]:
    present = [str(column) for column in trials.columns]
    if name not in present:
        raise refusal(
            where,
            f"a trial column among {listed(present)}",
            f'"{name}"',
            f"{closest(name, present)}correct {line}",
        )
    return trials.iloc[:, present.index(name)]


def recoded(trials: pd.DataFrame, recode: Mapping[str, Mapping[str, str]], where: str) -> pd.DataFrame:
    """New labels for old ones; labels that are not named stay, as text."""
    problems, made = Problems(), trials.copy()
    for name, labels in recode.items():
        with problems.gathering():
            column = _column(trials, name, f"{where}, trials", f"[input.recode.{name}]")
            cells = [np.nan if pd.isna(cell) else label_text(cell) for cell in column.tolist()]
            made[name] = pd.Series(
                [labels.get(cell, cell) if isinstance(cell, str) else cell for cell in cells], dtype=object
            )
    problems.raise_if_any()
    return made


def kept_rows(trials: pd.DataFrame, keep: Mapping[str, Mapping[str, Any]], where: str) -> NDArray[np.bool_]:
    """Which trials fulfil every rule; a trial without a value in a column that is asked for is not kept."""
    problems, kept = Problems(), np.ones(len(trials), dtype=bool)
    for name, rule in keep.items():
        with problems.gathering():
            kept &= _fulfil(_column(trials, name, f"{where}, trials", f"[input.keep] {name}"), rule, where, name)
    problems.raise_if_any()
    if not kept.any():
        raise refusal(
            f"{where}, trials", "at least one trial that is kept", f"none of {len(trials)}", "change [input.keep]"
        )
    return kept


def _fulfil(column: pd.Series[Any], rule: Mapping[str, Any], where: str, name: str) -> NDArray[np.bool_]:
    fine = ~column.isna().to_numpy()
    if "one_of" in rule:
        fine &= np.array([label_text(cell) in rule["one_of"] for cell in column.tolist()], dtype=bool)
    if "at_least" in rule or "at_most" in rule:
        numbers = pd.to_numeric(column, errors="coerce").to_numpy(dtype=np.float64)
        text = fine & np.isnan(numbers)
        if text.any():
            first = column.to_numpy()[text][0]
            raise refusal(
                f"{where}, trial column {name}",
                "numbers for at_least and at_most",
                f"{text.sum()} cells of text, the first {first!r}",
                f"use one_of in [input.keep] {name}",
            )
        with np.errstate(invalid="ignore"):
            fine &= numbers >= rule.get("at_least", -np.inf)
            fine &= numbers <= rule.get("at_most", np.inf)
    return np.asarray(fine, dtype=bool)
