"""ConditionMaps on disk: one `.npz` file of plain arrays and one line of JSON, nothing pickled."""

from __future__ import annotations

import json
import zipfile
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tfstats.foundations.errors import refusal
from tfstats.foundations.safe_writing import written_whole
from tfstats.normalization import Baseline

__all__ = ["is_saved_maps", "read_map_file", "table_as_lists", "table_from_lists", "write_map_file"]

KIND = "tfstats condition maps 1"


def write_map_file(path: Path, parts: dict[str, Any]) -> None:
    """Write all parts of a ConditionMaps; the file appears under its name only when whole."""
    if path.suffix.lower() != ".npz":
        raise refusal(f"save, {path.name}", 'a file name that ends in ".npz"', f'"{path.suffix}"', "change its ending")
    counts, participants, baseline = parts["trial_counts"], parts["participants"], parts["baseline"]
    words = {
        "kind": KIND,
        "unit": parts["unit"],
        "scaling": parts["scaling"],
        "history": parts["history"],
        "cautions": parts["cautions"],
        "averaged_by": parts["averaged_by"],
        "of_differences": parts["of_differences"],
        "baseline": None if baseline is None else asdict(baseline),
        "participants": None if participants is None else table_as_lists(participants),
    }
    arrays = {name: parts[name] for name in ("values", "frequencies", "times")}
    arrays |= {name: np.array(parts[name], dtype=np.str_) for name in ("subjects", "conditions", "channels")}
    if counts is not None:
        arrays["trial_counts"] = counts.to_numpy()
    if parts["wavelet_cycles"] is not None:
        arrays["wavelet_cycles"] = parts["wavelet_cycles"]
    with written_whole(path) as temporary:
        np.savez(temporary, allow_pickle=False, about=np.array(json.dumps(words)), **arrays)


def read_map_file(path: Path) -> dict[str, Any]:
    """All parts of a ConditionMaps, as the constructor takes them."""
    where = f"load, {path.name}"
    if not path.is_file():
        raise refusal(where, "a file", f"nothing at {path}", "check the path")
    try:
        with np.load(path, allow_pickle=False) as stored:
            parts: dict[str, Any] = {name: stored[name] for name in stored.files}
        words = json.loads(str(parts.pop("about")))
        known = words.pop("kind") == KIND
    except (OSError, ValueError, KeyError, EOFError, AttributeError, TypeError, zipfile.BadZipFile) as error:
        raise refusal(
            where,
            "a whole file written by ConditionMaps.save",
            f"one that cannot be read ({type(error).__name__})",
            "save the maps again",
        ) from error
    if not known:
        raise refusal(where, f'maps of kind "{KIND}"', "another kind", "read it with the version that wrote it")
    if words["baseline"] is not None:
        words["baseline"] = Baseline(**words["baseline"])
    if words["participants"] is not None:
        words["participants"] = table_from_lists(words["participants"])
    parts.update(words)
    return parts


def is_saved_maps(path: Path) -> bool:
    """Whether it is a file of `ConditionMaps.save`, and not one of plain arrays."""
    try:
        with zipfile.ZipFile(path) as stored:
            return "about.npy" in stored.namelist()
    except (OSError, zipfile.BadZipFile):
        return True  # reading it says what is wrong


def table_as_lists(table: pd.DataFrame) -> list[dict[str, Any]]:
    """Each column as its name, its kind and a list that JSON holds exactly; missing cells are null."""
    columns = []
    for name in table.columns:
        column = table[name]
        kind = column.dtype.kind if isinstance(column.dtype, np.dtype) else "O"
        if kind in "biuf":
            cells = [None if pd.isna(cell) else cell for cell in column.tolist()]
            columns.append({"name": str(name), "type": str(column.dtype), "cells": cells})
        else:
            cells = [None if pd.isna(cell) else str(cell) for cell in column.tolist()]
            columns.append({"name": str(name), "type": "text", "cells": cells})
    return columns


def table_from_lists(columns: list[dict[str, Any]]) -> pd.DataFrame:
    made = {}
    for column in columns:
        if column["type"] == "text":
            made[column["name"]] = pd.Series(column["cells"], dtype=object)
        else:
            made[column["name"]] = pd.Series(
                np.array([np.nan if cell is None else cell for cell in column["cells"]]).astype(column["type"])
            )
    return pd.DataFrame(made)
