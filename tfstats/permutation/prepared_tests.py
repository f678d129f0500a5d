"""From a contrast to the three things an engine can say about it: its null, its counts by point, its observed map.

Each statistic has one small class here; the engines below know arrays and codes only.  A new statistic is added by one more
entry in `_MAKERS`.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    F_OF_FLIPS,
    F_OF_GROUPS,
    F_OF_REGRESSION,
    F_OF_SHUFFLED_CONDITIONS,
    ONE_SAMPLE_T,
    POOLED_T,
    REGRESSION_T,
    TRIMMED_T,
    WELCH_SCORE,
    Contrast,
)
from tfstats.permutation import group_engine
from tfstats.permutation.point_distributions import TRIMMED_SHARE, degrees_of_freedom, fixed_columns
from tfstats.permutation.regression_engine import (
    MapMaker,
    condition_label_maps,
    counts_of_maps,
    null_of_maps,
    orthonormal_columns,
    regression_maps,
    trimmed_maps,
    unequal_variance_maps,
)
from tfstats.permutation.schemes import Rows
from tfstats.permutation.sign_flip_engine import (
    Summary,
    Tail,
    counts_at_least,
    null_of_sign_flips,
    statistic_of_flips,
)
from tfstats.permutation.tested_points import TestedPoints, tested_points

__all__ = ["NO_EDGES", "PreparedTest", "prepared_test"]

Floats = NDArray[np.float64]
Progress = Callable[[int], None]
Values = NDArray[np.float32] | NDArray[np.float64]
Exponents = tuple[float, float]

NO_EDGES = np.zeros((0, 2), dtype=np.int64)


class _Engine(Protocol):
    """What every statistic can do with rows of relabellings."""

    def null(
        self,
        rows: Rows,
        *,
        summary: Summary,
        tail: Tail,
        critical: Floats | float,
        edges: NDArray[np.int64],
        threads: int,
        exponents: Exponents,
        progress: Progress | None,
    ) -> Floats: ...

    def counts(self, rows: Rows, *, tail: Tail, tolerance: float, threads: int) -> NDArray[np.int64]: ...

    def statistic(self, codes: NDArray[np.integer]) -> Floats: ...


class PreparedTest:
    """A contrast's tested points with the engine of its statistic."""

    def __init__(self, contrast: Contrast, fewest_units: int | None = None) -> None:
        self.points: TestedPoints = tested_points(contrast, fewest_units)
        self.engine: _Engine = _MAKERS[contrast.statistic](contrast, self.points)

    @property
    def tested(self) -> NDArray[np.bool_]:
        """Bool map of the points that are tested."""
        return self.points.tested

    def null(
        self,
        rows: Rows,
        *,
        summary: Summary,
        tail: Tail,
        critical: Floats | float,
        edges: NDArray[np.int64],
        threads: int,
        exponents: Exponents = (0.5, 2.0),
        progress: Progress | None = None,
    ) -> Floats:
        """One extremeness a relabelling.

        `critical` is one number, or an array by number of units where they differ; `exponents` (E, H) of the enhancement.
        """
        null = self.engine.null(
            rows,
            summary=summary,
            tail=tail,
            critical=critical,
            edges=edges,
            threads=threads,
            exponents=exponents,
            progress=progress,
        )
        if summary == "maximum" and tail != "two-sided":
            self._mend_maxima_below_zero(null, rows, tail)
        return null

    def _mend_maxima_below_zero(self, null: Floats, rows: Rows, tail: Tail) -> None:
        """The engines' maxima start at 0, where untested points lie too; a small map can have all its points below."""
        for row in np.flatnonzero(null <= 0.0):
            statistic = self.engine.statistic(rows(int(row), int(row) + 1)[0])[self.tested]
            null[row] = float(np.max(statistic if tail == "greater" else -statistic))

    def counts(self, rows: Rows, *, tail: Tail, tolerance: float, threads: int) -> NDArray[np.int64]:
        """By point, the number of relabellings (row 0 included) at least as extreme as the observed value."""
        return self.engine.counts(rows, tail=tail, tolerance=tolerance, threads=threads)

    def observed(self, rows: Rows) -> Floats:
        """Statistic map of the observed labelling, by the engine's own arithmetic; NaN where untested."""
        return np.where(self.tested, np.asarray(self.engine.statistic(rows(0, 1)[0]), dtype=np.float64), np.nan)

    def statistic_rows(self, rows: Rows) -> Floats:
        """(relabellings, points) statistic of every relabelling: for tables of few points only."""
        return np.stack([np.ravel(self.engine.statistic(row)) for row in _each(rows)])


def _each(rows: Rows, panel: int = 256):  # type: ignore[no-untyped-def]
    for first in range(0, rows.count, panel):
        yield from rows(first, min(rows.count, first + panel))


def prepared_test(contrast: Contrast, fewest_units: int | None = None) -> PreparedTest:
    """Check which points can be tested and choose the engine."""
    return PreparedTest(contrast, fewest_units)


class _SignFlips:
    """One-sample t; gaps are zeros with the number of units by point."""

    def __init__(self, contrast: Contrast, points: TestedPoints) -> None:
        self.values: Values = points.values
        self.unit_counts = None if points.complete else points.units

    def null(self, rows, *, summary, tail, critical, edges, threads, exponents, progress):  # type: ignore[no-untyped-def]
        return null_of_sign_flips(
            self.values, rows, number_of_rows=rows.count, summary=summary, tail=tail, critical=critical, edges=edges,
            threads=threads, unit_counts=self.unit_counts, E=exponents[0], H=exponents[1], progress=progress,
        )  # fmt: skip

    def counts(self, rows, *, tail, tolerance, threads):  # type: ignore[no-untyped-def]
        return counts_at_least(
            self.values, rows, number_of_rows=rows.count, tail=tail, tolerance=tolerance, threads=threads,
            unit_counts=self.unit_counts,
        )  # fmt: skip

    def statistic(self, codes):  # type: ignore[no-untyped-def]
        return statistic_of_flips(self.values, codes, unit_counts=self.unit_counts)


class _TwoGroups:
    """Pooled t or Welch score."""

    def __init__(self, contrast: Contrast, points: TestedPoints) -> None:
        self.values: Values = points.values
        self.kind: Literal["pooled_t", "welch_score"] = POOLED_T if contrast.statistic == POOLED_T else WELCH_SCORE

    def null(self, rows, *, summary, tail, critical, edges, threads, exponents, progress):  # type: ignore[no-untyped-def]
        return group_engine.null_of_groups(
            self.values, rows, number_of_rows=rows.count, statistic=self.kind, summary=summary, tail=tail,
            critical=critical, edges=edges, threads=threads, E=exponents[0], H=exponents[1], progress=progress,
        )  # fmt: skip

    def counts(self, rows, *, tail, tolerance, threads):  # type: ignore[no-untyped-def]
        return group_engine.counts_at_least_of_groups(
            self.values, rows, number_of_rows=rows.count, statistic=self.kind, tail=tail, tolerance=tolerance,
            threads=threads,
        )  # fmt: skip

    def statistic(self, codes):  # type: ignore[no-untyped-def]
        return group_engine.statistic_of_groups(self.values, codes, statistic=self.kind)


class _ContrastFlips:
    """F over conditions by flips of the subjects' contrast vectors."""

    def __init__(self, contrast: Contrast, points: TestedPoints) -> None:
        assert contrast.components is not None
        moved = np.tensordot(contrast.components, points.values, axes=(1, 1))
        ready: Any = np.ascontiguousarray(np.moveaxis(moved, 1, 0), dtype=points.values.dtype)
        self.values: Values = ready

    def null(self, rows, *, summary, tail, critical, edges, threads, exponents, progress):  # type: ignore[no-untyped-def]
        return group_engine.null_of_contrast_flips(
            self.values, rows, number_of_rows=rows.count, summary=summary, critical=critical, edges=edges,
            threads=threads, E=exponents[0], H=exponents[1], progress=progress,
        )  # fmt: skip

    def counts(self, rows, *, tail, tolerance, threads):  # type: ignore[no-untyped-def]
        return group_engine.counts_at_least_of_contrast_flips(
            self.values, rows, number_of_rows=rows.count, tolerance=tolerance, threads=threads
        )

    def statistic(self, codes):  # type: ignore[no-untyped-def]
        return group_engine.statistic_of_contrast_flips(self.values, codes)


class _GroupLabels:
    """One-way F over groups."""

    def __init__(self, contrast: Contrast, points: TestedPoints) -> None:
        self.values: Values = points.values

    def null(self, rows, *, summary, tail, critical, edges, threads, exponents, progress):  # type: ignore[no-untyped-def]
        return group_engine.null_of_labels(
            self.values, rows, number_of_rows=rows.count, summary=summary, critical=critical, edges=edges,
            threads=threads, E=exponents[0], H=exponents[1], progress=progress,
        )  # fmt: skip

    def counts(self, rows, *, tail, tolerance, threads):  # type: ignore[no-untyped-def]
        return group_engine.counts_at_least_of_labels(
            self.values, rows, number_of_rows=rows.count, tolerance=tolerance, threads=threads
        )

    def statistic(self, codes):  # type: ignore[no-untyped-def]
        return group_engine.statistic_of_labels(self.values, codes)


class _Maps:
    """Any statistic whose maps are made a panel at a time."""

    def __init__(self, make: MapMaker, shape: tuple[int, int, int], columns: int, is_f: bool) -> None:
        self.make, self.shape, self.columns, self.is_f = make, shape, columns, is_f

    def null(self, rows, *, summary, tail, critical, edges, threads, exponents, progress):  # type: ignore[no-untyped-def]
        return null_of_maps(
            self.make, rows, rows.count, shape=self.shape, critical=np.full(self.shape, float(critical)),
            summary=summary, tail="greater" if self.is_f else tail, edges=edges, threads=threads, columns=self.columns,
            exponents=exponents, progress=progress,
        )  # fmt: skip

    def counts(self, rows, *, tail, tolerance, threads):  # type: ignore[no-untyped-def]
        return counts_of_maps(
            self.make, rows, rows.count, points=int(np.prod(self.shape)), tail="greater" if self.is_f else tail,
            tolerance=tolerance, threads=threads, columns=self.columns,
        ).reshape(self.shape)  # fmt: skip

    def statistic(self, codes):  # type: ignore[no-untyped-def]
        return self.make(codes[None])[0].reshape(self.shape)


def _trimmed(contrast: Contrast, points: TestedPoints) -> _Engine:
    flat = points.values.reshape(len(points.values), -1)
    return _Maps(trimmed_maps(flat, TRIMMED_SHARE), contrast.shape, 1, False)


def _shuffled_conditions(contrast: Contrast, points: TestedPoints) -> _Engine:
    assert contrast.components is not None
    flat = points.values.reshape(*points.values.shape[:2], -1)
    return _Maps(condition_label_maps(flat, contrast.components), contrast.shape, flat.shape[0], True)


def _regression(contrast: Contrast, points: TestedPoints) -> _Engine:
    """Residuals after blocks and nuisance, and the orthonormal columns that move against them."""
    fixed = fixed_columns(contrast)
    covariates = np.zeros((len(fixed), 0)) if contrast.nuisance is None else contrast.nuisance
    nuisance = orthonormal_columns(covariates, fixed)
    known = np.concatenate([fixed, nuisance], axis=1)
    effect = orthonormal_columns(_effect_columns(contrast), known)
    flat = np.asarray(points.values.reshape(len(points.values), -1), dtype=np.float64)
    residuals = flat - known @ (known.T @ flat)
    if contrast.statistic == ADJUSTED_WELCH_SCORE:
        assert contrast.labels is not None
        signed = effect * np.sign(effect[:, 0] @ contrast.labels)
        make = unequal_variance_maps(residuals, signed, nuisance, fixed, contrast.labels)
    elif contrast.statistic == REGRESSION_T:
        signed = effect * np.sign(effect[:, 0] @ _effect_columns(contrast)[:, 0])
        make = regression_maps(residuals, signed, nuisance, float(degrees_of_freedom(contrast)), as_f=False)  # type: ignore[arg-type]
    else:
        df = degrees_of_freedom(contrast)
        make = regression_maps(residuals, effect, nuisance, float(df[1]), as_f=True)  # type: ignore[index]
    return _Maps(make, contrast.shape, effect.shape[1] + nuisance.shape[1], contrast.is_f)


def _effect_columns(contrast: Contrast) -> Floats:
    if contrast.statistic == F_OF_REGRESSION:
        assert contrast.labels is not None
        return (contrast.labels[:, None] == np.arange(1, len(contrast.label_names))).astype(np.float64)
    if contrast.predictor is None:
        assert contrast.labels is not None
        return contrast.labels[:, None].astype(np.float64)
    predictor = contrast.predictor
    if contrast.rank:
        from scipy import stats

        predictor = stats.rankdata(predictor)
    return np.asarray(predictor, dtype=np.float64)[:, None]


_MAKERS: dict[str, Callable[[Contrast, TestedPoints], _Engine]] = {
    ONE_SAMPLE_T: _SignFlips,
    TRIMMED_T: _trimmed,
    POOLED_T: _TwoGroups,
    WELCH_SCORE: _TwoGroups,
    F_OF_FLIPS: _ContrastFlips,
    F_OF_GROUPS: _GroupLabels,
    F_OF_SHUFFLED_CONDITIONS: _shuffled_conditions,
    REGRESSION_T: _regression,
    ADJUSTED_WELCH_SCORE: _regression,
    F_OF_REGRESSION: _regression,
}
