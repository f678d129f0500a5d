"""What each stage of a planned study needs from the plan: files, maps, contrasts, neighbours, bands."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pandas as pd

from tfstats.averaged_maps import ConditionMaps, condition_maps
from tfstats.contrasts import DESIGNS, Contrast, restricted
from tfstats.findings import band_table
from tfstats.foundations.adjacency import channel_adjacency
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.normalization import Baseline, averaging_for_chance, normalized_trials
from tfstats.normalization.trial_labels import trial_labels
from tfstats.plan_file.maps_input import MapsFile, maps_of_averages, maps_of_file
from tfstats.plan_file.plan import AnalysisPlan, DesignCall
from tfstats.plan_file.study_refusals import in_entry, in_plan
from tfstats.plan_file.tables import TestTable
from tfstats.power_files import PowerFiles, SubjectCache, TrialPower, read_electrodes, read_participants
from tfstats.power_files.trial_columns import read_table
from tfstats.results import ContrastResult, PlannedTest, family_of_tests, permutation_test, planned_test

__all__ = [
    "OpenStudy",
    "built_contrast",
    "checked_bands",
    "every_contrast",
    "planned_powers",
    "read_all_power",
    "study_bands",
    "study_families",
    "study_maps",
    "study_opened",
    "test_settings",
    "tested_contrast",
]

SubjectDone = Callable[[str, int, int | None], object]


@dataclass(frozen=True)
class OpenStudy:
    """The files and tables of a study; no power has been read yet."""

    powers: PowerFiles | MapsFile
    participants: pd.DataFrame | None
    electrodes: pd.DataFrame | None
    pairs: pd.DataFrame | None = None
    regions: pd.DataFrame | None = None
    left_out: dict[str, str] = field(default_factory=dict)
    """Subjects left out, with the reason."""
    tables: tuple[Path, ...] = ()
    """The files of the tables above."""

    def files(self) -> list[Path]:
        """Every file on which the results depend: power, the labels beside bare arrays, trial tables, tables."""
        found: list[Path] = []
        for subject in self.powers.subjects:
            for path in self.powers.files_of(subject):
                found += [path, *(beside for beside in (path.with_suffix(".labels.npz"),) if beside.is_file())]
            found += self.powers.trial_tables_of(subject)
        return [*found, *self.tables]


def study_opened(plan: AnalysisPlan, subject_done: SubjectDone | None = None) -> OpenStudy:
    """Find the files, read the tables, and settle who takes part.

    When something is wrong, the power is read as well, so that what is wrong inside the files stands in the same list.
    """
    problems = Problems()
    participants = electrodes = pairs = regions = None
    powers: PowerFiles | None = None
    if plan.participants is not None:
        with problems.gathering():
            participants = read_participants(
                plan.place(plan.participants.file), column=plan.participants.column, subject=plan.participants.subject
            )
    if plan.channels.electrodes is not None:
        with problems.gathering():
            electrodes = read_electrodes(plan.place(plan.channels.electrodes))
    if plan.channels.pairs is not None:
        with problems.gathering():
            pairs = read_table(plan.place(plan.channels.pairs), f"channels, {plan.channels.pairs}")
    if plan.channels.regions is not None:
        with problems.gathering():
            regions = read_table(plan.place(plan.channels.regions), f"channels, {plan.channels.regions}")
    with problems.gathering():
        powers = planned_powers(plan, None)
    left_out: dict[str, str] = {}
    if powers is not None:
        powers, participants, left_out = _who_takes_part(plan, powers, participants, problems)
    if problems.found and powers is not None:
        with problems.gathering():
            read_all_power(plan, OpenStudy(powers, None, None, regions=regions), subject_done)
    with in_plan(plan, None if powers is None else _files_in(powers)):
        problems.raise_if_any()
    assert powers is not None
    named = (plan.channels.electrodes, plan.channels.pairs, plan.channels.regions)
    tables = [plan.place(name) for name in (plan.participants and plan.participants.file, *named) if name]
    return OpenStudy(powers, participants, electrodes, pairs, regions, left_out, tuple(tables))


def planned_powers(plan: AnalysisPlan, subjects: list[str] | None = None, *, grouped: bool = True) -> Any:
    """The power files that the plan describes; `grouped`: channel groups averaged where the plan asks for it."""
    if plan.input.kind == "condition_maps":
        found = MapsFile(plan.place(plan.input.files))
        return found if subjects is None else found.chosen(subjects)
    if re.search(r"[{}*?]", str(plan.folder)):
        # These would be read as words of the pattern, which then fits other folders too.
        raise refusal(str(plan.folder), "a folder without { } * ? in its path", "one with them", "rename the folder")
    layout = plan.input.model_dump(exclude={"files", "trial_table", "kind", "trial_counts"}, exclude_none=True)
    if plan.input.trial_table is not None:
        layout["trial_table"] = str(plan.place(plan.input.trial_table))
    groups = plan.channels.groups if grouped and plan.channels.average_groups else None
    return PowerFiles(str(plan.place(plan.input.files)), subjects=subjects, channel_groups=groups, **layout)


def _who_takes_part(
    plan: AnalysisPlan, powers: PowerFiles, participants: pd.DataFrame | None, problems: Problems
) -> tuple[PowerFiles, pd.DataFrame | None, dict[str, str]]:
    excluded = {str(name) for name in plan.subjects.exclude}
    left_out = {name: "excluded in the plan" for name in powers.subjects if name in excluded}
    rows = [] if participants is None else participants["participant_id"].tolist()
    unknown = sorted(excluded - set(powers.subjects) - set(rows))
    if unknown:
        problems.add(
            "subjects, exclude",
            f"subjects among {listed(powers.subjects)}",
            listed(unknown),
            "use the names in the files",
        )
    if participants is not None:
        without_file = [name for name in rows if name not in powers.subjects and name not in excluded]
        without_row = [name for name in powers.subjects if name not in rows and name not in excluded]
        if without_file:
            problems.add(
                "participants", f"a power file for each row, as {plan.input.files} says", f"none for {listed(without_file)}",
                "add the files, or put the subjects under exclude in [subjects]",
            )  # fmt: skip
        if without_row:
            problems.add(
                "participants", "a row for each power file", f"none for {listed(without_row)}",
                "add the rows, or put the subjects under exclude in [subjects]",
            )  # fmt: skip
    kept = [name for name in powers.subjects if name not in excluded]
    if not kept:
        problems.add("subjects", "at least one subject", "none", "exclude fewer")
        return powers, participants, left_out
    if plan.conditions is not None and (plan.subjects.incomplete == "leave_out" or plan.subjects.fewest_trials):
        incomplete = _incomplete(plan, planned_powers(plan, kept, grouped=False), problems)
        if plan.subjects.incomplete == "leave_out":
            left_out.update(incomplete)
            kept = [name for name in kept if name not in incomplete]
            if not kept:
                problems.add("subjects, incomplete", "at least one complete subject", "none", "ask for fewer trials")
                return powers, participants, left_out
        else:
            for name, reason in incomplete.items():
                problems.add(
                    f"subject {name}, subjects, fewest_trials", "enough trials in every condition", reason,
                    'exclude the subject, or set incomplete = "leave_out"',
                )  # fmt: skip
    if participants is not None:
        participants = participants[participants["participant_id"].isin(kept)].reset_index(drop=True)
    return planned_powers(plan, kept), participants, left_out


def _incomplete(plan: AnalysisPlan, powers: PowerFiles, problems: Problems) -> dict[str, str]:
    """Subjects that lack a condition or have too few trials in one, with the reason."""
    assert plan.conditions is not None
    counts: dict[str, dict[str, int]] = {}
    for name in powers.subjects:
        with problems.gathering():
            labels = trial_labels(powers.of(name).trials, plan.conditions.columns, name)
            counts[name] = {label: labels.count(label) for label in set(labels) if label is not None}
    wanted = _condition_labels(plan) or sorted({label for there in counts.values() for label in there})
    fewest = plan.subjects.fewest_trials or 1
    reasons = {}
    for name, there in counts.items():
        short = [f'{there.get(label, 0)} of "{label}"' for label in wanted if there.get(label, 0) < fewest]
        if short:
            reasons[name] = f"{', '.join(short)} (at least {fewest} each)"
    return reasons


def _condition_labels(plan: AnalysisPlan) -> list[Any] | None:
    return None if plan.conditions is None or plan.conditions.conditions is None else list(plan.conditions.conditions)


def study_maps(
    plan: AnalysisPlan, study: OpenStudy, subject_done: SubjectDone | None = None, cache: SubjectCache | None = None
) -> ConditionMaps | None:
    """One map a subject and condition; None where only trials of one subject are compared."""
    return _averaged(plan, study, subject_done, cache) if _over_subjects(plan) else None


def read_all_power(plan: AnalysisPlan, study: OpenStudy, subject_done: SubjectDone | None = None) -> None:
    """Read the power of every subject only to refuse, together, what is wrong with it."""
    if plan.conditions is not None and (_over_subjects(plan) or not plan.contrasts):
        _averaged(plan, study, subject_done, None)
    else:
        study.powers.check()


def _over_subjects(plan: AnalysisPlan) -> bool:
    return bool(plan.band_tests) or any(DESIGNS[call.design].takes == "maps" for call in plan.contrasts)


def _averaged(
    plan: AnalysisPlan, study: OpenStudy, subject_done: SubjectDone | None, cache: SubjectCache | None
) -> ConditionMaps:
    if isinstance(study.powers, MapsFile):
        return maps_of_file(plan, study.powers, study.participants)
    assert plan.conditions is not None
    if plan.input.kind == "averaged_power":
        return maps_of_averages(plan, study.powers, study.participants, subject_done, _condition_labels(plan))
    with in_plan(plan, _files_in(study.powers)):
        return condition_maps(
            study.powers,
            plan.conditions.columns,
            plan.baseline,
            conditions=_condition_labels(plan),
            participants=study.participants,
            trial_counts=plan.trial_counts,
            seed=plan.study.seed,
            missing_channels=plan.channels.missing,
            regions=study.regions,
            progress=subject_done or False,
            cache=cache,
        )


def _files_in(powers: PowerFiles) -> Callable[[str], tuple[Path, ...]]:
    return lambda subject: powers.files_of(subject) if subject in powers.subjects else ()


def built_contrast(plan: AnalysisPlan, study: OpenStudy, maps: ConditionMaps | None, call: DesignCall) -> Contrast:
    """The contrast of one plan entry on the part of the plane that its test covers."""
    entry, test = DESIGNS[call.design], call.test
    with in_entry(call.place):
        if entry.takes == "maps":
            assert maps is not None
            return _of_maps(plan, maps, call)
        power = _one_subject(study, call)
        arguments = dict(call.arguments)
        if entry.takes == "power":
            arguments.setdefault("baseline_window", plan.baseline.window)
            contrast = entry.function(power, **arguments)
        else:
            by = plan.conditions.columns if plan.conditions is not None else None
            needs_labels = plan.baseline.order == "trial_by_reference" and plan.baseline.reference != "pooled"
            trials = normalized_trials(power, plan.baseline, by=by if needs_labels else None)
            contrast = entry.function(trials, **arguments)
        return restricted(
            contrast,
            channels=test.channels,
            frequencies=test.frequencies,
            times=_test_times(plan, test, contrast.times),
            every_nth_time=test.every_nth_time or 1,
        )


def _of_maps(plan: AnalysisPlan, maps: ConditionMaps, call: DesignCall) -> Contrast:
    test = call.test
    times = _test_times(plan, test, maps.times, maps.baseline)
    part = maps.select(channels=test.channels, frequencies=test.frequencies, times=times)
    of = averaging_for_chance(maps.baseline) if call.design == "against_zero" else "units"
    for axis in test.mean_across or ():
        part = part.mean_across(axis, of=of)
    contrast = DESIGNS[call.design].function(part, **call.arguments)
    return contrast if test.every_nth_time is None else restricted(contrast, every_nth_time=test.every_nth_time)


def _test_times(
    plan: AnalysisPlan, test: TestTable, times: Any, of_maps: Baseline | None = None
) -> tuple[float, float] | None:
    """By default the test begins after the baseline window; with a baseline from elsewhere it covers all times.

    Maps from elsewhere may know the baseline that made them relative.
    """
    if test.times is not None:
        return test.times
    baseline = plan.baseline if of_maps is None else of_maps
    if baseline.reference == "named" or baseline.unit == "none":
        return None
    step = float(times[1] - times[0]) if len(times) > 1 else 0.0
    after = times[times > baseline.window[1] + 1e-6 * step]
    if not len(after):
        raise refusal(
            "test, times", f"times after the baseline window, which ends at {baseline.window[1]:g} s",
            f"none (the last is {float(times[-1]):g} s)", "set times = [start, stop] under [test]",
        )  # fmt: skip
    return float(after[0]), float(times[-1])


def _one_subject(study: OpenStudy, call: DesignCall) -> TrialPower:
    subjects = study.powers.subjects
    if call.subject is None and len(subjects) > 1:
        raise InputError(
            f'expected the subject whose trials are compared, got {len(subjects)} subjects; add subject = "{subjects[0]}".'
        )
    if call.subject is not None and call.subject not in subjects:
        raise InputError(f'subject: expected one of {listed(subjects)}, got "{call.subject}"; correct it.')
    return study.powers.of(call.subject or subjects[0])


def every_contrast(
    plan: AnalysisPlan, study: OpenStudy, maps: ConditionMaps | None
) -> Iterator[tuple[DesignCall, Contrast, PlannedTest]]:
    """Build each contrast once, one in memory at a time, and refuse all that cannot be built or tested together."""
    problems = Problems()
    for call in plan.contrasts:
        contrast = planned = None
        with problems.gathering():
            contrast = built_contrast(plan, study, maps, call)
            settings = test_settings(plan, study, call, contrast)
            with in_entry(call.place):
                planned = planned_test(contrast, call.correction, **settings)
        if contrast is not None and planned is not None:
            yield call, contrast, planned
    problems.raise_if_any()


def test_settings(plan: AnalysisPlan, study: OpenStudy, call: DesignCall, contrast: Contrast) -> dict[str, Any]:
    """Keyword arguments of `permutation_test` for one contrast."""
    test = call.test
    given = {
        "permutations": test.permutations or plan.study.permutations,
        "alpha": plan.study.alpha,
        "seed": plan.study.seed,
        "alternative": test.alternative or "two-sided",
        "adjacency": _neighbours(plan, study, contrast.channels, call),
    }
    for name in ("fewest_subjects", "robust"):
        if getattr(test, name) is not None:
            given[name] = getattr(test, name)
    if test.until_resolved:
        # The number in the plan is then where drawing stops all the same.
        given["most_permutations"] = test.permutations
        given["permutations"] = "until_resolved"
    if test.tail_approximation:
        given["tail_approximation"] = True
    return given


def _neighbours(
    plan: AnalysisPlan, study: OpenStudy, channels: tuple[str, ...], call: DesignCall
) -> pd.DataFrame | None:
    rule = plan.channels.adjacency or ("sphere" if study.electrodes is not None else "none")
    averaged = "channels" in (call.test.mean_across or ()) or study.regions is not None or plan.channels.average_groups
    if rule == "none" or len(channels) == 1 or averaged:
        return None
    if rule == "pairs":
        assert study.pairs is not None
        with in_entry(plan.where("channels", "pairs")):
            table = channel_adjacency(study.pairs, rule="pairs")
            kept = table.reindex(index=list(channels), columns=list(channels), fill_value=False)
            if not kept.to_numpy().any():
                raise refusal(
                    "channels", f"at least one pair among {listed(channels)}", f"pairs of {listed(table.index)}",
                    "use the spelling of the data",
                )  # fmt: skip
        return kept
    assert study.electrodes is not None
    with in_entry(plan.where("channels", "electrodes")):
        missing = [name for name in channels if name not in set(study.electrodes["name"])]
        if missing:
            raise refusal(
                "channels", "a position for every channel", f"none for {listed(missing)}",
                'add them to the table, or set adjacency = "none"',
            )  # fmt: skip
        present = study.electrodes[study.electrodes["name"].isin(channels)]
        return channel_adjacency(present, rule=rule, farthest=plan.channels.farthest)


test_settings.__test__ = False  # type: ignore[attr-defined]  # not a test, whatever pytest makes of the name


def tested_contrast(
    plan: AnalysisPlan,
    study: OpenStudy,
    maps: ConditionMaps | None,
    call: DesignCall,
    *,
    threads: int | None,
    progress: Callable[[str, int, int | None], object],
) -> ContrastResult:
    """Build and test one contrast of the plan."""
    contrast = built_contrast(plan, study, maps, call)
    settings = test_settings(plan, study, call, contrast)

    def tell(done: int, total: int) -> None:
        progress(f"testing {call.name}", done, total)

    with in_entry(call.place):
        return permutation_test(contrast, call.correction, threads=threads, progress=tell, **settings)


def checked_bands(plan: AnalysisPlan, study: OpenStudy, maps: ConditionMaps | None) -> pd.DataFrame | None:
    """Build every contrast once and the band table, and refuse all that is wrong with either together."""
    problems = Problems()
    bands = None
    with problems.gathering():
        for _ in every_contrast(plan, study, maps):
            pass
    with problems.gathering():
        bands = study_bands(plan, maps)
    problems.raise_if_any()
    return bands


def _rows_of_bands(plan: AnalysisPlan) -> dict[str, list[str]]:
    """Channel groups of the band table; where groups are the channels of the maps, each is a row."""
    groups = plan.channels.groups
    return {name: [name] for name in groups} if plan.channels.average_groups else groups


def study_families(plan: AnalysisPlan, contrasts: Mapping[str, ContrastResult]) -> pd.DataFrame | None:
    """One corrected p for each contrast of each family, or None."""
    parts = []
    for name, members in plan.families.items():
        table = family_of_tests({member: contrasts[member] for member in members})
        table.insert(0, "family", name)
        parts.append(table)
    return pd.concat(parts, ignore_index=True) if parts else None


def study_bands(plan: AnalysisPlan, maps: ConditionMaps | None) -> pd.DataFrame | None:
    """The band table of the plan, or None."""
    if not plan.band_tests or maps is None:
        return None

    def test_of(call: DesignCall) -> Callable[[ConditionMaps], Contrast]:
        def build(part: ConditionMaps) -> Contrast:
            with in_entry(call.place):
                return DESIGNS[call.design].function(part, **call.arguments)

        return build

    with in_plan(plan):
        return band_table(
            maps,
            {call.name: test_of(call) for call in plan.band_tests},
            plan.bands,
            plan.windows,
            channel_groups=_rows_of_bands(plan) or None,
            permutations=plan.study.permutations,
            alpha=plan.study.alpha,
            seed=plan.study.seed,
        )
