"""What to mind about one result: sentences that stand beside it wherever it is shown."""

from __future__ import annotations

import warnings
from typing import TYPE_CHECKING

import numpy as np

from tfstats.contrasts.contrast import CIRCULAR_SHIFT, ONE_SAMPLE_T, SHUFFLED_CONDITIONS, SIGN_FLIPS
from tfstats.corrections import FalseDiscoveryRate
from tfstats.corrections.p_values import draws_to_settle
from tfstats.corrections.stopping_rule import confidence_sequence
from tfstats.corrections.tail_approximation import LARGEST_P
from tfstats.results.apa_numbers import level_text, p_interval_text, p_text

if TYPE_CHECKING:
    from tfstats.results.contrast_result import ContrastResult

__all__ = ["RESEARCH_ONLY", "cautions_of", "typical_skewness", "why_no_tail"]

RESEARCH_ONLY = (
    "This output serves research. Power changes are not a diagnosis; clinical decisions belong to licensed practice."
)

LARGE_SKEWNESS = 1.0
MOST_NAMED = 5  # unresolved clusters that are named


def cautions_of(result: ContrastResult) -> tuple[str, ...]:
    """All cautions of a result, the contrast's own first."""
    found = [*result.contrast.cautions]
    contrast, record = result.contrast, result.record
    left_out = int(result.statistic.size - result.tested.sum())
    if left_out:
        share = 100.0 * left_out / result.statistic.size
        found.append(
            f"{left_out} of {result.statistic.size} points ({share:.1f} %) were not tested, because a value was missing "
            "or all values were alike."
        )
    if record.joined_channels is None and len(contrast.channels) > 1 and record.correction.clusterwise:
        found.append("No adjacency was given: channels were not joined, so a cluster lies within one channel.")
    if record.correction.kind == "threshold_free" and result.mask.any():
        found.append(
            "Threshold-free enhancement lends each point the support around it; its p is no pointwise localisation."
        )
    if not isinstance(record.correction, FalseDiscoveryRate):
        found.extend(_close_to_alpha(result))
    found.extend(_tail_cautions(result))
    if record.correction.clusterwise and len(result.significant):
        found.append(
            "A cluster's p-value is about the cluster as a whole; it is no test of where the effect begins or ends "
            "(Sassenhagen & Draschkow 2019). Extents are those observed."
        )
    if len(result.significant):
        found.append(
            "Effects inside clusters that were found on the same data are inflated (Kriegeskorte et al. 2009); "
            "their intervals are t-based and unadjusted."
        )
    if isinstance(record.correction, FalseDiscoveryRate):
        found.extend(_false_discovery_cautions(result))
    if contrast.relabelling.kind == CIRCULAR_SHIFT:
        found.append("Circular shifts of the label sequence hold the error rate approximately, not exactly.")
    if contrast.relabelling.kind == SHUFFLED_CONDITIONS:
        found.append(
            "Shuffled labels test that the conditions have identical distributions, variances included, not only equal means."
        )
    if contrast.nuisance is not None:
        found.append("With nuisance covariates taken out, p-values hold approximately (Freedman & Lane 1983).")
    if record.fewest_subjects is not None and result.subjects_at_point[result.tested].min() < len(contrast.unit_names):
        counts = result.subjects_at_point[result.tested]
        found.append(f"Between {counts.min()} and {counts.max()} subjects are behind a point; n goes by point.")
    if contrast.relabelling.kind == SIGN_FLIPS and contrast.statistic == ONE_SAMPLE_T and record.robust is None:
        skewness = typical_skewness(result)
        if np.isfinite(skewness) and abs(skewness) > LARGE_SKEWNESS:
            found.append(
                f"The compared values are skewed (median skewness over points {skewness:.2f}); sign flips assume "
                "symmetry, and one tail can then reject too often."
            )
    return tuple(dict.fromkeys(found))


def _close_to_alpha(result: ContrastResult) -> list[str]:
    record = result.record
    if record.enumerated:
        return []
    if record.sequential:
        return _unresolved(result)
    undecided = result.clusters[
        (result.clusters["p_low"] <= record.alpha) & (result.clusters["p_high"] >= record.alpha)
    ]
    said = []
    for row in undecided.itertuples():
        needed = draws_to_settle(float(row.p), record.alpha)
        more = f"about {needed} relabellings would settle it" if needed else "more relabellings are needed to settle it"
        said.append(
            f"Cluster {row.cluster}: the Monte Carlo interval of its p ({p_text(row.p_low)} to {p_text(row.p_high)}) "
            f"holds {level_text(record.alpha)}; {more}."
        )
    return said


def _unresolved(result: ContrastResult) -> list[str]:
    record = result.record
    if not record.unresolved or record.unresolved_p is None:
        return []
    low, high = record.unresolved_p
    if record.correction.clusterwise:
        open_rows = result.clusters[result.clusters["p"].between(low, high)]
        known = "; ".join(
            f"cluster {row.cluster}: {p_text(row.p)}, {p_interval_text(row.p_low, row.p_high)}"
            for row in open_rows.head(MOST_NAMED).itertuples()
        )
        more = f"; and {len(open_rows) - MOST_NAMED} more" if len(open_rows) > MOST_NAMED else ""
        what = "cluster is" if record.unresolved == 1 else "clusters are"
    else:
        bounds = [confidence_sequence(round(p * record.rows) - 1, record.rows - 1) for p in (low, high)]
        between = p_text(low) if low == high else f"{p_text(low)} to {p_text(high).removeprefix('p = ')}"
        known, more = f"{between}, {p_interval_text(bounds[0][0], bounds[1][1])}", ""
        what = "point is" if record.unresolved == 1 else "points are"
    return [
        f"After {record.rows} relabellings {record.unresolved} {what} on neither side of {level_text(record.alpha)} yet "
        f"({known}{more}); the mask goes by the counted p. Allow more by most_permutations."
    ]


def _tail_cautions(result: ContrastResult) -> list[str]:
    if not result.record.tail_asked:
        return []
    why = why_no_tail(result)
    if why:
        return [f"No p-value was approximated: {why}; p-values are counts."]
    return [
        "p-values up to .1 are approximations from a fitted tail, not counts (column p_approximated); their intervals are "
        "those of the counts."
    ]


def why_no_tail(result: ContrastResult) -> str:
    """Why no p-value comes from a fitted tail although one was asked for; empty where some do."""
    record = result.record
    if record.enumerated:
        return "all relabellings were visited"
    if record.tail_fit is None:
        return "no generalised Pareto fit to the tail was good enough"
    if not (result.p_values[result.tested] <= LARGEST_P).any():
        return f"none was {level_text(LARGEST_P)} or less"
    return ""


def _false_discovery_cautions(result: ContrastResult) -> list[str]:
    record = result.record
    correction = record.correction
    assert isinstance(correction, FalseDiscoveryRate)
    said = [
        "The false discovery rate is the expected share of false points among those marked, not a family-wise error rate."
    ]
    if correction.method == "benjamini_hochberg" and record.alternative == "two-sided":
        said.append(
            "The Benjamini-Hochberg procedure assumes positive dependence, which has not been shown for two-sided t; "
            "benjamini_yekutieli holds under any dependence."
        )
    points = int(result.tested.sum())
    needed = int(np.ceil(record.smallest_p * points / record.alpha))
    if correction.p_values == "permutation" and needed > 1 and not result.mask.any():
        said.append(
            f"With {record.rows} relabellings no point's p lies below {record.smallest_p:.2g}: fewer than {needed} of "
            f"{points} points at that floor cannot be discovered, whatever their effect."
        )
    return said


def typical_skewness(result: ContrastResult) -> float:
    """Median over tested points of the skewness of the compared values over units."""
    values = result.contrast.values[:, result.tested].astype(np.float64)
    with np.errstate(divide="ignore", invalid="ignore"), warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        centred = values - np.nanmean(values, axis=0)
        skewness = np.nanmean(centred**3, axis=0) / np.nanmean(centred**2, axis=0) ** 1.5
    return float(np.nanmedian(skewness)) if skewness.size else float("nan")
