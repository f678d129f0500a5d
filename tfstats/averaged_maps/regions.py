"""Regions of implanted electrodes: the channels of each patient that are averaged together."""

from __future__ import annotations

import pandas as pd

from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import listed, refusal
from tfstats.power_files import TrialPower

__all__ = ["checked_regions", "in_regions", "regions_in_words"]

REGION_COLUMNS = ("subject", "channel", "region")


def checked_regions(regions: pd.DataFrame | None) -> dict[str, dict[str, list[str]]] | None:
    """By subject, the channels of each region."""
    if regions is None:
        return None
    where = "condition_maps, regions"
    if not isinstance(regions, pd.DataFrame) or any(name not in regions.columns for name in REGION_COLUMNS):
        got = listed(regions.columns) if isinstance(regions, pd.DataFrame) else type(regions).__name__
        raise refusal(where, f"a table with the columns {listed(REGION_COLUMNS)}", got, "give one row a channel")
    by_subject: dict[str, dict[str, list[str]]] = {}
    for row in regions[list(REGION_COLUMNS)].itertuples(index=False):
        subject, channel, region = (label_text(value) for value in row)
        if not pd.isna(row.region) and region:
            by_subject.setdefault(subject, {}).setdefault(region, []).append(channel)
    return by_subject


def in_regions(power: TrialPower, by_subject: dict[str, dict[str, list[str]]]) -> TrialPower:
    if power.subject not in by_subject:
        raise refusal(
            f"subject {power.subject}, regions",
            "at least one row in the regions table",
            f"none (subjects there: {listed(by_subject)})",
            "add the subject's channels, or leave the subject out",
        )
    return power.mean_across("channels", by_subject[power.subject])


def regions_in_words(by_subject: dict[str, dict[str, list[str]]]) -> str:
    channels = sum(len(names) for groups in by_subject.values() for names in groups.values())
    regions = sorted({region for groups in by_subject.values() for region in groups})
    return (
        f"Power was averaged over each patient's channels in a region before it was made relative: {channels} channels of "
        f"{len(by_subject)} patients in {len(regions)} regions ({', '.join(regions)})."
    )
