"""Trials: outliers, baselines near zero, counts, and drifts over the session and between runs."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from tfstats.baseline_review.finite_means import finite_mean, finite_median
from tfstats.baseline_review.review_result import HEADLINE, MIND, NOTE, ReviewFinding
from tfstats.baseline_review.subject_scan import SubjectScan
from tfstats.normalization import Baseline, decibel_bias_of_mean

__all__ = ["count_findings", "drift_findings", "edge_findings", "outlier_findings", "robust_z"]

Floats = NDArray[np.float64]

OUTLYING = 5.0
NEAR_ZERO = 0.05
MOST_NAMED = 5
ALPHA = 0.05


def robust_z(values: Floats) -> Floats:
    """Distance from the median in units of 1.4826 times the median absolute deviation."""
    centre = finite_median(values)
    spread = 1.4826 * finite_median(np.abs(values - centre))
    return np.asarray((values - centre) / spread) if spread > 0 else np.zeros_like(values)


def outlier_findings(scans: Sequence[SubjectScan], baseline: Baseline) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Trials whose log power is far from the others of the subject; baselines that make single-trial ratios explode."""
    rows = []
    for scan in scans:
        z = robust_z(scan.trial_level)
        smallest = _smallest(scan.baseline_linear)
        for trial, label in enumerate(scan.labels):
            rows.append((scan.subject, trial, label, scan.trial_level[trial], z[trial], smallest[trial]))
    table = pd.DataFrame(
        rows, columns=["subject", "trial", "condition", "level_db", "robust_z", "smallest_baseline_share"]
    )
    outlying = table[table["robust_z"].abs() > OUTLYING]
    findings = [_outlier_finding(outlying, len(table))]
    if baseline.order == "trial_first" and baseline.unit != "none":
        tiny = table[table["smallest_baseline_share"] < NEAR_ZERO]
        if len(tiny):
            findings.append(
                ReviewFinding(
                    "single-trial baselines", HEADLINE if len(tiny) > 0.05 * len(table) else MIND,
                    f"{len(tiny)} of {len(table)} trials have a baseline below {100 * NEAR_ZERO:g} % of the subject's mean "
                    "at some channel and frequency, which makes their ratio explode.",
                    'Use order = "average_first", or decibels with the geometric mean.',
                )
            )  # fmt: skip
    return findings, table


def _smallest(relative: Floats) -> Floats:
    flat = relative.reshape(len(relative), -1)
    filled = np.where(np.isfinite(flat), flat, np.inf)
    smallest = filled.min(axis=1)
    return np.where(np.isfinite(smallest), smallest, np.nan)


def _outlier_finding(outlying: pd.DataFrame, total: int) -> ReviewFinding:
    if not len(outlying):
        words = f"No trial of {total} lies more than {OUTLYING:g} robust SD from its subject's median log power."
        return ReviewFinding("outlying trials", NOTE, words, "")
    worst = outlying.reindex(outlying["robust_z"].abs().sort_values(ascending=False).index).head(MOST_NAMED)
    named = "; ".join(
        f"subject {row.subject} trial {row.trial} ({row.condition}, z {row.robust_z:.1f})" for row in worst.itertuples()
    )
    by_condition = outlying["condition"].value_counts()
    shares = ", ".join(f"{name}: {count}" for name, count in by_condition.items())
    return ReviewFinding(
        "outlying trials", MIND,
        f"{len(outlying)} of {total} trials lie more than {OUTLYING:g} robust SD from their subject's median log power "
        f"({shares}). The farthest: {named}.",
        "Look at them; artefacts are removed by [input.keep], for all conditions by the same rule.",
    )  # fmt: skip


def count_findings(
    counts: pd.DataFrame, baseline: Baseline, observed: float | None, remedied: bool = False
) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Trial counts by condition and the decibel bias that they make under the null, beside the observed difference.

    `remedied`: the maps are made with a remedy, so that the bias is not theirs.
    """
    bias = counts.apply(lambda column: decibel_bias_of_mean(column.to_numpy()))
    table = counts.copy()
    for name in counts.columns:
        table[f"{name}, decibel bias"] = bias[name]
    ranges = "; ".join(f"{name} {counts[name].min()} to {counts[name].max()}" for name in counts.columns)
    applies = baseline.unit == "decibel" and baseline.order == "average_first" and not remedied
    if not applies or counts.shape[1] < 2:
        return [ReviewFinding("trial counts", NOTE, f"Trials a subject: {ranges}.", "")], table
    means = bias.mean()
    largest = float(means.max() - means.min())
    beside = "" if observed is None else f"; the median size of the observed differences is {observed:.2g} dB"
    serious = largest > 0.02 and (observed is None or largest > 0.1 * observed)
    return [
        ReviewFinding(
            "trial counts", MIND if serious else NOTE,
            f"Trials a subject: {ranges}. Without any effect the decibel of a mean over so many Gaussian trials would make "
            f"conditions differ by {largest:.2g} dB on average{beside}.",
            'Compare with trial_counts = "jackknife" or "equal" under [baseline].' if serious else "",
        )
    ], table  # fmt: skip


def drift_findings(scans: Sequence[SubjectScan], frequencies: Floats) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Trends within the window and over the session, between runs, and drift that differs between conditions."""
    findings = []
    trends = np.stack([scan.window_trend for scan in scans])
    session, mixing, rows = [], [], []
    for scan in scans:
        level = finite_mean(scan.baseline_level.reshape(len(scan.labels), -1), axis=1)
        order = np.linspace(-0.5, 0.5, len(level))
        good = np.isfinite(level)
        slope = float(np.polyfit(order[good], level[good], 1)[0]) if good.sum() > 2 else np.nan
        session.append(slope)
        place = {
            name: float(np.mean([o for o, label in zip(order, scan.labels) if label == name]))
            for name in scan.condition_levels
        }
        apart = max(place.values()) - min(place.values()) if len(place) > 1 else 0.0
        mixing.append(abs(slope * apart))
        rows.append(
            (
                scan.subject,
                float(finite_mean(scan.window_trend)),
                slope,
                apart,
                abs(slope * apart),
                _between_runs(scan, level),
            )
        )
    table = pd.DataFrame(
        rows,
        columns=[
            "subject",
            "window_trend_db_per_s",
            "session_drift_db",
            "order_apart",
            "drift_between_conditions_db",
            "between_runs_db",
        ],
    )
    findings.append(_window_trend_finding(trends, frequencies))
    findings.append(_session_finding(np.array(session), np.array(mixing)))
    runs = table["between_runs_db"].dropna()
    if len(runs):
        large = float(runs.median()) > 1.0
        findings.append(
            ReviewFinding(
                "between runs", MIND if large else NOTE,
                f"Baseline power differs between runs by {runs.median():.2g} dB (median over subjects of the SD of run means).",
                'Take each run by its own reference: within = "run" under [baseline].' if large else "",
            )
        )  # fmt: skip
    return findings, table


def _between_runs(scan: SubjectScan, level: Floats) -> float:
    if scan.runs is None or len(set(scan.runs)) < 2:
        return float("nan")
    runs = np.array(scan.runs)
    return float(np.std([float(finite_mean(level[runs == name])) for name in sorted(set(scan.runs))], ddof=1))


def _window_trend_finding(trends: Floats, frequencies: Floats) -> ReviewFinding:
    if len(trends) < 3:
        return ReviewFinding(
            "trend in the window",
            NOTE,
            f"Mean trend of power within the window: {float(finite_mean(trends)):.2g} dB/s.",
            "",
        )
    with np.errstate(divide="ignore", invalid="ignore"):
        p = stats.ttest_1samp(trends, 0.0, nan_policy="omit").pvalue
    p = np.asarray(np.ma.filled(np.ma.asarray(p), np.nan), dtype=float)
    adjusted = np.minimum(p * np.isfinite(p).sum(), 1.0)
    tilted = np.flatnonzero(adjusted <= ALPHA)
    mean = finite_mean(trends, axis=0)
    if not tilted.size:
        words = "Power has no reliable trend within the window at any frequency (Bonferroni)."
        return ReviewFinding("trend in the window", NOTE, words, "")
    worst = tilted[np.argmax(np.abs(mean[tilted]))]
    return ReviewFinding(
        "trend in the window", MIND,
        f"Power rises or falls within the window at {tilted.size} of {len(frequencies)} frequencies "
        f"(Bonferroni over frequencies); "
        f"most at {frequencies[worst]:.3g} Hz, {mean[worst]:.2g} dB/s.",
        "Anticipation or the previous trial may reach into it; a flat stretch makes a better baseline.",
    )  # fmt: skip


def _session_finding(session: Floats, mixing: Floats) -> ReviewFinding:
    typical, largest = finite_median(np.abs(session)), float(np.max(mixing[np.isfinite(mixing)], initial=0.0))
    serious = largest > 0.2
    return ReviewFinding(
        "drift over the session", MIND if serious else NOTE,
        f"Baseline power drifts by {typical:.2g} dB over the session (median size over subjects). "
        f"Conditions lie apart in trial order so "
        f"that this drift alone makes their baselines differ by up to {largest:.2g} dB in a subject.",
        "Conditions that come at different times of a session carry its drift; take it out by runs, or "
        "say so." if serious else "",
    )  # fmt: skip


def edge_findings(scans: Sequence[SubjectScan], frequencies: Floats) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Missing points by frequency, how much of the plane is left, and whether it is the same in all subjects."""
    shapes = {scan.missing.shape for scan in scans}
    if len(shapes) > 1:
        return [], pd.DataFrame()
    missing = np.stack([scan.missing for scan in scans])
    share = missing.mean(axis=(0, 1, 3))
    table = pd.DataFrame({"frequency": frequencies, "share_missing": share})
    left = 1.0 - float(missing.any(axis=0).mean())
    if not missing.any():
        return [ReviewFinding("edges", NOTE, "No point of the plane is missing in any subject.", "")], table
    differing = not np.all(missing == missing[:1])
    words = (
        f"{100 * left:.1f} % of the plane is there in all subjects; at {frequencies[0]:.3g} Hz "
        f"{100 * share[0]:.1f} % is missing."
    )
    if differing:
        return [
            ReviewFinding(
                "edges", MIND, words + " The missing points are not the same in all subjects.",
                "Points that one subject lacks are left out of every test; check that subject's cut or artefacts.",
            )
        ], table  # fmt: skip
    return [ReviewFinding("edges", NOTE, words, "")], table
