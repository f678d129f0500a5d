"""`review_baseline`: what the window, unit, reference and order do to these data."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence, Sized
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from tfstats.averaged_maps import ConditionMaps, condition_maps
from tfstats.baseline_review.condition_findings import (
    absolute_findings,
    baseline_difference_findings,
    baseline_level_maps,
    group_findings,
)
from tfstats.baseline_review.finite_means import finite_mean, finite_median
from tfstats.baseline_review.invariance import window_dependence
from tfstats.baseline_review.review_result import HEADLINE, MIND, NOTE, BaselineReview, ReviewFinding, by_severity
from tfstats.baseline_review.subject_scan import SubjectScan, scanned_subject
from tfstats.baseline_review.trial_findings import count_findings, drift_findings, edge_findings, outlier_findings
from tfstats.baseline_review.window_and_event import window_findings
from tfstats.contrasts import DESIGNS
from tfstats.foundations.errors import InputError, refusal
from tfstats.normalization import Baseline
from tfstats.normalization.trial_labels import checked_columns
from tfstats.power_files import TrialPower

__all__ = ["PlannedContrast", "review_baseline"]

BETWEEN_PEOPLE = ("between_groups", "several_groups", "slope")


@dataclass(frozen=True)
class PlannedContrast:
    """A contrast of the study by its design and arguments, for the review."""

    design: str
    arguments: Mapping[str, Any]

    def __call__(self, maps: ConditionMaps) -> Any:
        return DESIGNS[self.design].function(maps, **self.arguments)


def review_baseline(
    powers: Iterable[TrialPower],
    by: str | Sequence[str],
    baseline: Baseline,
    *,
    contrasts: Mapping[str, PlannedContrast] | None = None,
    conditions: Iterable[object] | None = None,
    participants: pd.DataFrame | None = None,
    missing_channels: str = "keep_common",
    regions: pd.DataFrame | None = None,
    event: float = 0.0,
    trial_counts: str = "as_recorded",
    permutations: int = 2000,
    alpha: float = 0.05,
    seed: int = 0,
    progress: Callable[[str, int, int | None], object] | None = None,
) -> BaselineReview:
    """What do the baseline window, unit, reference and order do to these data?

    Parameters
    ----------
    powers : PowerFiles or list of TrialPower
        Read two or three times, one subject at a time.
    by : str or sequence of str
        Trial column or columns of the conditions.
    baseline : Baseline
    contrasts : mapping of name to PlannedContrast, optional
        What the study will compare: which of them hang on the window, and whether unit and baseline change them.
    conditions, participants, missing_channels, regions
        As in `condition_maps`; where subjects differ in channels, the review looks at those that all have.
    event : float
        Time of the event in s.
    trial_counts : str
        As the study's `condition_maps` takes it: with a remedy the bias by trial counts is not a finding.
    permutations, alpha, seed
        Of the review's own tests of baseline power.

    Returns
    -------
    BaselineReview
        Findings with severity, numbers and remedy, the worst first; tables behind them.

    Raises
    ------
    InputError
        What `condition_maps` refuses.

    Notes
    -----
    Wavelet energy follows the squared envelope; decibel bias by trial count: 10/ln 10 (digamma(n) - ln n).  Outliers by
    median and MAD.  Tests of baseline power: sign flips or shuffles, corrected by the maximum statistic.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_study
    >>> review = tfs.review_baseline(simulate_study(lamp_sequences(subjects=3)), "memory", tfs.Baseline((-0.5, -0.2)))
    >>> sorted({finding.severity for finding in review.findings} - {"headline"})
    ['mind', 'note']
    """
    if not isinstance(baseline, Baseline) or baseline.unit == "none":
        raise refusal(
            "review_baseline, baseline", "a Baseline with a relative unit", repr(baseline), "give the one of the study"
        )
    tell = progress or (lambda stage, done, total: None)
    columns = checked_columns(by)
    total = len(powers) if isinstance(powers, Sized) else None
    scans: list[SubjectScan] = []
    first: TrialPower | None = None
    for power in powers:
        first = first or power
        scans.append(scanned_subject(power, columns, baseline))
        tell("looking at baselines", len(scans), total)
    if first is None:
        raise refusal("review_baseline, powers", "at least one subject", "none", "check the pattern of the files")
    relative = condition_maps(
        powers, by, baseline, conditions=conditions, participants=participants, missing_channels=missing_channels,
        regions=regions,
    )  # fmt: skip
    given = {} if contrasts is None else dict(contrasts)
    findings: list[ReviewFinding] = []
    tables: dict[str, pd.DataFrame] = {}

    found, tables["window"] = window_findings(
        first.frequencies, first.times, baseline.window, first.wavelet_cycles, event
    )
    findings += found
    hanging, tables["contrasts"] = _invariance_findings(baseline, given)
    findings += hanging
    levels = baseline_level_maps(scans, first.channels, first.frequencies, baseline.window, relative.participants)
    direct = baseline.reference == "own" or any(one.design == "against_zero" for one in given.values())
    found, tables["conditions"] = baseline_difference_findings(levels, direct, permutations, alpha, seed)
    findings += found
    people = {name: one for name, one in given.items() if one.design in BETWEEN_PEOPLE}
    findings += group_findings(levels, people, permutations, alpha, seed)
    assert relative.trial_counts is not None
    found, tables["counts"] = count_findings(
        relative.trial_counts, baseline, _typical_difference(relative, given), trial_counts != "as_recorded"
    )
    findings += found
    found, tables["drift"] = drift_findings(scans, first.frequencies)
    findings += found
    found, tables["trials"] = outlier_findings(scans, baseline)
    findings += found
    found, tables["edges"] = edge_findings(scans, first.frequencies)
    findings += found
    absolute = condition_maps(
        powers, by, Baseline(baseline.window, "none"), conditions=relative.conditions, participants=participants,
        missing_channels=missing_channels, regions=regions,
    )  # fmt: skip
    found, tables["agreement"] = absolute_findings(relative, absolute, _within_people(given))
    findings += found
    return BaselineReview(by_severity(findings), {name: table for name, table in tables.items() if len(table)})


def _within_people(contrasts: Mapping[str, PlannedContrast]) -> dict[str, PlannedContrast]:
    """Contrasts that absolute power can be put into: differences, not tests against the baseline."""
    return {
        name: one for name, one in contrasts.items() if one.design in ("paired", "trend", "interaction", "weighted")
    }


def _invariance_findings(
    baseline: Baseline, contrasts: Mapping[str, PlannedContrast]
) -> tuple[list[ReviewFinding], pd.DataFrame]:
    rows = [(name, window_dependence(baseline, one.design, one.arguments)) for name, one in contrasts.items()]
    table = pd.DataFrame(
        [(name, reason is not None, reason or "the baseline cancels in it") for name, reason in rows],
        columns=["contrast", "depends_on_window", "why"],
    )
    findings = []
    for name, reason in rows:
        if reason is None:
            findings.append(
                ReviewFinding("window dependence", NOTE, f'"{name}" does not depend on the baseline window at all.', "")
            )
        else:
            against = "against" in reason or "people" in reason
            findings.append(
                ReviewFinding(
                    "window dependence", HEADLINE if against and baseline.unit == "decibel" else MIND,
                    f'"{name}" depends on the baseline window: {reason}.', "Say why this window was chosen, before the result.",
                )
            )  # fmt: skip
    return findings, table


def _typical_difference(maps: ConditionMaps, contrasts: Mapping[str, PlannedContrast]) -> float | None:
    """Median size over points of the mean differences that the study compares."""
    sizes = []
    for one in _within_people(contrasts).values():
        try:
            sizes.append(finite_median(np.abs(finite_mean(one(maps).values, axis=0))))
        except InputError:
            continue
    return max(sizes) if sizes else None
