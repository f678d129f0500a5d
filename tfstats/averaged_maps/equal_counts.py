"""Equal numbers of trials in all conditions of a subject, by drawing trials at random."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from tfstats.averaged_maps.subject_average import SubjectAverage, average_subject
from tfstats.foundations.random_streams import raw_words
from tfstats.normalization import Baseline

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["average_of_equal_counts", "labels_of_a_draw"]


def labels_of_a_draw(
    labels: Sequence[str | None], conditions: Sequence[str], subject: str, seed: int, draw: int
) -> list[str | None]:
    """The labels with None for trials left out, so that each condition keeps as many as the smallest has.

    The trials of a condition are taken in the stable order of their random words, which belong to (seed, subject and
    condition, draw) alone: another subject, or another condition of the same or a larger size, changes nothing.
    """
    rows = {name: [row for row, label in enumerate(labels) if label == name] for name in conditions}
    least = min(len(mine) for mine in rows.values())
    kept = list(labels)
    for name, mine in rows.items():
        number = len(mine)
        if number == least:
            continue
        words = raw_words(seed, f"equal trial counts/{subject}/{name}", draw * number, (draw + 1) * number)
        for place in np.argsort(words, kind="stable")[least:].tolist():
            kept[mine[place]] = None
    return kept


def average_of_equal_counts(
    power: TrialPower,
    baseline: Baseline,
    labels: Sequence[str | None],
    conditions: Sequence[str],
    seed: int,
    subsamples: int,
) -> SubjectAverage:
    """The mean over the draws of the maps that each draw gives, as if there were no other trials."""
    counts = [list(labels).count(name) for name in conditions]
    if min(counts) == max(counts):
        return average_subject(power, baseline, labels, conditions)
    averages = []
    total = np.zeros((len(conditions), *power.values.shape[1:]))
    for draw in range(subsamples):
        chosen = labels_of_a_draw(labels, conditions, str(power.subject), seed, draw)
        made = average_subject(power, baseline, chosen, conditions)
        total += made.values
        averages.append(replace(made, values=np.empty(0)))  # the maps of one draw at a time
    return replace(
        averages[0],
        values=total / subsamples,
        values_left_out=max(made.values_left_out for made in averages),
        frequencies_lost=np.any([made.frequencies_lost for made in averages], axis=0),
        pairs_lost=max(made.pairs_lost for made in averages),
    )
