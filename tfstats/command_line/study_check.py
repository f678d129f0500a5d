"""What `tfstats check` finds out: the study as the plan sees it, without testing anything."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pandas as pd

from tfstats.foundations.errors import InputError, Problems
from tfstats.plan_file import AnalysisPlan
from tfstats.plan_file.study_stages import every_contrast, read_all_power, study_bands, study_maps, study_opened

__all__ = ["StudyOverview", "checked_study"]

Progress = Callable[[str, int, int | None], object]


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
    read: Callable[..., object] = lambda subject, done, total: tell("reading", done, total)  # noqa: E731
    plan = _plan_or_all_problems(path, read)
    study = study_opened(plan, read)
    maps = study_maps(plan, study, read)
    rows, problems = [], Problems()
    with problems.gathering():
        for call, contrast, planned in every_contrast(plan, study, maps):
            channels, frequencies, times = contrast.shape
            rows.append(
                {
                    "contrast": call.name,
                    "design": call.design,
                    "units": f"{len(contrast.unit_names)} {contrast.unit_kind}s",
                    "plane": f"{channels} x {frequencies} x {times}",
                    "tested": int(planned.prepared.tested.sum()),
                    "relabellings": planned.rows.count,
                    "distinct": planned.rows.distinct,
                    "smallest p": planned.rows.smallest_p,
                }
            )
    with problems.gathering():
        study_bands(plan, maps)
    problems.raise_if_any()
    return StudyOverview(
        name=plan.study.name,
        subjects=study.powers.subjects,
        left_out=study.left_out,
        trial_counts=None if maps is None else maps.trial_counts,
        contrasts=pd.DataFrame(rows),
        cautions=() if maps is None else maps.cautions,
    )


def _plan_or_all_problems(path: Path, read: Callable[..., object]) -> AnalysisPlan:
    """The plan; when it has mistakes, they are refused together with those of the data that it names."""
    problems = Problems()
    with problems.gathering():
        return AnalysisPlan.read(path)
    data = AnalysisPlan.data_part(path)
    if data is not None:
        with problems.gathering():
            read_all_power(data, study_opened(data, read), read)
    raise InputError(dict.fromkeys(problems.found))
