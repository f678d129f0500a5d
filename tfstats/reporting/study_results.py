"""StudyResults: all that a results folder and its report are made of."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import pandas as pd

from tfstats.results import ContrastResult

__all__ = ["StudyResults"]


@dataclass(frozen=True)
class StudyResults:
    """What did a whole study find?

    Made by `run_analysis` and `read_results`.

    Attributes
    ----------
    contrasts : mapping of name to ContrastResult
        In the order of the plan.
    bands : DataFrame or None
        The band table; its `attrs["cautions"]` are kept.
    provenance : mapping
        How it came about, as JSON can hold it: versions, seed, plan_hash, input_hashes.  Written and shown as it is.
    name : str
        Of the study.
    plan_text : str or None
        The plan file's text, None for a study that was not run from a plan.
    trial_counts : DataFrame (subjects x conditions) or None
        Trials behind each map.
    participants : DataFrame or None
        One row a subject.
    baseline_window : (start, stop) in s, or None
        Marked in the figures where it lies inside their times.
    electrodes : DataFrame or None
        Columns name, x, y, z.
    review : DataFrame or None
        What the baseline does to these data: columns severity, topic, words, remedy.
    families : DataFrame or None
        Contrasts corrected for each other: columns family, contrast, p, p_family.
    cautions : tuple of str
        What to mind about the study as a whole; those of one contrast are in its result.
    """

    contrasts: Mapping[str, ContrastResult]
    bands: pd.DataFrame | None = None
    provenance: Mapping[str, Any] = field(default_factory=dict)
    name: str = "study"
    plan_text: str | None = None
    trial_counts: pd.DataFrame | None = None
    participants: pd.DataFrame | None = None
    baseline_window: tuple[float, float] | None = None
    electrodes: pd.DataFrame | None = None
    cautions: tuple[str, ...] = ()
    review: pd.DataFrame | None = None
    families: pd.DataFrame | None = None

    def __repr__(self) -> str:
        rows = 0 if self.bands is None else len(self.bands)
        return f"<StudyResults {self.name}: {len(self.contrasts)} contrasts, {rows} rows in the band table>"
