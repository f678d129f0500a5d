"""Which trials make each baseline reference, and which reference each trial is held against."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.errors import Problems, listed
from tfstats.normalization.baseline_choice import Baseline

__all__ = ["ReferenceRows", "reference_rows"]

UNUSED = -1


@dataclass(frozen=True)
class ReferenceRows:
    """References of one subject, numbered from 0.

    `of_trial` gives each trial the reference it is held against (-1: the trial is not used); `members` the trials
    that make each reference; `names` says what each is.
    """

    of_trial: NDArray[np.int64]
    members: tuple[NDArray[np.int64], ...]
    names: tuple[str, ...]

    @property
    def trials(self) -> NDArray[np.int64]:
        """All trials that make some reference, ascending."""
        return np.unique(np.concatenate(self.members)) if self.members else np.empty(0, dtype=np.int64)


def reference_rows(
    baseline: Baseline,
    conditions: Sequence[str | None],
    kept: NDArray[np.bool_],
    groups: Sequence[str | None] | None,
    subject: str,
) -> ReferenceRows:
    """Number the references that the kept trials need.

    Parameters
    ----------
    conditions : one label a trial
    kept : bool a trial; the trials of the conditions kept
    groups : one value of the column `within` a trial, or None
    """
    count = len(conditions)
    of_trial = np.full(count, UNUSED, dtype=np.int64)
    if baseline.order == "trial_first" or baseline.unit == "none":
        return ReferenceRows(of_trial, (), ())  # each trial its own, or none at all
    problems = Problems()
    where = f"subject {subject}, baseline"
    if groups is not None:
        empty = sum(group is None for group, keep in zip(groups, kept) if keep)
        if empty:
            problems.add(
                f"{where}, within",
                f'a value of "{baseline.within}" for every trial',
                f"{empty} trials without",
                "complete the trial table or leave these trials out",
            )
            problems.raise_if_any()
    codes: dict[tuple[str | None, str | None], int] = {}
    members: list[NDArray[np.int64]] = []
    names: list[str] = []
    for trial in np.flatnonzero(kept).tolist():
        group = None if groups is None else groups[trial]
        key = (conditions[trial] if baseline.reference == "own" else None, group)
        if key not in codes:
            made = [other for other in range(count) if _belongs(baseline, key, other, conditions, kept, groups)]
            codes[key] = len(members)
            members.append(np.array(made, dtype=np.int64))
            names.append(_name(baseline, key))
        of_trial[trial] = codes[key]
    for made_of, name in zip(members, names):
        if made_of.size == 0:
            there = {label for label in conditions if label is not None}
            problems.add(
                where,
                f"trials of {name} as reference",
                f"none (conditions there: {listed(there)})",
                "use the spelling of the trial table or another reference",
            )
    problems.raise_if_any()
    return ReferenceRows(of_trial, tuple(members), tuple(names))


def _belongs(
    baseline: Baseline,
    key: tuple[str | None, str | None],
    trial: int,
    conditions: Sequence[str | None],
    kept: NDArray[np.bool_],
    groups: Sequence[str | None] | None,
) -> bool:
    condition, group = key
    if groups is not None and groups[trial] != group:
        return False
    if baseline.reference == "named":
        return conditions[trial] == baseline.reference_condition
    return bool(kept[trial]) and (baseline.reference == "pooled" or conditions[trial] == condition)


def _name(baseline: Baseline, key: tuple[str | None, str | None]) -> str:
    condition, group = key
    if baseline.reference == "named":
        whose = f'condition "{baseline.reference_condition}"'
    elif baseline.reference == "own":
        whose = f'condition "{condition}"'
    else:
        whose = "all conditions kept"
    return whose if group is None else f'{whose} with {baseline.within} "{group}"'
