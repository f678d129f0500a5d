"""What subjects are compared on: one condition or a combination, and the columns of the participants table."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.contrasts.contrast import Relabelling
from tfstats.foundations.axes import label_positions, label_text
from tfstats.foundations.checks import closest
from tfstats.foundations.errors import InputError, Problems, listed, refusal

__all__ = [
    "block_codes",
    "check_model",
    "checked_maps",
    "checked_weights",
    "combined_values",
    "compared_combination",
    "numeric_column",
    "table_column",
    "weights_in_words",
]

MISSING_TEXTS = ("", "n/a", "na", "nan")


def checked_maps(maps: object, design: str, *, fewest: int = 2) -> ConditionMaps:
    """The maps, or a refusal of anything else and of too few subjects."""
    if not isinstance(maps, ConditionMaps):
        raise refusal(design, "ConditionMaps", type(maps).__name__, "make them with condition_maps")
    if len(maps.subjects) < fewest:
        raise InputError(
            f"{design}: expected at least two subjects, got {len(maps.subjects)}; "
            "for one subject compare trials with trialwise or trialwise_change."
        )
    return maps


def checked_weights(weights: Mapping[str, float], where: str, *, all_zero_is_wrong: bool = True) -> dict[str, float]:
    """Weights by condition label, finite numbers, not all zero."""
    if not isinstance(weights, Mapping) or not weights:
        raise refusal(where, "a mapping of condition to number", repr(weights), 'write {"recalled": 1, "missed": -1}')
    checked: dict[str, float] = {}
    problems = Problems()
    for name, weight in weights.items():
        try:
            checked[label_text(name)] = float(weight)
        except (TypeError, ValueError):
            problems.add(f'{where}, condition "{name}"', "a number", repr(weight), "write its weight")
            continue
        if not np.isfinite(float(weight)):
            problems.add(f'{where}, condition "{name}"', "a finite number", repr(weight), "write its weight")
    problems.raise_if_any()
    if all_zero_is_wrong and not any(checked.values()):
        raise refusal(where, "at least one weight other than zero", "zeros only", "give the weights")
    return checked


def weights_in_words(weights: Mapping[str, float]) -> str:
    """`1 x recalled - 1 x missed`."""
    parts = []
    for place, (name, weight) in enumerate(weights.items()):
        sign = "-" if weight < 0 else "+"
        shown = f"{abs(weight):g} x {name}"
        parts.append(f"{sign} {shown}" if place else shown if weight >= 0 else f"-{shown}")
    return " ".join(parts)


def combined_values(
    values: NDArray[np.floating], places: Sequence[int], weights: Sequence[float], less: float = 0.0
) -> NDArray[np.floating]:
    """Weighted sum over conditions, one copy of the data."""
    combined = values[:, places[0]] * values.dtype.type(weights[0])
    for place, weight in zip(places[1:], weights[1:]):
        if weight == -1.0:
            combined -= values[:, place]
        else:
            combined += values[:, place] * values.dtype.type(weight)
    if less:
        combined -= values.dtype.type(less)
    return np.ascontiguousarray(combined)


def compared_combination(
    maps: ConditionMaps, condition: str | None, combine: Mapping[str, float] | None, design: str
) -> tuple[NDArray[np.floating], str, tuple[str, ...]]:
    """Each subject's value that groups or a covariate act on: values, words, the conditions that went in."""
    if condition is not None and combine is not None:
        raise refusal(design, "condition or combine", "both", "leave one out")
    if combine is not None:
        weights = checked_weights(combine, f"{design}, combine")
        places = label_positions(weights, maps.conditions, f"{design}, combine", of="condition")
        words = weights_in_words(weights)
        return combined_values(maps.values, places, list(weights.values())), words, tuple(weights)
    if condition is None:
        if len(maps.conditions) > 1:
            raise refusal(
                design,
                f"one of the conditions {listed(maps.conditions)}",
                "none named",
                "give condition, or combine with a weight for each",
            )
        condition = maps.conditions[0]
    (place,) = label_positions([condition], maps.conditions, f"{design}, condition", of="condition")
    return np.ascontiguousarray(maps.values[:, place]), maps.conditions[place], (maps.conditions[place],)


def table_column(
    table: pd.DataFrame | None, column: str, where: str, names: Sequence[str], *, of: str, of_all: bool = True
) -> list[str]:
    """A column of labels, one a subject or trial; missing values are refused by name (or left empty)."""
    if table is None:
        raise refusal(where, "maps with a participants table", "none", "give participants to condition_maps")
    if column not in table.columns:
        raise refusal(
            where,
            f"a column among {listed(table.columns)}",
            f'"{column}"',
            f"{closest(str(column), [str(name) for name in table.columns])}use the name in the table",
        )
    values = table[column]
    missing = values.isna().to_numpy()
    texts = ["" if gone else label_text(value) for value, gone in zip(values, missing)]
    without = [name for name, text in zip(names, texts) if text.lower() in MISSING_TEXTS]
    if without and of_all:
        raise refusal(
            f'{where}, column "{column}"',
            f"a value for every {of}",
            f"none for {listed(without)}",
            "fill it in, or leave them out",
        )
    return texts


def numeric_column(
    table: pd.DataFrame | None, column: str, where: str, names: Sequence[str], *, of: str
) -> NDArray[np.float64]:
    """A column of finite numbers, one a subject or trial."""
    texts = table_column(table, column, where, names, of=of)
    assert table is not None
    numbers = pd.to_numeric(table[column], errors="coerce").to_numpy(dtype=np.float64)
    wrong = [f"{name}: {text}" for name, text, number in zip(names, texts, numbers) if not np.isfinite(number)]
    if wrong:
        raise refusal(
            f'{where}, column "{column}"',
            f"a finite number for every {of}",
            listed(wrong),
            "give numbers; a covariate of labels needs one column of 0 and 1 a label",
        )
    return numbers


def block_codes(texts: Sequence[str]) -> tuple[tuple[int, ...], tuple[str, ...]]:
    """Codes 0, 1, ... by sorted name, and the names."""
    names = sorted(set(texts))
    return tuple(names.index(text) for text in texts), tuple(names)


def check_model(
    predictor: NDArray[np.float64],
    covariates: NDArray[np.float64] | None,
    relabelling: Relabelling,
    where: str,
    name: str,
    *,
    of: str,
) -> None:
    """The predictor must vary apart from blocks and covariates, and leave residual degrees of freedom."""
    rows = len(predictor)
    codes = np.zeros(rows, int) if relabelling.blocks is None else np.asarray(relabelling.blocks)
    fixed = [codes[:, None] == np.arange(codes.max() + 1), np.zeros((rows, 0)) if covariates is None else covariates]
    known = np.concatenate([np.asarray(part, dtype=np.float64) for part in fixed], axis=1)
    # Units must not decide what is redundant.
    known = known / np.maximum(np.linalg.norm(known, axis=0), 1e-300)
    rank = int(np.linalg.matrix_rank(known))
    rest = predictor - known @ np.linalg.lstsq(known, predictor, rcond=None)[0]
    if float(np.linalg.norm(rest)) <= 1e-9 * max(float(np.linalg.norm(predictor)), 1e-300):
        raise refusal(
            f'{where}, column "{name}"',
            "values that vary apart from blocks and nuisance covariates",
            "values that these determine",
            "leave out the covariate that says the same",
        )
    if rows - rank - 1 < 1:
        raise refusal(
            where,
            f"more {of}s than the {rank + 1} parameters of the model",
            str(rows),
            f"leave out covariates or add {of}s",
        )
