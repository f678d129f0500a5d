"""What `tfstats check` finds out: the study as the plan sees it, without testing anything."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from tfstats.permutation.schemes import planned_rows
from tfstats.permutation.tested_points import tested_points
from tfstats.plan_file import AnalysisPlan
from tfstats.plan_file.study_stages import every_contrast, study_bands, study_maps, study_opened, test_settings

__all__ = ["StudyOverview", "checked_study"]

Progress = Callable[[str, int, int | None], object]
DEFAULT_DRAWS = 10_000


@dataclass(frozen=True)
class StudyOverview:
    """What would be run."""

    name: str
    subjects: tuple[str, ...]
    left_out: dict[str, str]
    trial_counts: pd.DataFrame | None
    contrasts: pd.DataFrame
    """One row a contrast: its plane, its relabellings, the smallest p that it can reach."""
    cautions: tuple[str, ...]


def checked_study(path: Path, progress: Progress | None = None) -> StudyOverview:
    """Read the plan and all its data; refuse everything that is wrong, together."""
    tell = progress or (lambda stage, done, total: None)
    plan = AnalysisPlan.read(path)
    study = study_opened(plan)
    maps = study_maps(plan, study, lambda subject, done, total: tell("reading", done, total))
    rows = []
    for call, contrast in every_contrast(plan, study, maps):
        settings = test_settings(plan, study, call, contrast)
        points = tested_points(contrast, settings.get("fewest_subjects"))
        asked = settings["permutations"]
        relabellings = planned_rows(
            contrast, settings["alternative"], asked if isinstance(asked, int) else DEFAULT_DRAWS, settings["seed"]
        )
        channels, frequencies, times = contrast.shape
        rows.append(
            {
                "contrast": call.name,
                "design": call.design,
                "units": f"{len(contrast.unit_names)} {contrast.unit_kind}s",
                "plane": f"{channels} x {frequencies} x {times}",
                "tested": int(points.tested.sum()),
                "relabellings": relabellings.count if isinstance(asked, int) else asked,
                "all distinct": relabellings.enumerated,
                "smallest p": relabellings.smallest_p,
            }
        )
    # The band table is cheap at a few relabellings, and what it refuses belongs in this list.
    study_bands(plan, maps)
    return StudyOverview(
        name=plan.study.name,
        subjects=study.powers.subjects,
        left_out=study.left_out,
        trial_counts=None if maps is None else maps.trial_counts,
        contrasts=pd.DataFrame(rows),
        cautions=() if maps is None else maps.cautions,
    )
