"""The methods paragraph of a result, built from what the maps, the contrast and the test record carry."""

from __future__ import annotations

import platform
from typing import TYPE_CHECKING

import numpy as np

from tfstats.contrasts.contrast import (
    CIRCULAR_SHIFT,
    ONE_SAMPLE_T,
    POOLED_T,
    REGRESSION_T,
    SHUFFLED_CONDITIONS,
    SIGN_FLIPS,
)
from tfstats.corrections import FalseDiscoveryRate, ThresholdFree
from tfstats.results.apa_numbers import count_text, level_text, number_text, p_text
from tfstats.results.cautions import typical_skewness, why_no_tail

if TYPE_CHECKING:
    from tfstats.results.contrast_result import ContrastResult

__all__ = ["methods_paragraph"]


def methods_paragraph(result: ContrastResult) -> str:
    """What was done, complete enough to do it again; what the data do not carry is said to be not recorded."""
    history = list(result.contrast.history)
    if len(history) <= 1:
        history.insert(0, "Time-frequency power and its baseline were as supplied by the user, not recorded.")
    sentences = [
        *history,
        _plane(result),
        _statistic(result),
        _relabellings(result),
        _correction(result),
        _channels(result),
        _versions(result),
    ]
    return " ".join(sentence for sentence in sentences if sentence)


def _plane(result: ContrastResult) -> str:
    contrast = result.contrast
    channels, frequencies, times = contrast.shape
    left_out = int(result.statistic.size - result.tested.sum())
    rest = f"; {left_out} points were left out because a value was missing or all values were alike" if left_out else ""
    return (
        f"The test covered {channels} channels, {frequencies} frequencies "
        f"({contrast.frequencies[0]:.4g} to {contrast.frequencies[-1]:.4g} Hz) and {times} times "
        f"({contrast.times[0]:.4g} to {contrast.times[-1]:.4g} s), {int(result.tested.sum())} points{rest}."
    )


def _statistic(result: ContrastResult) -> str:
    contrast = result.contrast
    units = len(contrast.unit_names)
    if contrast.is_f:
        first, second = (float(part) for part in result.df)  # type: ignore[union-attr]
        kind = "over conditions within subjects" if contrast.components is not None else "over groups"
        return f"At each point the statistic was F {kind} (df = {first:g}, {second:g})."
    if contrast.statistic == ONE_SAMPLE_T:
        return _one_sample(result, units)
    if contrast.statistic == POOLED_T:
        return f"At each point the statistic was a two-sample t with pooled variance (df = {units - 2})."
    if contrast.statistic == REGRESSION_T:
        what = (
            f"the slope on {contrast.predictor_name}" if contrast.predictor is not None else "the adjusted difference"
        )
        return f"At each point the statistic was the t of {what} (df = {result.df:g})."
    df = np.asarray(result.df)
    return (
        "At each point the statistic was Welch's t, turned into a normal score through its own degrees of freedom "
        f"(median df {np.nanmedian(df):.1f})."
    )


def _one_sample(result: ContrastResult, units: int) -> str:
    kind = result.contrast.unit_kind
    if result.record.robust == "trimmed":
        return f"At each point the statistic was Yuen's t of the 20 % trimmed mean over {units} {kind}s (Yuen 1974)."
    if result.record.robust == "rank":
        return f"At each point the statistic was the t of signed ranks over {units} {kind}s (Wilcoxon 1945)."
    df = np.asarray(result.df)
    many = f"df = {units - 1}" if df.ndim == 0 else f"df = {np.nanmin(df):g} to {np.nanmax(df):g} by point"
    return (
        f"At each point the statistic was a one-sample t over {units} {kind}s ({many}; "
        f"median skewness of the compared values over points {number_text(typical_skewness(result))})."
    )


def _relabellings(result: ContrastResult) -> str:
    record = result.record
    kinds = {
        SIGN_FLIPS: f"flipping the sign of each {result.contrast.unit_kind}'s value",
        CIRCULAR_SHIFT: "shifting the sequence of labels in a circle over trials",
        SHUFFLED_CONDITIONS: "shuffling the condition labels within each subject",
    }
    if result.contrast.components is not None and result.contrast.relabelling.kind == SIGN_FLIPS:
        kinds[SIGN_FLIPS] = "flipping the sign of each subject's vector of contrasts"
    how = kinds.get(result.contrast.relabelling.kind, f"shuffling the labels over {result.contrast.unit_kind}s")
    if result.contrast.relabelling.blocks is not None:
        how += f" within {len(result.contrast.relabelling.block_names)} blocks"
    if record.sequential:
        rest = f", which left {record.unresolved} on neither side" if record.unresolved else ""
        visited = (
            f"relabellings were drawn with replacement from {count_text(record.distinct)} distinct ones (seed {record.seed}) "
            f"until every comparison was on one side of {level_text(record.alpha)} with a resampling risk of .001 for all of "
            f"them together (Gandy 2009), at most {record.permutations}; {record.rows} were used, the observed one "
            f"included{rest}; intervals of p are confidence sequences (Robbins 1970)"
        )
    elif record.enumerated:
        visited = f"all {record.rows} distinct relabellings were visited" + (
            ", so that p-values are exact" if record.exact else ""
        )
    else:
        visited = (
            f"{record.rows} relabellings were used, the observed one included, drawn with replacement from "
            f"{count_text(record.distinct)} distinct ones (seed {record.seed})"
        )
    return (
        f"The null distribution came from {how}; {visited}. p is the share of relabellings at least as extreme as the "
        "observed one, itself included (Phipson & Smyth 2010)." + _tail(result)
    )


def _tail(result: ContrastResult) -> str:
    fit = result.record.tail_fit
    if not result.record.tail_asked or result.record.enumerated:
        return ""
    if fit is None or why_no_tail(result):
        return f" A generalised Pareto tail was asked for but not used ({why_no_tail(result)})."
    return (
        f" p-values up to .1 came from a generalised Pareto distribution fitted to the {fit.exceedances} largest of "
        f"{fit.rows - 1} draws (goodness of fit by Anderson-Darling, {p_text(fit.fit_p)}; Winkler et al. 2016)."
    )


def _correction(result: ContrastResult) -> str:
    record = result.record
    correction = record.correction
    both = "upper tail" if result.contrast.is_f else "two-sided"
    side = {"two-sided": both, "greater": "one-sided (greater)", "less": "one-sided (less)"}[record.alternative]
    if isinstance(correction, FalseDiscoveryRate):
        name = {
            "benjamini_hochberg": "the Benjamini-Hochberg procedure (Benjamini & Hochberg 1995)",
            "benjamini_yekutieli": "the Benjamini-Yekutieli procedure (Benjamini & Yekutieli 2001)",
        }[correction.method]
        return f"Point p-values ({correction.p_values}, {side}) were corrected by {name} at {level_text(record.alpha)}."
    if isinstance(correction, ThresholdFree):
        extent, height = correction.exponents(is_f=result.contrast.is_f)
        return (
            f"Each point was enhanced by the support around it (threshold-free enhancement, exact integral, E = {extent:g}, "
            f"H = {height:g}; Smith & Nichols 2009) and compared with the largest enhanced value of each relabelling "
            f"({side}, alpha = {level_text(record.alpha)})."
        )
    if not correction.clusterwise:
        return (
            f"Points were compared with the distribution of the largest statistic over the plane ({side}, "
            f"alpha = {level_text(record.alpha)}; Westfall & Young 1993)."
        )
    name = result.statistic_name.split(" ")[0]
    weighed = "the sum of |statistic| (cluster mass)" if correction.kind == "cluster_mass" else "the number of points"
    sign = "|" if record.alternative == "two-sided" and not result.contrast.is_f else ""
    shown = f"{sign}{name}{sign}" if record.alternative != "less" else f"-{name}"
    return (
        f"Points with {shown} > {_threshold(result)} (forming p = {level_text(correction.forming_p)}, "  # type: ignore[attr-defined]
        f"{side}) that touched along frequency or time{_same_sign(result)} formed clusters, weighed by {weighed} and "
        f"compared with the largest cluster of each relabelling (Maris & Oostenveld 2007; alpha = {level_text(record.alpha)})."
    )


def _threshold(result: ContrastResult) -> str:
    """The forming threshold; with gaps it goes by the number of subjects at the point."""
    assert result.record.threshold is not None
    with_all = f"{result.record.threshold:.4g}"
    there = result.subjects_at_point[result.tested]
    if result.record.fewest_subjects is None or int(there.min()) == len(result.contrast.unit_names):
        return with_all
    return f"{with_all} with all subjects, and the value of their number where some are missing"


def _same_sign(result: ContrastResult) -> str:
    return "" if result.contrast.is_f else " and had the same sign"


def _channels(result: ContrastResult) -> str:
    spreads = result.record.correction.clusterwise or isinstance(result.record.correction, ThresholdFree)
    if len(result.channels) == 1 or not spreads:
        return ""
    if result.record.joined_channels is None:
        return "Channels were not joined."
    return f"Channels were joined by {result.record.joined_channels} neighbouring pairs."


def _versions(result: ContrastResult) -> str:
    return (
        f"Intervals are 95 %, t-based and unadjusted. Computed with tfstats {result.record.version} "
        f"(Python {platform.python_version()}, numpy {np.__version__})."
    )
