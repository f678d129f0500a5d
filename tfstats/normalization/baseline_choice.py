"""The choice of a baseline: window, unit, reference, order of averaging and dividing."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

from tfstats.foundations.axes import MILLISECOND_SUSPICION, label_text
from tfstats.foundations.checks import one_of
from tfstats.foundations.errors import Problems
from tfstats.foundations.units import UNITS

__all__ = ["BASELINE_MEANS", "ORDERS", "REFERENCES", "Baseline"]

REFERENCES = ("pooled", "own", "named")
ORDERS = ("average_first", "trial_first", "trial_by_reference")
BASELINE_MEANS = ("arithmetic", "geometric")

_SINGLE_TRIAL_ORDERS = ("trial_first", "trial_by_reference")


@dataclass(frozen=True)
class Baseline:
    """Relative to what, in which unit, and in which order is power expressed?

    Parameters
    ----------
    window : (start, stop)
        Baseline window in s, closed, before the event.  Plays no part with unit "none".
    unit : "decibel", "percent_change", "ratio", "z_score" or "none"
        10 log10(A/B), 100 (A - B)/B, A/B, (A - mean)/SD of activity power A and baseline power B, or A itself.
    reference : "pooled", "own" or "named"
        Whose baseline.  "pooled": all trials of the conditions kept, each trial weighing the same.  "own": each
        condition its own.  "named": the trials of `reference_condition`.  Plays no part with order "trial_first".
    order : "average_first", "trial_first" or "trial_by_reference"
        "average_first": mean over trials, then divide (the logarithm of a mean).  "trial_first": each trial by its
        own baseline, then mean (the mean of logarithms).  "trial_by_reference": each trial by the reference
        baseline, then mean.
    reference_condition : str, optional
        The condition whose baseline window serves all, with reference "named" only.
    within : str, optional
        A trial column such as "run": one reference for each of its values.
    baseline_mean : "arithmetic", "geometric" or None
        Mean over the samples (and trials) of the baseline.  None: geometric for decibels with the two single-trial
        orders, arithmetic otherwise, so that decibels have a mean of zero under no change.  With "average_first" a
        geometric mean runs over the samples of the trial average.

    Raises
    ------
    InputError
        All mistakes at once: unknown options, a window that is not two finite numbers in s with the start first, a
        reference condition that is missing or superfluous, z scores with a geometric mean, or z scores by
        "average_first" within a trial column.

    Notes
    -----
    SDs have ddof 1 and run over the samples that the order uses: of the trial average over time; within the trial;
    over trials x samples.  No randomness, no cost.

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.Baseline((-0.5, -0.2)).mean_kind
    'arithmetic'
    >>> tfs.Baseline((-0.5, -0.2), order="trial_first").mean_kind
    'geometric'
    >>> print(tfs.Baseline((-0.5, -0.2), "percent_change", "own").describe())
    Power was averaged over the trials of each condition, then expressed as percent change from baseline power. \
The baseline was the arithmetic mean of power from -0.5 to -0.2 s over the trials of the same condition.
    """

    window: tuple[float, float] = (-0.5, -0.2)
    unit: str = "decibel"
    reference: str = "pooled"
    order: str = "average_first"
    reference_condition: str | None = field(default=None, kw_only=True)
    within: str | None = field(default=None, kw_only=True)
    baseline_mean: str | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        problems = Problems()
        self._set("window", _checked_window(self.window, problems))
        for name, options in (("unit", UNITS), ("reference", REFERENCES), ("order", ORDERS)):
            with problems.gathering():
                one_of(getattr(self, name), options, f"baseline, {name}")
        if self.baseline_mean is not None:
            with problems.gathering():
                one_of(
                    self.baseline_mean,
                    BASELINE_MEANS,
                    "baseline, baseline_mean",
                    remedy="choose one of them or leave it out for the default",
                )
        self._check_reference_condition(problems)
        if self.within is not None and (not isinstance(self.within, str) or not self.within.strip()):
            problems.add(
                "baseline, within", "the name of one trial column", repr(self.within), 'write a column such as "run"'
            )
        if self.unit == "z_score":
            self._check_z_score(problems)
        problems.raise_if_any()

    def _set(self, name: str, value: object) -> None:
        object.__setattr__(self, name, value)

    def _check_reference_condition(self, problems: Problems) -> None:
        if self.reference_condition is not None:
            self._set("reference_condition", label_text(self.reference_condition))
        if self.reference == "named" and not self.reference_condition:
            problems.add(
                "baseline, reference_condition",
                'the condition whose baseline is used with reference "named"',
                repr(self.reference_condition),
                'name it, or use reference "pooled" or "own"',
            )
        if self.reference in ("pooled", "own") and self.reference_condition is not None:
            problems.add(
                "baseline, reference_condition",
                f'no reference condition with reference "{self.reference}"',
                f'"{self.reference_condition}"',
                'leave it out or set reference "named"',
            )

    def _check_z_score(self, problems: Problems) -> None:
        if self.baseline_mean == "geometric":
            problems.add(
                "baseline, baseline_mean",
                'an arithmetic mean with unit "z_score"',
                '"geometric"',
                "leave baseline_mean out or choose another unit",
            )
        if self.within is not None and self.order == "average_first":
            problems.add(
                "baseline, within",
                'no trial column with unit "z_score" and order "average_first"',
                repr(self.within),
                'leave within out, or use order "trial_by_reference" or another unit',
            )

    @property
    def mean_kind(self) -> str:
        """Which mean the baseline is: "arithmetic" or "geometric"."""
        if self.baseline_mean is not None:
            return self.baseline_mean
        return "geometric" if self.unit == "decibel" and self.order in _SINGLE_TRIAL_ORDERS else "arithmetic"

    @property
    def single_trial(self) -> bool:
        """Whether trials are expressed in the unit one by one, before they are averaged."""
        return self.order in _SINGLE_TRIAL_ORDERS

    def describe(self, *, averaged: bool = True) -> str:
        """The choice in one or two sentences for a methods paragraph.

        Parameters
        ----------
        averaged : bool
            False: the sentences speak of single trials that are not averaged afterwards.
        """
        if self.unit == "none":
            return (
                "Power was averaged over the trials of each condition, without a baseline."
                if averaged
                else "Power of single trials was used as it was, without a baseline."
            )
        words = UNITS[self.unit].words
        if not self.single_trial:
            first = f"Power was averaged over the trials of each condition, then expressed as {words}."
            if self.within is not None:
                first = (
                    f"Power of each trial was divided by a baseline, the ratios were averaged over the trials of each "
                    f"condition, then expressed as {words}."
                )
        else:
            rest = ", then averaged over the trials of each condition" if averaged else ""
            first = f"Each trial was expressed as {words}{rest}."
        window = f"from {self.window[0]:g} to {self.window[1]:g} s"
        return f"{first} The baseline was the {self.mean_kind} mean of power {window} over {self._whose()}."

    def _whose(self) -> str:
        if self.order == "trial_first":
            spread = ", over which the standard deviation was taken too" if self.unit == "z_score" else ""
            return f"the samples of the same trial{spread}"
        whose = {
            "pooled": "all trials of the conditions kept, each trial weighing the same",
            "own": "the trials of the same condition",
            "named": f"the trials of condition {self.reference_condition}",
        }[self.reference]
        if self.within is not None:
            whose += f", separately for each value of {self.within}"
        if self.unit == "z_score":
            over = "time, of the average over trials" if self.order == "average_first" else "trials and samples"
            whose += f"; the standard deviation was taken over {over}"
        elif self.order == "average_first" and self.mean_kind == "geometric":
            whose += "; it was taken over the samples of the average over trials"
        return whose


def _checked_window(window: object, problems: Problems) -> tuple[float, float]:
    where, nothing = "baseline, window", (math.nan, math.nan)
    to_number: Callable[[object], float] = float  # type: ignore[assignment]
    try:
        if isinstance(window, str):
            raise TypeError
        low, high = (to_number(edge) for edge in window)  # type: ignore[attr-defined]
    except (TypeError, ValueError):
        problems.add(where, "two numbers, start and stop in s", repr(window), "write (-0.5, -0.2) for instance")
        return nothing
    got = f"{low:g} to {high:g}"
    if not (math.isfinite(low) and math.isfinite(high)):
        problems.add(where, "two finite numbers in s", got, "write (-0.5, -0.2) for instance")
    elif low > high:
        problems.add(where, "a start not after its stop, in s", got, "exchange the two edges")
    elif max(abs(low), abs(high)) > MILLISECOND_SUSPICION:
        problems.add(
            where,
            f"seconds within {MILLISECOND_SUSPICION:g} of the event",
            f"{got}, probably milliseconds",
            "divide both edges by 1000",
        )
    return low, high
