"""Plans whose input is averaged already: power by subject and condition, or condition maps from elsewhere."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from pathlib import Path
from typing import Any

import pandas as pd

from tfstats.averaged_maps import ConditionMaps, condition_maps, read_maps, relative_maps
from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.normalization import Baseline
from tfstats.normalization.trial_labels import trial_labels
from tfstats.plan_file.plan import AnalysisPlan
from tfstats.power_files import PowerFiles, TrialPower

__all__ = ["MapsFile", "maps_of_averages", "maps_of_file"]

SubjectDone = Callable[[str, int, int | None], object]


class MapsFile:
    """Stands where PowerFiles does in a study whose input is one file of condition maps; it has no trials."""

    def __init__(self, path: Path, subjects: Iterable[str] | None = None, maps: ConditionMaps | None = None) -> None:
        self.path = path
        self.maps = read_maps(path) if maps is None else maps
        self.subjects = self.maps.subjects if subjects is None else tuple(subjects)

    def chosen(self, subjects: Iterable[str]) -> MapsFile:
        """The same file with some of its subjects."""
        return MapsFile(self.path, subjects, self.maps)

    def files_of(self, subject: object) -> tuple[Path, ...]:
        """The one file, with the first subject only, so that it is listed once."""
        return (self.path,) if subject == self.subjects[0] else ()

    def trial_tables_of(self, subject: object) -> tuple[Path, ...]:
        """None."""
        return ()

    def __iter__(self) -> Iterator[TrialPower]:
        return (self.of(subject) for subject in self.subjects)

    def check(self) -> None:
        """Nothing is left to read."""

    def of(self, subject: object) -> TrialPower:
        """Refused: there are maps only."""
        raise refusal(
            f"subject {subject}, {self.path.name}", "power of single trials for this design", "condition maps",
            'choose a design over subjects, or give the trials with kind = "trials"',
        )  # fmt: skip


def maps_of_file(plan: AnalysisPlan, found: MapsFile, participants: pd.DataFrame | None) -> ConditionMaps:
    """Maps from elsewhere: power is made relative as [baseline] says, other units are taken as they are."""
    maps = found.maps.select(subjects=found.subjects)
    if participants is not None:
        maps = maps._changed(participants=participants)
    if plan.channels.average_groups and maps.unit != "power":
        raise refusal(
            plan.where("channels", "average_groups"), 'maps of unit "power", which can be averaged before the ratio',
            f'"{maps.unit}" in {found.path.name}', "remove average_groups",
        )  # fmt: skip
    if plan.channels.average_groups:
        maps = maps.mean_across("channels", plan.channels.groups)
    if maps.unit == "power":
        return _relative(plan, maps)
    if plan.baseline.unit != "none":
        raise refusal(
            plan.where("baseline", "unit"), f'unit = "none" for maps that are relative already ({maps.unit})',
            f'"{plan.baseline.unit}"', "write [baseline] with unit = \"none\"",
        )  # fmt: skip
    return maps


def maps_of_averages(
    plan: AnalysisPlan,
    powers: PowerFiles,
    participants: pd.DataFrame | None,
    subject_done: SubjectDone | None,
    conditions: list[Any] | None,
) -> ConditionMaps:
    """Averages by subject and condition, with the trials behind each, made relative as [baseline] says."""
    assert plan.conditions is not None
    columns = plan.conditions.columns
    maps = condition_maps(
        powers,
        columns,
        Baseline(unit="none"),
        conditions=_with_reference(conditions, plan.baseline),
        participants=participants,
        missing_channels=plan.channels.missing,
        progress=subject_done or False,
    )
    problems = Problems()
    rows = {}
    for subject in maps.subjects:
        with problems.gathering():
            rows[subject] = _counts_of(powers.of(subject).trials, columns, subject, plan.input.trial_counts, maps)
    problems.raise_if_any()
    counts = None
    if plan.input.trial_counts is not None:
        counts = pd.DataFrame.from_dict(rows, orient="index", columns=list(maps.conditions))
    # What is said of trials counts the averages.
    history = [
        "Power came to this analysis averaged over the trials of each condition.",
        *(line for line in maps.history if not line.startswith("Conditions, from")),
    ]
    return _relative(plan, maps._changed(trial_counts=counts, history=history, baseline=None), conditions)


def _with_reference(conditions: list[Any] | None, baseline: Baseline) -> list[Any] | None:
    """The reference condition is averaged too, though it may be in no contrast."""
    named = baseline.reference_condition
    if conditions is None or named is None or named in [label_text(one) for one in conditions]:
        return conditions
    return [*conditions, named]


def _counts_of(
    table: pd.DataFrame, columns: list[str], subject: str, column: str | None, maps: ConditionMaps
) -> list[float]:
    labels = trial_labels(table, tuple(columns), subject)
    twice = sorted({label for label in labels if label is not None and labels.count(label) > 1})
    where = f"subject {subject}, averaged power"
    if twice:
        raise refusal(
            where, "one average for each condition", f"several for {listed(twice)}",
            'name the columns that tell them apart under [conditions], or write kind = "trials"',
        )  # fmt: skip
    if column is None:
        return []
    if column not in table.columns:
        raise refusal(
            f"{where}, trial_counts", f"a trial column among {listed(table.columns)}", f'"{column}"',
            "correct trial_counts under [input]",
        )  # fmt: skip
    return [float(table[column].iloc[labels.index(name)]) for name in maps.conditions]


def _relative(plan: AnalysisPlan, maps: ConditionMaps, conditions: list[Any] | None = None) -> ConditionMaps:
    if plan.baseline.unit == "none":
        return maps if conditions is None else maps.select(conditions=conditions)
    try:
        return relative_maps(maps, plan.baseline, conditions=conditions)
    except InputError as error:
        raise InputError(f"{plan.where('baseline')}: {text}" for text in error.problems) from None
