"""Which contrasts hang on the baseline window, and why."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from tfstats.normalization import Baseline

__all__ = ["window_dependence"]

WITHIN_SUBJECTS = ("paired", "trend", "interaction", "repeated_measures")


def window_dependence(baseline: Baseline, design: str, arguments: Mapping[str, Any]) -> str | None:
    """Why a contrast depends on the baseline window; None where it does not at all.

    With decibels, a pooled reference and a linear average of trials (or each trial by the reference), the baseline adds the
    same number to all conditions of a subject, and weights that sum to zero cancel it.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.baseline_review import window_dependence
    >>> window_dependence(tfs.Baseline(), "paired", {"first": "a", "second": "b"}) is None
    True
    >>> window_dependence(tfs.Baseline(), "against_zero", {"condition": "a"})
    'it holds one condition against the baseline itself'
    """
    if baseline.unit == "none":
        return None
    own = _of_the_design(design, arguments)
    if own is not None:
        return own
    if baseline.unit != "decibel":
        return f"a difference in unit {baseline.unit} scales with the baseline"
    if baseline.order == "trial_first":
        return "each trial is divided by its own baseline"
    if baseline.reference == "own":
        return "each condition is divided by its own baseline"
    if baseline.within is not None:
        return f"each {baseline.within} is divided by its own baseline"
    return None


def _of_the_design(design: str, arguments: Mapping[str, Any]) -> str | None:
    if design in ("against_zero", "trialwise_change"):
        return "it holds one condition against the baseline itself"
    if design in WITHIN_SUBJECTS or design in ("trialwise", "trialwise_slope"):
        return None
    weights = arguments.get("weights") or arguments.get("combine")
    if weights:
        numbers = [float(weight) for weight in weights.values()]
        balanced = abs(sum(numbers)) <= 1e-9 * sum(abs(weight) for weight in numbers)
        return None if balanced else "its weights do not sum to zero, so the baseline does not cancel"
    return "people are compared on one condition, so that a difference in baseline power becomes the effect"
