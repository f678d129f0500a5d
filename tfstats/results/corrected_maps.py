"""From a null distribution and the observed map to p-values, clusters and a result."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    ONE_SAMPLE_T,
    POOLED_T,
    REGRESSION_T,
    TRIMMED_T,
    WELCH_SCORE,
    Contrast,
)
from tfstats.corrections import FalseDiscoveryRate
from tfstats.corrections.false_discovery import adjusted_p
from tfstats.corrections.p_values import monte_carlo_interval, p_of_null, tie_tolerance
from tfstats.corrections.stopping_rule import confidence_sequence
from tfstats.corrections.tail_approximation import approximated_p
from tfstats.findings.cluster_tables import cluster_table
from tfstats.findings.effect_sizes import Effect, effect_of
from tfstats.kernels.components import label_components, mark_beyond
from tfstats.kernels.enhancement import enhanced_map, enhancement_workspace
from tfstats.permutation.point_distributions import degrees_of_freedom
from tfstats.results.cautions import cautions_of
from tfstats.results.contrast_result import APPROXIMATED, ContrastResult, TestRecord, counted_point_p
from tfstats.results.planned_tests import TAILS, PlannedTest

__all__ = ["ObservedMap", "observed_map", "result_of"]

Floats = NDArray[np.float64]

STATISTIC_NAMES = {
    ONE_SAMPLE_T: "t",
    TRIMMED_T: "t (trimmed)",
    POOLED_T: "t (pooled)",
    REGRESSION_T: "t",
    WELCH_SCORE: "Welch score",
    ADJUSTED_WELCH_SCORE: "Welch score (adjusted)",
}


@dataclass(frozen=True)
class ObservedMap:
    """The observed statistic map and what of it is compared with the null."""

    statistic: Floats
    labels: NDArray[np.int32] | None
    """Clusters by falling mass; None for corrections of points."""
    masses: Floats
    compared: Floats
    """By cluster its mass or extent, otherwise by point (flat) its extremeness or enhanced value, NaN untested."""


def observed_map(plan: PlannedTest, record_kind: str, alternative: str) -> ObservedMap:
    """What the observed labelling contributes, before any relabelling is looked at."""
    statistic = plan.prepared.observed(plan.rows)
    tail = "greater" if plan.examined.is_f else alternative
    if record_kind in ("cluster_mass", "cluster_extent"):
        labels, masses = _observed_clusters(plan, statistic, tail)
        extents = np.bincount(labels.ravel(), minlength=masses.size + 1)[1:].astype(np.float64)
        return ObservedMap(statistic, labels, masses, extents if record_kind == "cluster_extent" else masses)
    if record_kind == "threshold_free":
        space = enhancement_workspace(statistic.shape)
        lifted = enhanced_map(statistic, TAILS.index(tail), *plan.exponents, plan.edges, space)
        return ObservedMap(statistic, None, np.empty(0), np.abs(lifted).ravel())
    extremeness = {"two-sided": np.abs(statistic), "greater": statistic, "less": -statistic}[tail]
    return ObservedMap(statistic, None, np.empty(0), extremeness.ravel())


def result_of(
    contrast: Contrast, plan: PlannedTest, observed: ObservedMap, record: TestRecord, null: Floats
) -> ContrastResult:
    """All maps, the clusters with their effects, and the cautions."""
    effect = effect_of(contrast, contrast.values.reshape(*contrast.values.shape[:-3], -1), intervals=False)
    statistic, tested = observed.statistic, plan.prepared.tested
    tolerance = tie_tolerance(contrast.values.dtype)
    kept: dict[str, object] = {}
    if isinstance(record.correction, FalseDiscoveryRate):
        kept["point_p_values"], p_values = _false_discovery_p(contrast, record)
    else:
        compared = np.nan_to_num(observed.compared, nan=0.0)
        p = counted = p_of_null(compared, null, tolerance)
        if record.tail_fit is not None:
            p = approximated_p(compared, counted, record.tail_fit, record.least_p)
        p_values = (
            np.concatenate([[1.0], p])[observed.labels] if observed.labels is not None else p.reshape(statistic.shape)
        )
    if observed.labels is not None:
        labels, masses = observed.labels, observed.masses
    else:
        # Untested points carry NaN; at least as small as alpha is what the mask means.
        significant = np.isfinite(statistic) & (p_values <= record.alpha)
        beyond = np.where(significant, np.sign(statistic), 0).astype(np.int8)
        labels, masses = _by_mass(statistic, beyond, plan.edges)
        p_of_points = p_values.ravel()
        smallest = [
            int(np.argmin(np.where(labels.ravel() == n, p_of_points, np.inf))) for n in range(1, masses.size + 1)
        ]
        p = p_of_points[smallest]
        counted = p if isinstance(record.correction, FalseDiscoveryRate) else counted[smallest]
    p_low, p_high = _intervals(counted, record)
    p_values = np.where(tested, p_values, np.nan)
    clusters = cluster_table(contrast, statistic, labels, masses, p, p_low, p_high)
    if record.tail_asked:
        clusters[APPROXIMATED] = p != counted
    finite = np.isfinite(contrast.values)
    everywhere = finite.all(axis=tuple(range(finite.ndim - 3)))
    result = ContrastResult(
        contrast=contrast,
        record=record,
        statistic=statistic,
        p_values=p_values,
        estimate=np.where(tested | everywhere, effect.estimate.reshape(contrast.shape), np.nan),
        effect_size=np.where(tested, effect.size.reshape(contrast.shape), np.nan),
        mask=np.isfinite(p_values) & (p_values <= record.alpha),
        null=null,
        clusters=clusters,
        cluster_labels=labels,
        statistic_name=_statistic_name(contrast, record.robust),
        df=_df(plan, effect, contrast),
        effect_name=effect.name,
        subjects_at_point=_units_at_point(contrast, finite),
        kept=kept,
    )
    return replace(result, cautions=cautions_of(result))


def _statistic_name(contrast: Contrast, robust: str | None) -> str:
    if contrast.is_f:
        return "F"
    return {"trimmed": "t (trimmed)", "rank": "t of signed ranks"}.get(
        robust or "", STATISTIC_NAMES[contrast.statistic]
    )


def _df(plan: PlannedTest, effect: Effect, contrast: Contrast) -> float | tuple[float, float] | Floats:
    """One number (F: two); by point for Welch scores and where the number of subjects differs."""
    tested = plan.prepared.tested
    if plan.examined.statistic in (WELCH_SCORE, ADJUSTED_WELCH_SCORE):
        return np.where(tested, effect.df.reshape(contrast.shape), np.nan)
    if not plan.prepared.points.complete:
        return np.where(tested, plan.prepared.points.units - 1.0, np.nan)
    return degrees_of_freedom(plan.examined)


def _units_at_point(contrast: Contrast, finite: NDArray[np.bool_]) -> NDArray[np.int64]:
    there = finite.all(axis=1) if contrast.components is not None else finite
    return np.asarray(there.sum(axis=0), dtype=np.int64)


def _observed_clusters(plan: PlannedTest, statistic: Floats, tail: str) -> tuple[NDArray[np.int32], Floats]:
    points = plan.prepared.points
    beyond = np.zeros(statistic.shape, dtype=np.int8)
    if np.ndim(plan.critical):
        critical = np.asarray(plan.critical)[points.units]
    else:
        critical = np.full(statistic.shape, float(plan.critical))
    critical[~points.tested] = np.inf
    mark_beyond(statistic, critical, TAILS.index(tail), beyond)
    return _by_mass(statistic, beyond, plan.edges)


def _by_mass(statistic: Floats, beyond: NDArray[np.int8], edges: NDArray[np.int64]) -> tuple[NDArray[np.int32], Floats]:
    """Connected components numbered from 1 by falling mass (equal masses keep the order of their first point)."""
    labels, number = label_components(statistic, beyond, edges)
    weight = np.where(labels > 0, np.abs(statistic), 0.0)
    masses = np.bincount(labels.ravel(), weights=weight.ravel(), minlength=number + 1)[1:]
    order = np.argsort(-masses, kind="stable")
    rank = np.zeros(number + 1, dtype=np.int32)
    rank[order + 1] = np.arange(1, number + 1, dtype=np.int32)
    return rank[labels], np.asarray(masses[order])


def _false_discovery_p(contrast: Contrast, record: TestRecord) -> tuple[Floats, Floats]:
    """Uncorrected and adjusted p of each point."""
    assert isinstance(record.correction, FalseDiscoveryRate)
    point_p = counted_point_p(contrast, record)
    corrected = np.full(point_p.shape, np.nan)
    tested = np.isfinite(point_p)
    corrected[tested] = adjusted_p(point_p[tested], record.correction.method)
    return point_p, corrected


def _intervals(p: Floats, record: TestRecord) -> tuple[Floats, Floats]:
    """Interval of each p: none when enumerated, a confidence sequence after optional stopping, else Clopper-Pearson.

    `p` is counted; an approximated p keeps the interval of its count, and an adjusted one from drawn relabellings has none.
    """
    if isinstance(record.correction, FalseDiscoveryRate):
        if record.enumerated or record.correction.p_values == "parametric":
            return p.copy(), p.copy()
        return np.full(p.shape, np.nan), np.full(p.shape, np.nan)
    if record.sequential:
        bounds = [confidence_sequence(max(round(one * record.rows) - 1, 0), record.rows - 1) for one in p]
        low, high = (np.array([pair[side] for pair in bounds], dtype=np.float64) for side in (0, 1))
        return low, high
    return monte_carlo_interval(p, record.rows, record.enumerated)
