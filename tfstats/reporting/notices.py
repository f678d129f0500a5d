"""Sentences that stand in every report and methods file, whatever was found."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tfstats.reporting.study_results import StudyResults
from tfstats.results.cautions import RESEARCH_ONLY

__all__ = ["BAND_NOTE", "COLOUR_NOTE", "study_notices"]

BAND_NOTE = (
    "Each row is one mean over a band, a window and a group of channels, tested two-sided by the same relabellings. "
    "p is not corrected; p corrected holds over the whole table (step-down maximum, Westfall & Young 1993). Intervals are "
    "95 %, t-based and unadjusted."
)

COLOUR_NOTE = (
    "Scales of differences, statistics and effect sizes are symmetric about zero: blue below, orange above. A line "
    "encloses the points of the corrected mask; in maps of the statistic and of the effect size all else is paler, and "
    "the numbers are those of the cluster table."
)


def study_notices(study: StudyResults) -> list[tuple[str, str]]:
    """(heading, sentences) of what holds for the report as a whole."""
    return [
        ("For research", RESEARCH_ONLY),
        ("Several contrasts", _family(study)),
        ("Choices made beforehand", _choices(study.provenance, study.plan_text is not None)),
        (
            "What a cluster's p is about",
            "A cluster's p-value is about the cluster as a whole. Its extent is the one observed; where an effect begins or "
            "ends in time or frequency was not tested (Sassenhagen & Draschkow 2019).",
        ),
        (
            "Effects inside clusters",
            "A region that was found on the same data shows an inflated effect (Kriegeskorte et al. 2009). A p above alpha "
            "does not show that conditions are equal.",
        ),
    ]


def _family(study: StudyResults) -> str:
    contrasts = len(study.contrasts)
    if study.families is not None and len(study.families):
        named = "; ".join(
            f"{name} ({', '.join(rows['contrast'])})" for name, rows in study.families.groupby("family", sort=False)
        )
        return (
            "Contrasts of one family are corrected for each other by the minimum p over their shared relabellings "
            f"(Westfall & Young 1993): {named}. Contrasts outside a family are not corrected for others."
        )
    if contrasts < 2:
        return "One contrast was tested. Other contrasts of the same data, here or elsewhere, are not corrected for."
    return (
        f"The p-values of the {contrasts} contrasts are not corrected for each other: each holds its own alpha, and the "
        "chance of a false finding somewhere grows with their number."
    )


def _choices(provenance: Mapping[str, Any], from_plan: bool) -> str:
    void = "Thresholds, windows and contrasts that were chosen after seeing the data void the p-values."
    digest = provenance.get("plan_hash")
    if digest:
        return (
            f"{void} What was set is in the plan file, whose hash is {digest}; a copy kept before the data were seen, with "
            "the same hash, shows that nothing was changed since."
        )
    where = "in the plan file below" if from_plan else "in no plan file: it was set in calls from Python"
    return f"{void} What was set is {where}."
