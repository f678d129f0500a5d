"""A result as files: `result.npz` to load again, `maps.npz` and two tables for other programs."""

from __future__ import annotations

import json
import zipfile
import zlib
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tfstats.contrasts.contrast import Contrast, Relabelling
from tfstats.corrections import CORRECTIONS
from tfstats.corrections.tail_approximation import TailFit
from tfstats.findings.cluster_tables import CLUSTER_COLUMNS
from tfstats.foundations.errors import InputError
from tfstats.foundations.safe_writing import written_whole
from tfstats.results.contrast_result import ContrastResult, TestRecord

__all__ = ["load_result", "save_result"]

FORMAT = "tfstats result 1"
RESULT_FILE = "result.npz"

MAPS = ("statistic", "p_values", "point_p_values", "estimate", "effect_size", "mask", "cluster_labels")
TEXT_FIELDS = (
    "design", "unit_kind", "unit", "statistic", "null_hypothesis", "difference", "per", "predictor_name", "rank",
)  # fmt: skip
LIST_FIELDS = ("unit_names", "channels", "label_names", "history", "cautions", "nuisance_names", "conditions")
ARRAY_FIELDS = ("labels", "predictor", "nuisance", "components")


def save_result(result: ContrastResult, folder: Path) -> None:
    """Write the four files; each is whole or absent."""
    folder.mkdir(parents=True, exist_ok=True)
    with written_whole(folder / "maps.npz") as path:
        np.savez_compressed(
            path,
            channels=np.array(result.channels),
            frequencies=result.frequencies,
            times=result.times,
            **{name: getattr(result, name) for name in MAPS},
        )
    with written_whole(folder / "clusters.csv") as path:
        result.clusters.to_csv(path, index=False, encoding="utf-8", lineterminator="\n")
    with written_whole(folder / "subject_values.csv") as path:
        result.region_table.to_csv(path, index=False, encoding="utf-8", lineterminator="\n")
    # Last, since its presence says that this contrast is done.
    with written_whole(folder / RESULT_FILE) as path:
        np.savez_compressed(path, **_arrays_of(result))


def _arrays_of(result: ContrastResult) -> dict[str, Any]:
    contrast = result.contrast
    record = asdict(result.record)
    record["correction"] = {"kind": result.record.correction.kind, **asdict(result.record.correction)}
    text = {
        "format": FORMAT,
        "record": record,
        "contrast": {
            **{name: getattr(contrast, name) for name in TEXT_FIELDS},
            **{name: list(getattr(contrast, name)) for name in LIST_FIELDS},
            "alternatives": dict(contrast.alternatives),
            "relabelling": asdict(contrast.relabelling),
            "condition_means": list(contrast.condition_means),
        },
        "statistic_name": result.statistic_name,
        "effect_name": result.effect_name,
        "cautions": list(result.cautions),
        "cluster_columns": list(result.clusters.columns),
        "trial_counts": None
        if contrast.trial_counts is None
        else {
            "subjects": [str(name) for name in contrast.trial_counts.index],
            "conditions": [str(name) for name in contrast.trial_counts.columns],
            "counts": contrast.trial_counts.to_numpy().tolist(),
        },
    }
    arrays: dict[str, Any] = {name: getattr(result, name) for name in MAPS}
    arrays.update(
        text=np.array(json.dumps(text, ensure_ascii=False)),
        null=result.null,
        df=np.asarray(result.df),
        subjects_at_point=result.subjects_at_point,
        values=contrast.values,
        frequencies=contrast.frequencies,
        times=contrast.times,
    )
    for name in ARRAY_FIELDS:
        if getattr(contrast, name) is not None:
            arrays[name] = getattr(contrast, name)
    for number, mean in enumerate(contrast.condition_means.values()):
        arrays[f"condition_mean.{number}"] = mean
    for prefix, table in (("cluster", result.clusters), ("region", result.region_table)):
        for name in table.columns:
            column = table[name].to_numpy()
            arrays[f"{prefix}.{name}"] = column.astype(str) if column.dtype.kind not in "ifb" else column
    return arrays


def load_result(folder: Path) -> ContrastResult:
    """Read `result.npz` of a folder."""
    path = folder / RESULT_FILE if folder.is_dir() or not folder.suffix else folder
    if not path.is_file():
        raise InputError(f"{path}: expected a saved result, got nothing; give the folder that save wrote.")
    try:
        with np.load(path, allow_pickle=False) as pack:
            arrays = {name: pack[name] for name in pack.files}
        text = json.loads(str(arrays["text"]))
        if text["format"] != FORMAT:
            raise KeyError("format")
        return _result_from(arrays, text)
    except (KeyError, ValueError, OSError, EOFError, zipfile.BadZipFile, zlib.error) as error:
        raise InputError(
            f"{path}: expected a result that tfstats saved, got one that cannot be read ({error}); save it again."
        ) from error


def _table(arrays: dict[str, Any], prefix: str, columns: list[str]) -> pd.DataFrame:
    table = {}
    for name in columns:
        column = arrays[f"{prefix}.{name}"]
        table[name] = column.astype(object) if column.dtype.kind in "US" else column
    return pd.DataFrame(table, columns=columns)


def _df(array: np.ndarray) -> float | tuple[float, float] | np.ndarray:
    if array.ndim == 0:
        return float(array)
    return (float(array[0]), float(array[1])) if array.ndim == 1 else array


def _result_from(arrays: dict[str, Any], text: dict[str, Any]) -> ContrastResult:
    said = text["contrast"]
    counts = text["trial_counts"]
    relabelling = said["relabelling"]
    blocks = relabelling["blocks"]
    fields: dict[str, Any] = {name: said[name] for name in TEXT_FIELDS}
    fields.update({name: tuple(said[name]) for name in LIST_FIELDS})
    fields.update({name: arrays.get(name) for name in ARRAY_FIELDS})
    contrast = Contrast(
        values=arrays["values"],
        frequencies=arrays["frequencies"],
        times=arrays["times"],
        relabelling=Relabelling(
            relabelling["kind"], None if blocks is None else tuple(blocks), tuple(relabelling["block_names"])
        ),
        alternatives=said["alternatives"],
        condition_means={name: arrays[f"condition_mean.{n}"] for n, name in enumerate(said["condition_means"])},
        trial_counts=None
        if counts is None
        else pd.DataFrame(counts["counts"], index=counts["subjects"], columns=counts["conditions"]),
        **fields,
    )
    record = dict(text["record"])
    correction = dict(record.pop("correction"))
    fit = record.pop("tail_fit", None)
    if record.get("unresolved_p") is not None:
        record["unresolved_p"] = tuple(record["unresolved_p"])
    settings = CORRECTIONS[correction.pop("kind")](**correction)
    df = arrays["df"]
    return ContrastResult(
        contrast=contrast,
        record=TestRecord(correction=settings, tail_fit=None if fit is None else TailFit(**fit), **record),
        statistic=arrays["statistic"],
        p_values=arrays["p_values"],
        estimate=arrays["estimate"],
        effect_size=arrays["effect_size"],
        mask=arrays["mask"],
        null=arrays["null"],
        clusters=_table(arrays, "cluster", text["cluster_columns"] or list(CLUSTER_COLUMNS)),
        cluster_labels=arrays["cluster_labels"],
        statistic_name=text["statistic_name"],
        df=_df(df),
        effect_name=text["effect_name"],
        subjects_at_point=arrays["subjects_at_point"],
        cautions=tuple(text["cautions"]),
        kept={
            "point_p_values": arrays["point_p_values"],
            "region_table": _table(arrays, "region", ["subject", "condition", "region", "value", "unit"]),
        },
    )
