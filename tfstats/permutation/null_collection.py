"""From a contrast and its relabellings to a null distribution, counts by point, and the observed map.

The engines know arrays and integer codes; this module hands them a contrast's tested points.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from tfstats.contrasts.contrast import ONE_SAMPLE_T, POOLED_T, Contrast
from tfstats.foundations.errors import refusal
from tfstats.permutation.group_engine import counts_at_least_of_groups, null_of_groups, statistic_of_groups
from tfstats.permutation.schemes import Rows
from tfstats.permutation.sign_flip_engine import (
    LARGEST_T,
    Summary,
    Tail,
    counts_at_least,
    null_of_sign_flips,
    statistic_of_flips,
)

__all__ = [
    "NO_EDGES",
    "SUMMARIES",
    "TAILS",
    "TestedValues",
    "collected_counts",
    "collected_null",
    "forming_threshold",
    "observed_map",
    "parametric_p",
    "statistic_rows",
    "tested_values",
]

Progress = Callable[[int], None]
Values = NDArray[np.float32] | NDArray[np.float64]

TAILS: tuple[Tail, ...] = ("two-sided", "greater", "less")
SUMMARIES: dict[str, Summary] = {
    "maximum": "maximum",
    "false_discovery": "maximum",
    "cluster_mass": "mass",
    "cluster_extent": "extent",
}
"""What one relabelling contributes to the null, by the correction's kind: largest |statistic|, mass or extent."""

NO_EDGES = np.zeros((0, 2), dtype=np.int64)


@dataclass(frozen=True)
class TestedValues:
    """Compared values with every untested point set to zero, and which points are tested."""

    __test__ = False  # not a test class, whatever pytest makes of the name

    values: Values
    tested: NDArray[np.bool_]


def tested_values(contrast: Contrast) -> TestedValues:
    """Points where all units are finite and not all alike, which no relabelling can change.

    One-sample: the sum of squares of the compared values is above 0.  Two groups: the values vary about their mean.
    A study is refused only when no point is left.
    """
    values = contrast.values
    finite = np.isfinite(values).all(axis=0)
    if contrast.statistic == ONE_SAMPLE_T:
        varies = np.any(values != 0, axis=0)
    else:
        # Means of equal numbers differ from them by rounding only: compare with the first unit instead.
        varies = np.any(values != values[0], axis=0)
    tested = finite & varies
    where = f"{contrast.design}, {contrast.difference}"
    if not finite.any():
        raise refusal(
            where,
            f"at least one point that is finite in all {contrast.unit_kind}s",
            "none",
            "choose frequencies and times that all of them have, or leave out those without data",
        )
    if not tested.any():
        raise refusal(
            where,
            "compared values that vary",
            f"the same value in every {contrast.unit_kind} at every point",
            "check that the conditions are not the same data",
        )
    ready: Values = (
        np.ascontiguousarray(values, np.float32)
        if values.dtype == np.float32
        else np.ascontiguousarray(values, np.float64)
    )
    if not tested.all():
        ready = ready.copy() if ready is values else ready
        ready[:, ~tested] = 0.0
    return TestedValues(ready, tested)


def degrees_of_freedom(contrast: Contrast) -> int:
    """n - 1 for one sample, n1 + n2 - 2 for two groups."""
    units = len(contrast.unit_names)
    return units - 1 if contrast.statistic == ONE_SAMPLE_T else units - 2


def forming_threshold(contrast: Contrast, forming_p: float, alternative: str) -> float:
    """The critical value that a point must exceed: t quantile, or normal quantile for Welch scores."""
    tail = forming_p / 2.0 if alternative == "two-sided" else forming_p
    if contrast.statistic in (ONE_SAMPLE_T, POOLED_T):
        return float(-special.stdtrit(degrees_of_freedom(contrast), tail))
    return float(-special.ndtri(tail))


def parametric_p(contrast: Contrast, statistic: NDArray[np.float64], alternative: str) -> NDArray[np.float64]:
    """Uncorrected p of each point from the t (or, for Welch scores, the normal) distribution."""
    signed = {"two-sided": -np.abs(statistic), "greater": -statistic, "less": statistic}[alternative]
    if contrast.statistic in (ONE_SAMPLE_T, POOLED_T):
        tail = special.stdtr(degrees_of_freedom(contrast), signed)
    else:
        tail = special.ndtr(signed)
    return np.asarray(2.0 * tail if alternative == "two-sided" else tail)


def collected_null(
    contrast: Contrast,
    data: TestedValues,
    rows: Rows,
    *,
    summary: Summary,
    alternative: Tail,
    critical: float,
    edges: NDArray[np.int64],
    threads: int,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """One extremeness a relabelling, row 0 the observed labelling."""
    if contrast.statistic == ONE_SAMPLE_T:
        return null_of_sign_flips(
            data.values, rows, number_of_rows=rows.count, summary=summary, tail=alternative, critical=critical, edges=edges,
            threads=threads, progress=progress,
        )  # fmt: skip
    return null_of_groups(
        data.values, rows, number_of_rows=rows.count, statistic=contrast.statistic, summary=summary, tail=alternative,
        critical=critical, edges=edges, threads=threads, progress=progress,
    )  # fmt: skip


def collected_counts(
    contrast: Contrast, data: TestedValues, rows: Rows, *, alternative: Tail, tolerance: float, threads: int
) -> NDArray[np.int64]:
    """By point, the number of relabellings (row 0 included) at least as extreme as the observed value."""
    if contrast.statistic == ONE_SAMPLE_T:
        return counts_at_least(
            data.values, rows, number_of_rows=rows.count, tail=alternative, tolerance=tolerance, threads=threads
        )
    return counts_at_least_of_groups(
        data.values, rows, number_of_rows=rows.count, statistic=contrast.statistic, tail=alternative, tolerance=tolerance,
        threads=threads,
    )  # fmt: skip


def observed_map(contrast: Contrast, data: TestedValues, rows: Rows) -> NDArray[np.float64]:
    """Statistic map of the observed labelling, by the engine's own arithmetic; NaN where untested."""
    observed = rows(0, 1)[0]
    if contrast.statistic == ONE_SAMPLE_T:
        statistic = statistic_of_flips(data.values, observed)
    else:
        statistic = statistic_of_groups(data.values, observed, statistic=contrast.statistic)
    return np.where(data.tested, np.asarray(statistic, dtype=np.float64), np.nan)


def statistic_rows(contrast: Contrast, values: NDArray[np.floating], rows: Rows) -> NDArray[np.float64]:
    """(relabellings, cells) statistic of every relabelling, for a table of few cells: values (units, cells)."""
    if contrast.statistic == ONE_SAMPLE_T:
        return _t_rows(np.asarray(values, dtype=np.float64), rows)
    plane = np.ascontiguousarray(values, dtype=np.float64).reshape(len(values), 1, 1, -1)
    return np.stack(
        [
            statistic_of_groups(plane, rows(row, row + 1)[0], statistic=contrast.statistic).ravel()
            for row in range(rows.count)
        ]
    )


def _t_rows(values: NDArray[np.float64], rows: Rows, panel: int = 4096) -> NDArray[np.float64]:
    """t of flipped values: the sum of squares cannot change, so only the signed sums are computed."""
    units = len(values)
    squares = (values**2).sum(axis=0)
    out = np.empty((rows.count, values.shape[1]))
    for first in range(0, rows.count, panel):
        last = min(rows.count, first + panel)
        means = (1.0 - 2.0 * rows(first, last)) @ values / units
        # Rounding can leave a tiny negative variance where all values have one size.
        variance = np.maximum(squares / units - means**2, 0.0) * units / (units - 1)
        with np.errstate(divide="ignore", invalid="ignore"):
            out[first:last] = np.clip(means / np.sqrt(variance / units), -LARGEST_T, LARGEST_T)
    return np.nan_to_num(out, nan=0.0)
