"""What is done about unequal numbers of trials: nothing, the jackknife, or equal numbers by drawing."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from tfstats.averaged_maps.equal_counts import average_of_equal_counts
from tfstats.averaged_maps.subject_average import SubjectAverage, average_subject
from tfstats.foundations.checks import count, one_of
from tfstats.foundations.errors import Problems, refusal_text
from tfstats.normalization import Baseline

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["TRIAL_COUNTS", "TrialCounting", "checked_counting"]

TRIAL_COUNTS = ("as_recorded", "jackknife", "equal")
MOST_SEED = 2**64 - 1


@dataclass(frozen=True)
class TrialCounting:
    """The choice; seed and subsamples only count with "equal"."""

    choice: str = "as_recorded"
    seed: int = 0
    subsamples: int = 1

    def average(
        self, power: TrialPower, baseline: Baseline, labels: Sequence[str | None], conditions: Sequence[str]
    ) -> SubjectAverage:
        """One subject's maps by this choice."""
        if self.choice == "equal":
            return average_of_equal_counts(power, baseline, labels, conditions, self.seed, self.subsamples)
        return average_subject(power, baseline, labels, conditions, jackknife=self.choice == "jackknife")

    def problem(self, baseline: Baseline, subject: str, counts: Mapping[str, int]) -> str | None:
        """Why a subject with these trials a condition cannot be averaged, or None."""
        where, got = (
            f"subject {subject}, trial counts",
            ", ".join(f"{name} {number}" for name, number in counts.items()),
        )
        if self.choice == "jackknife" and min(counts.values(), default=2) < 2:
            return refusal_text(
                where,
                'at least two trials of each condition for trial_counts "jackknife"',
                got,
                'leave the subject out or use trial_counts "equal"',
            )
        falls = (baseline.unit, baseline.order, baseline.reference) == ("z_score", "average_first", "own")
        if falls and self.choice != "equal" and len(set(counts.values())) > 1:
            return refusal_text(
                where,
                'equal counts for unit "z_score" by "average_first" with reference "own", whose SD falls with the count',
                got,
                'use reference "pooled", another unit, or trial_counts "equal"',
            )
        return None

    def in_words(self, baseline: Baseline) -> list[str]:
        """What was done, for a methods paragraph."""
        if self.choice == "jackknife":
            of_baseline = (
                "of the conditions" if baseline.within is not None else "of the conditions and of the baseline"
            )
            return [
                f"The decibels of means over trials, {of_baseline}, were corrected for the bias of few trials by the jackknife "
                "over trials (n T - (n - 1) times the mean of T without each trial)."
            ]
        if self.choice == "equal":
            draws = (
                "one such draw was used"
                if self.subsamples == 1
                else f"maps were averaged over {self.subsamples} such draws"
            )
            return [
                "Within each subject as many trials of each condition as the condition with fewest had were drawn at random "
                f"without replacement (seed {self.seed}); {draws}."
            ]
        return []

    def cautions(self, unequal: bool) -> list[str]:
        """What to mind; `unequal`: whether any subject's conditions had unequal counts."""
        if not unequal:
            return []
        if self.choice == "jackknife":
            return [
                "The jackknife removes the bias of the mean that unequal trial counts cause, not the larger variance of the "
                "condition with fewer trials."
            ]
        if self.choice == "equal" and self.subsamples > 1:
            return [
                f"Averaging over {self.subsamples} draws removes the bias of the mean that unequal trial counts cause, not the "
                "larger variance of the condition with fewer trials; a single draw (subsamples=1) removes both, at the price "
                "of trials thrown away."
            ]
        return []


def checked_counting(trial_counts: object, seed: object, subsamples: object, baseline: object) -> TrialCounting:
    """The choice, or all that is wrong with it."""
    problems = Problems()
    choice, number, draws = "", 0, 1
    with problems.gathering():
        choice = one_of(trial_counts, TRIAL_COUNTS, "condition_maps, trial_counts")
    with problems.gathering():
        number = count(seed, "condition_maps, seed", least=0)
        if number > MOST_SEED:
            problems.add("condition_maps, seed", "a whole number below 2^64", seed, "give a smaller one")
    with problems.gathering():
        draws = count(subsamples, "condition_maps, subsamples")
    if choice == "jackknife" and isinstance(baseline, Baseline):
        kind = (baseline.unit, baseline.order, baseline.mean_kind)
        if kind != ("decibel", "average_first", "arithmetic"):
            problems.add(
                "condition_maps, trial_counts",
                'unit "decibel" by "average_first" with an arithmetic baseline mean for "jackknife" (the bias that it removes '
                "is that of the logarithm of a mean)",
                f'unit "{kind[0]}" by "{kind[1]}" with a baseline mean that is {kind[2]}',
                'use trial_counts "equal" or "as_recorded"',
            )
    problems.raise_if_any()
    return TrialCounting(choice, number, draws) if choice == "equal" else TrialCounting(choice)
