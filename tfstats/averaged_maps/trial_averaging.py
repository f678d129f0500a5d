"""From per-trial power of many subjects to one map a subject and condition."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence, Sized
from dataclasses import asdict
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.averaged_maps.regions import checked_regions, in_regions, regions_in_words
from tfstats.averaged_maps.subject_average import SubjectAverage
from tfstats.averaged_maps.subject_record import SubjectRecord
from tfstats.averaged_maps.subject_tables import aligned_participants
from tfstats.averaged_maps.trial_counting import TrialCounting, checked_counting
from tfstats.averaged_maps.what_was_averaged import averaging_cautions, averaging_history
from tfstats.foundations.axes import checked_labels, typical_step
from tfstats.foundations.checks import one_of
from tfstats.foundations.errors import InputError, Problems, listed
from tfstats.normalization import Baseline
from tfstats.normalization.trial_labels import checked_columns, trial_labels
from tfstats.power_files import PowerFiles, SubjectCache, TrialPower

__all__ = ["condition_maps"]

MISSING_CHANNELS = ("refuse", "keep_common", "leave_gaps")
AXIS_TOLERANCE = 1e-3
"""Axes of two subjects agree to within this share of a step: float32 files round their axes."""

Progress = Callable[[str, int, int | None], object]


def condition_maps(
    powers: PowerFiles | Iterable[TrialPower],
    by: str | Sequence[str],
    baseline: Baseline,
    *,
    conditions: Iterable[object] | None = None,
    participants: pd.DataFrame | None = None,
    trial_counts: str = "as_recorded",
    seed: int = 0,
    subsamples: int = 20,
    missing_channels: str = "refuse",
    regions: pd.DataFrame | None = None,
    progress: Progress | bool = False,
    cache: SubjectCache | None = None,
) -> ConditionMaps:
    """What is the average relative power of each subject in each condition?

    Parameters
    ----------
    powers : PowerFiles or iterable of TrialPower
        Each subject once; read one at a time, in blocks where it lies in a file.
    by : str or sequence of str
        Trial column or columns that hold the condition; labels of several are joined as "2/recalled".
    baseline : Baseline
    conditions : sequence of str, optional
        Which, in which order.  None: all labels, sorted, but for a named reference condition, which is in the maps
        only when listed.
    participants : DataFrame, optional
        One row a subject, with a column `participant_id`.
    trial_counts : "as_recorded", "jackknife" or "equal"
        What to do about the decibel of a mean lying too low where trials are few, which makes conditions with unequal
        counts differ without any effect.  "as_recorded": nothing; the trials of each map as they are.  "jackknife":
        n T - (n - 1) times the mean of T without each trial, for decibels by "average_first" (no other choice has
        this bias); the bias left is of order 1/n^2, below 0.01 dB from 7 Gaussian trials on.  "equal": as many trials as the
        condition with fewest has, drawn at random without replacement within each subject; any unit and order.
    seed : int
        Of the draws of "equal".
    subsamples : int
        Draws of "equal" over which the maps are averaged.  1: conditions are exchangeable under no effect, trials are
        thrown away.  More: less noise; the bias of the mean goes, unequal variances stay.
    missing_channels : "refuse", "keep_common" or "leave_gaps"
        What to do when a subject lacks a channel: refuse, keep the channels that all have, or keep all channels with
        NaN where a subject lacks one (test with `fewest_subjects`).
    regions : DataFrame, optional
        For implanted electrodes, whose channels differ between patients: columns subject, channel, region.  The power
        of each patient's channels in a region is averaged before anything is made relative, and the regions are the
        channels of the maps; channels without a region are left out.
    progress : callable(subject, done, total), optional
        Called after each subject; `total` is None where it is not known.
    cache : SubjectCache, optional
        With PowerFiles: subjects whose files and settings are those of an entry are taken from there, the others are
        read and kept.  The maps are the same to the last bit.

    Returns
    -------
    ConditionMaps
        float64.  Channels in the order of the first subject.

    Raises
    ------
    InputError
        The problems of all subjects together: a missing condition or channel, axes that differ, a subject twice, a
        baseline window outside the times or without a finite sample at any frequency, z scores by "average_first"
        with each condition's own reference and unequal trial counts; "jackknife" with another unit, order or baseline
        mean, or a condition of one trial.

    Notes
    -----
    Random only with trial_counts "equal": the draws belong to (seed, subject, condition) and to nothing else.  Time is that
    of reading the power once, twice with "jackknife", `subsamples` times with "equal" where counts differ; memory is one
    block, plus the maps.  The maps are the same to the last bit however a file is read in blocks.  A single trial's NaN is
    left out of the mean at its point and counted (`cautions`).  A baseline is the mean of a trial's finite samples, then
    of trials; a frequency without any becomes NaN.

    The decibel of a mean over n Gaussian trials lies 10/ln 10 (ln n - digamma(n)) below the truth: conditions with
    unequal trial counts differ by that without any effect (`tfstats.normalization.decibel_bias_of_mean`).  The jackknife
    (Quenouille 1956, Biometrika 43:353) corrects the mean of a condition over its trials and the baseline over its own, so
    that the correction of a pooled baseline cancels between conditions; with `within` the baselines are taken as they are.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_study
    >>> powers = simulate_study(lamp_sequences(subjects=3))
    >>> tfs.condition_maps(powers, "memory", tfs.Baseline((-0.5, -0.2))).conditions
    ('missed', 'recalled')
    """
    problems = Problems()
    counting = TrialCounting()
    columns: tuple[str, ...] = ()
    wanted: tuple[str, ...] | None = None
    with problems.gathering():
        columns, wanted = _checked_arguments(by, baseline, conditions, missing_channels, progress)
    with problems.gathering():
        counting = checked_counting(trial_counts, seed, subsamples, baseline)
    problems.raise_if_any()
    by_subject = checked_regions(regions)
    study = _Study(columns, wanted, baseline, counting)
    # Everything that one subject's averages depend on, besides its files.
    settings = {
        "columns": columns,
        "conditions": wanted,
        "baseline": asdict(baseline),
        "trial_counts": asdict(counting),
        "regions": by_subject,
    }
    total = len(powers) if isinstance(powers, Sized) else None
    kept = _Kept(cache, powers, settings) if cache is not None and isinstance(powers, PowerFiles) else None
    for power in _one_by_one([powers] if isinstance(powers, TrialPower) else powers, study, kept):
        if isinstance(power, SubjectRecord):
            study.take_record(power)
        elif by_subject is not None:
            with study.problems.gathering():
                record = study.take(in_regions(power, by_subject))
                if kept is not None and record is not None:
                    kept.keep(record)
        else:
            record = study.take(power)
            if kept is not None and record is not None:
                kept.keep(record)
        if callable(progress):
            progress(power.subject, len(study.subjects), total)
    if by_subject is not None and not study.problems.found:
        study.notes[regions_in_words(by_subject)] = None
    return study.maps(participants, missing_channels)


def _checked_arguments(
    by: str | Sequence[str],
    baseline: Baseline,
    conditions: Iterable[object] | None,
    missing_channels: str,
    progress: Progress | bool,
) -> tuple[tuple[str, ...], tuple[str, ...] | None]:
    problems = Problems()
    columns: tuple[str, ...] = ()
    wanted: tuple[str, ...] | None = None
    with problems.gathering():
        columns = checked_columns(by)
    if not isinstance(baseline, Baseline):
        problems.add("condition_maps, baseline", "a Baseline", type(baseline).__name__, "make one with Baseline(...)")
    if conditions is not None:
        with problems.gathering():
            wanted = checked_labels(conditions, "condition_maps, conditions", of="condition")
    with problems.gathering():
        one_of(missing_channels, MISSING_CHANNELS, "condition_maps, missing_channels")
    if progress not in (False, None) and not callable(progress):
        problems.add("condition_maps, progress", "False or a function", repr(progress), "give one of the two")
    problems.raise_if_any()
    return columns, wanted


def _one_by_one(
    powers: PowerFiles | Iterable[TrialPower], study: _Study, kept: _Kept | None
) -> Iterator[TrialPower | SubjectRecord]:
    """Each subject's power; what cannot be read is noted, so that the other subjects are looked at too."""
    if isinstance(powers, PowerFiles):
        for subject in powers.subjects:
            record = None if kept is None else kept.record(subject)
            if record is not None:
                yield record
                continue
            power = None
            with study.problems.gathering():
                power = powers.of(subject)
            if power is None:
                study.unreadable.append(subject)
            else:
                yield power
        return
    for power in powers:
        if isinstance(power, TrialPower):
            yield power
        else:
            study.problems.add("condition_maps, powers", "TrialPower", type(power).__name__, "read it with read_power")


class _Kept:
    """The cache as this study sees it."""

    def __init__(self, cache: SubjectCache, powers: PowerFiles, settings: dict[str, Any]) -> None:
        self.cache, self.powers = cache, powers
        self.settings = {**settings, "layout": powers.layout_words()}

    def _settings_of(self, subject: str) -> dict[str, Any]:
        # A further patient in the table of regions changes nothing for the others.
        regions = self.settings["regions"]
        return self.settings if regions is None else {**self.settings, "regions": regions.get(subject)}

    def record(self, subject: str) -> SubjectRecord | None:
        """What an earlier run kept of the subject, if it still holds."""
        parts = self.cache.read(subject, self.powers.sources_of(subject), self._settings_of(subject))
        try:
            return None if parts is None else SubjectRecord.from_parts(parts)
        except (KeyError, TypeError):
            self.cache.found.remove(subject)
            self.cache.notices.append(
                f"subject {subject}: the cache entry lacks parts; the subject's files were read instead."
            )
            return None

    def keep(self, record: SubjectRecord) -> None:
        """For a later run."""
        files = self.powers.sources_of(record.subject)
        self.cache.write(record.subject, files, self._settings_of(record.subject), *record.words_and_arrays())


class _Study:
    """Collects the subjects' averages, and what is wrong with any of them."""

    def __init__(
        self, columns: Sequence[str], wanted: tuple[str, ...] | None, baseline: Baseline, counting: TrialCounting
    ) -> None:
        self.columns = columns
        self.wanted = wanted
        self.baseline = baseline
        self.counting = counting
        self.problems = Problems()
        self.subjects: list[str] = []
        self.unreadable: list[str] = []
        self.axes: dict[str, NDArray[np.float64]] = {}
        self.channels: dict[str, tuple[str, ...]] = {}
        self.averages: dict[str, tuple[tuple[str, ...], SubjectAverage]] = {}
        self.labels_there: dict[str, dict[str, int]] = {}
        self.without_label: dict[str, int] = {}
        self.notes: dict[str, None] = {}
        self.settings: list[tuple[Any, str | None, str | None]] = []

    def take(self, power: TrialPower) -> SubjectRecord | None:
        """Average one subject, or note why not."""
        if not self._enter(power):
            return None
        subject = str(power.subject)
        with self.problems.gathering():
            labels = trial_labels(power.trials, self.columns, subject)
            there = {label: labels.count(label) for label in sorted({name for name in labels if name is not None})}
            self.labels_there[subject] = there
            self.without_label[subject] = labels.count(None)
            chosen = self._conditions_of(there)
            self._check_counts(subject, chosen, there)
            if chosen:
                average = self.counting.average(power, self.baseline, labels, chosen)
                self.averages[subject] = (chosen, average)
                return SubjectRecord(
                    subject, tuple(power.channels), power.frequencies, power.times, power.notes, power.wavelet_cycles,
                    power.scaling, power.power_unit, there, labels.count(None), chosen, average,
                )  # fmt: skip
        return None

    def take_record(self, record: SubjectRecord) -> None:
        """What `take` found when it saw the same files earlier."""
        if self._enter(record):
            self.labels_there[record.subject] = record.labels_there
            self.without_label[record.subject] = record.without_label
            with self.problems.gathering():
                self._check_counts(record.subject, record.conditions, record.labels_there)
            self.averages[record.subject] = (record.conditions, record.average)

    def _enter(self, power: TrialPower | SubjectRecord) -> bool:
        """Note a subject's name and axes; False where it is there already."""
        subject = str(power.subject)
        if subject in self.channels:
            self.problems.add(
                f"subject {subject}", "each subject once", "it again", "join the files of a subject or rename one"
            )
            return False
        self.subjects.append(subject)
        self.channels[subject] = tuple(power.channels)
        self._compare_axes(power)
        self.notes.update(dict.fromkeys(power.notes))
        cycles = None if power.wavelet_cycles is None else np.atleast_1d(power.wavelet_cycles)
        self.settings.append((cycles, power.scaling, power.power_unit))
        return True

    def _conditions_of(self, there: dict[str, int]) -> tuple[str, ...]:
        if self.wanted is not None:
            return tuple(name for name in self.wanted if name in there)
        return tuple(name for name in there if name != self.baseline.reference_condition)

    def _compare_axes(self, power: TrialPower | SubjectRecord) -> None:
        if not self.axes:
            self.axes = {"frequencies": np.array(power.frequencies), "times": np.array(power.times)}
            return
        for name, unit in (("frequencies", "Hz"), ("times", "s")):
            ours, theirs = self.axes[name], np.asarray(getattr(power, name))
            tolerance = AXIS_TOLERANCE * typical_step(ours)
            if ours.shape != theirs.shape or np.any(np.abs(ours - theirs) > tolerance):
                self.problems.add(
                    f"subject {power.subject}, {name}",
                    f"those of subject {self.subjects[0]} ({_axis_in_words(ours, unit)})",
                    _axis_in_words(theirs, unit),
                    "bring all subjects to the same axis or leave the subject out",
                )

    def _check_counts(self, subject: str, chosen: Sequence[str], there: dict[str, int]) -> None:
        problem = self.counting.problem(self.baseline, subject, {name: there[name] for name in chosen})
        if problem is not None:
            raise InputError(problem)

    def maps(self, participants: pd.DataFrame | None, missing_channels: str) -> ConditionMaps:
        """All subjects together, or all that is wrong."""
        problems = self.problems
        if not self.subjects and not problems.found:
            problems.add("condition_maps, powers", "at least one subject", "none", "check the pattern of the files")
        conditions = self._check_conditions()
        channels, left_out = self._check_channels(missing_channels)
        table = None
        with problems.gathering():
            # Who could not be read is refused for that, not for a row too many.
            table = aligned_participants(participants, [*self.subjects, *self.unreadable])
        problems.raise_if_any()
        values = np.empty((len(self.subjects), len(conditions), len(channels), *self._plane()))
        counts = np.empty(values.shape[:2], dtype=np.int64)
        for row, subject in enumerate(self.subjects):
            present, average = self.averages[subject]
            order = [present.index(name) for name in conditions]
            names = self.channels[subject]
            here = [place for place, name in enumerate(channels) if name in names]
            if (present, names) == (conditions, channels):
                values[row] = average.values
            else:
                values[row] = np.nan
                values[np.ix_([row], range(len(conditions)), here)] = average.values[
                    np.ix_(order, [names.index(channels[place]) for place in here])
                ]
            counts[row] = average.trial_counts[order]
        cycles, scaling, differing = self._common_settings()
        averages = {subject: average for subject, (_, average) in self.averages.items()}
        frame = pd.DataFrame(counts, index=list(self.subjects), columns=list(conditions))
        recorded = pd.DataFrame(
            [[self.labels_there[subject][name] for name in conditions] for subject in self.subjects],
            index=list(self.subjects),
            columns=list(conditions),
        )
        return ConditionMaps(
            values,
            subjects=self.subjects,
            conditions=conditions,
            channels=channels,
            frequencies=self.axes["frequencies"],
            times=self.axes["times"],
            unit=self.baseline.unit,
            trial_counts=frame,
            participants=table,
            baseline=self.baseline,
            history=(
                *self.notes,
                *averaging_history(self.baseline, self.columns, recorded, self.counting, left_out, missing_channels),
            ),
            cautions=averaging_cautions(
                self.baseline,
                recorded,
                self.counting,
                averages,
                self.axes["frequencies"],
                self.without_label,
                differing,
            ),
            wavelet_cycles=cycles,
            scaling=scaling,
        )

    def _plane(self) -> tuple[int, int]:
        return self.axes["frequencies"].size, self.axes["times"].size

    def _check_conditions(self) -> tuple[str, ...]:
        if self.wanted is not None:
            conditions = self.wanted
        else:
            everywhere = {label for there in self.labels_there.values() for label in there}
            conditions = tuple(sorted(everywhere - {self.baseline.reference_condition}))
        if not conditions and self.labels_there:
            self.problems.add(
                "condition_maps, by", f"condition labels in {listed(self.columns)}", "none", "name another trial column"
            )
        for subject, there in self.labels_there.items():
            missing = [name for name in conditions if name not in there]
            if missing:
                found = ", ".join(f'{count} of "{name}"' for name, count in there.items()) or "no labelled trials"
                self.problems.add(
                    f"subject {subject}, conditions",
                    f"trials of {listed(missing)}",
                    f"none ({found})",
                    "leave the subject out, or the condition",
                )
        return tuple(conditions)

    def _check_channels(self, missing_channels: str) -> tuple[tuple[str, ...], dict[str, list[str]]]:
        """Channels to keep, and those left out with the subjects that lack them."""
        if not self.channels:
            return (), {}
        everywhere = list(dict.fromkeys(name for names in self.channels.values() for name in names))
        absent = {
            name: [subject for subject, names in self.channels.items() if name not in names] for name in everywhere
        }
        absent = {name: subjects for name, subjects in absent.items() if subjects}
        kept = tuple(name for name in everywhere if name not in absent)
        if missing_channels == "leave_gaps":
            return tuple(everywhere), absent
        if missing_channels == "keep_common":
            if not kept:
                self.problems.add(
                    "channels", "at least one channel that all subjects have", "none", "check their names"
                )
            return kept, absent
        for subject, names in self.channels.items():
            # A channel that only a minority has is named at the subjects that have it, not at all the others.
            lacking = [
                name
                for name, subjects in absent.items()
                if subject in subjects and 2 * len(subjects) <= len(self.channels)
            ]
            extra = [
                name for name, subjects in absent.items() if name in names and 2 * len(subjects) > len(self.channels)
            ]
            if lacking:
                self.problems.add(
                    f"subject {subject}, channels",
                    f"{listed(lacking)} as in the other subjects",
                    f"none of that name among its {len(names)}",
                    'leave the subject out, or set missing = "keep_common" under [channels]',
                )
            if extra:
                self.problems.add(
                    f"subject {subject}, channels",
                    "the channels of the other subjects",
                    f"{listed(extra)} besides",
                    'leave them out, or set missing = "keep_common" under [channels]',
                )
        return kept, {}

    def _common_settings(self) -> tuple[NDArray[np.float64] | None, str | None, list[str]]:
        """Wavelet cycles and scaling where all subjects agree, and the names of what differs."""
        cycles, scaling, unit = self.settings[0]
        differing = []
        if any(
            (other is None) != (cycles is None) or not np.array_equal(other, cycles) for other, _, _ in self.settings
        ):
            cycles = None
            differing.append("wavelet_cycles")
        if any(other != scaling for _, other, _ in self.settings):
            scaling = None
            differing.append("scaling")
        if any(other != unit for _, _, other in self.settings):
            differing.append("power_unit")
        return cycles, scaling, differing


def _axis_in_words(axis: NDArray[np.float64], unit: str) -> str:
    return f"{axis.size} from {axis[0]:g} to {axis[-1]:g} {unit}"
