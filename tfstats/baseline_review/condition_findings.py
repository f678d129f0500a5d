"""Do conditions or groups differ in the baseline itself, and does the choice of unit change the picture?"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from functools import partial

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.baseline_review.finite_means import finite_mean
from tfstats.baseline_review.review_result import HEADLINE, MIND, NOTE, ReviewFinding
from tfstats.baseline_review.subject_scan import SubjectScan
from tfstats.contrasts import Contrast, paired
from tfstats.corrections import MaxStatistic
from tfstats.foundations.errors import InputError
from tfstats.results import permutation_test

__all__ = ["absolute_findings", "baseline_level_maps", "baseline_difference_findings", "group_findings"]

Floats = NDArray[np.float64]

DISAGREEMENT = 0.5
"""Maps whose correlation over points is below this are said to disagree."""


def baseline_level_maps(
    scans: Sequence[SubjectScan],
    channels: Sequence[str],
    frequencies: Floats,
    window: tuple[float, float],
    participants: pd.DataFrame | None,
) -> ConditionMaps | None:
    """Log baseline power of each subject and condition as maps of one time; None where subjects differ in channels."""
    names = sorted({name for scan in scans for name in scan.condition_levels})
    names = [name for name in names if all(name in scan.condition_levels for scan in scans)]
    shapes = {level.shape for scan in scans for level in scan.condition_levels.values()}
    if not names or shapes != {(len(channels), len(frequencies))}:
        return None
    values = np.stack([[scan.condition_levels[name] for name in names] for scan in scans])
    return ConditionMaps(
        values[..., None],
        subjects=[scan.subject for scan in scans],
        conditions=names,
        channels=channels,
        frequencies=frequencies,
        times=[(window[0] + window[1]) / 2.0],
        unit="dB of absolute power",
        participants=participants,
        of_differences=True,
        history=("Log baseline power by condition, channel and frequency.",),
    )  # fmt: skip


def baseline_difference_findings(
    maps: ConditionMaps | None, headline: bool, permutations: int, alpha: float, seed: int
) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Each pair of conditions in log baseline power, corrected over channels and frequencies by the maximum statistic."""
    rows, findings = [], []
    conditions = () if maps is None else maps.conditions
    for place, first in enumerate(conditions):
        for second in conditions[place + 1 :]:
            assert maps is not None
            found = _tested(partial(paired, first=first, second=second), maps, permutations, alpha, seed)
            if found is None:
                continue
            p, size, channel, frequency = found
            rows.append((f"{first} - {second}", p, size, channel, frequency))
    table = pd.DataFrame(rows, columns=["comparison", "p", "largest_difference_db", "channel", "frequency"])
    differing = table[table["p"] <= alpha]
    for row in differing.itertuples():
        findings.append(
            ReviewFinding(
                "baseline by condition", HEADLINE if headline else MIND,
                f"Baseline power itself differs between conditions ({row.comparison}): up to "
                f"{row.largest_difference_db:.2g} dB at "
                f"{row.channel}, {row.frequency:.3g} Hz (corrected p = {row.p:.3g}).",
                'With this reference it becomes an effect of the opposite sign; use reference = "pooled".'
                if headline else "With a pooled reference it shows before the event, not hidden after it.",
            )
        )  # fmt: skip
    if len(table) and not len(differing):
        findings.append(
            ReviewFinding(
                "baseline by condition", NOTE,
                f"No pair of conditions differs in baseline power at corrected {alpha:g} (smallest p = "
                f"{table['p'].min():.3g}); "
                "that does not show that they are equal.", "",
            )
        )  # fmt: skip
    return findings, table


def group_findings(
    maps: ConditionMaps | None,
    contrasts: Mapping[str, Callable[[ConditionMaps], Contrast]],
    permutations: int,
    alpha: float,
    seed: int,
) -> list[ReviewFinding]:
    """The between-people contrasts of the study, run on log baseline power."""
    findings = []
    for name, make in contrasts.items():
        found = None if maps is None else _tested(make, maps, permutations, alpha, seed)
        if found is None:
            continue
        p, size, channel, frequency = found
        differs = p <= alpha
        findings.append(
            ReviewFinding(
                "baseline by group", HEADLINE if differs else NOTE,
                f'"{name}" on baseline power itself: corrected p = {p:.3g}, largest size {size:.2g} dB at '
                f"{channel}, {frequency:.3g} Hz.",
                "In relative units this difference becomes an effect of the opposite sign; compare a difference of "
                "conditions (combine), or report both." if differs else "",
            )
        )  # fmt: skip
    return findings


def _tested(
    make: Callable[[ConditionMaps], Contrast], maps: ConditionMaps, permutations: int, alpha: float, seed: int
) -> tuple[float, float, str, float] | None:
    """Smallest corrected p, and the largest difference with its place; None where the test cannot be made."""
    try:
        result = permutation_test(make(maps), MaxStatistic(), permutations=permutations, alpha=alpha, seed=seed)
    except InputError:
        # Too few people to reach alpha, say: the review says nothing of what cannot be tested.
        return None
    channel, frequency, _ = np.unravel_index(np.nanargmax(np.abs(result.estimate)), result.estimate.shape)
    return (
        float(np.nanmin(result.p_values)),
        float(np.abs(result.estimate[channel, frequency, 0])),
        result.channels[channel],
        float(result.frequencies[frequency]),
    )


def absolute_findings(
    relative: ConditionMaps, absolute: ConditionMaps, contrasts: Mapping[str, Callable[[ConditionMaps], Contrast]]
) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Each contrast in relative units beside the same in absolute log power: do the mean maps agree?

    Interactions are also compared in decibels and in percent, which answer different questions.
    """
    rows, findings = [], []
    log_power = _log_power(absolute)
    for name, make in contrasts.items():
        try:
            first = make(relative)
            second = make(log_power)
        except InputError:
            continue
        agreement = _agreement(first, second)
        rows.append((name, "absolute log power", agreement))
        if agreement < DISAGREEMENT:
            findings.append(
                ReviewFinding(
                    "relative against absolute", MIND,
                    f'"{name}": the map in relative units and that in absolute log power disagree '
                    f"(correlation over points {agreement:.2f}).",
                    "Look at both; the baseline carries part of the difference.",
                )
            )  # fmt: skip
        if first.design in ("interaction",) and relative.unit == "decibel":
            linear = make(_percent(relative))
            agreement = _agreement(first, linear)
            rows.append((name, "percent change", agreement))
            if agreement < DISAGREEMENT:
                findings.append(
                    ReviewFinding(
                        "interaction by unit", HEADLINE,
                        f'"{name}": the interaction in decibels (a ratio of ratios) and in percent (a difference of '
                        "percents) disagree "
                        f"(correlation over points {agreement:.2f}).",
                        "Show both, and say which question is asked.",
                    )
                )  # fmt: skip
    table = pd.DataFrame(rows, columns=["contrast", "compared_with", "correlation"])
    if len(table) and not findings:
        findings.append(
            ReviewFinding(
                "relative against absolute",
                NOTE,
                "The contrasts agree with those in absolute log power (smallest correlation over points "
                f"{table['correlation'].min():.2f}).",
                "",
            )
        )
    return findings, table


def _log_power(absolute: ConditionMaps) -> ConditionMaps:
    with np.errstate(divide="ignore", invalid="ignore"):
        return _as(absolute, 10.0 * np.log10(absolute.values), "dB of absolute power")


def _percent(relative: ConditionMaps) -> ConditionMaps:
    return _as(relative, 100.0 * (10.0 ** (relative.values / 10.0) - 1.0), "percent_change")


def _as(maps: ConditionMaps, values: Floats, unit: str) -> ConditionMaps:
    return ConditionMaps(
        values, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit=unit, participants=maps.participants,
    )  # fmt: skip


def _agreement(first: Contrast, second: Contrast) -> float:
    """Correlation over points of the two mean maps."""
    a, b = finite_mean(first.values, axis=0).ravel(), finite_mean(second.values, axis=0).ravel()
    both = np.isfinite(a) & np.isfinite(b)
    if both.sum() < 3 or np.std(a[both]) == 0 or np.std(b[both]) == 0:
        return 1.0
    return float(np.corrcoef(a[both], b[both])[0, 1])
