"""One subject's maps: read once, block by block, summed in float64, held against the reference."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from tfstats.averaged_maps.jackknife import condition_corrections, reference_correction
from tfstats.normalization import Baseline
from tfstats.normalization.baseline_window import baseline_samples, no_finite_baseline
from tfstats.normalization.power_blocks import read_windows, spans_all_times, whole_blocks
from tfstats.normalization.power_sums import CellSums, LogarithmSums
from tfstats.normalization.reference_rows import ReferenceRows, reference_rows
from tfstats.normalization.relative_values import ratio_in_unit
from tfstats.normalization.trial_labels import trial_labels
from tfstats.normalization.window_statistics import (
    References,
    TrialWindows,
    masked_mean,
    references_from_trials,
    usable_deviation,
)

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["SubjectAverage", "average_subject"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class SubjectAverage:
    """Maps (conditions, channels, frequencies, times) of one subject, and what was missing in them."""

    values: Floats
    trial_counts: NDArray[np.int64]
    values_left_out: int
    """Single-trial values that were missing at points where other trials have one."""
    values_in_all: int
    frequencies_lost: NDArray[np.bool_]
    """No baseline at any channel."""
    pairs_lost: int
    """Pairs of channel and frequency without a baseline, at the other frequencies."""


@dataclass(frozen=True)
class _Cells:
    """Trials that share a condition and a reference are summed together."""

    of_trial: NDArray[np.int64]
    condition: tuple[int, ...]
    """Of each cell; -1 for trials that serve as the reference only."""
    row: tuple[int, ...]
    """The reference of each cell; 0 where each trial is its own."""
    refers: tuple[bool, ...]
    """Whether its trials are members of that reference."""


def average_subject(
    power: TrialPower,
    baseline: Baseline,
    labels: Sequence[str | None],
    conditions: Sequence[str],
    *,
    jackknife: bool = False,
) -> SubjectAverage:
    """Average the trials of each condition in the order and unit of the baseline.

    Parameters
    ----------
    labels : one condition label a trial, None for none
    conditions : those wanted, each with at least one trial
    jackknife : whether decibels by "average_first" are corrected for the bias of few trials, in a second pass
    """
    window = baseline_samples(power, baseline)
    codes = np.array([conditions.index(label) if label in conditions else -1 for label in labels], dtype=np.int64)
    groups = None
    if baseline.within is not None:
        groups = trial_labels(power.trials, (baseline.within,), power.subject)
    rows = reference_rows(baseline, labels, codes >= 0, groups, power.subject)
    cells = _cells(baseline, codes, rows)
    kind = LogarithmSums if baseline.unit == "decibel" and baseline.single_trial else CellSums
    sums = kind(cells.of_trial, len(cells.condition), power.values.shape[1:])
    windows = TrialWindows.for_baseline(baseline, power.values.shape[:3])
    _read(power, baseline, window, sums, windows)
    references = _references(power, baseline, window, rows, cells, sums, windows)
    known = _known(power, baseline, conditions, codes, cells, references, windows)
    values, finite = _maps(baseline, len(conditions), cells, sums, references)
    if jackknife:
        values += _corrections(power, baseline, window, codes, rows, finite, cells, sums, references)
    counts = np.bincount(codes[codes >= 0], minlength=len(conditions))
    lost = np.asarray(~known.any(axis=0))
    return SubjectAverage(
        values=values,
        trial_counts=counts,
        values_left_out=int((np.where(finite > 0, counts[:, None, None, None], 0) - finite).sum()),
        values_in_all=int(counts.sum()) * int(np.prod(power.values.shape[1:])),
        frequencies_lost=lost,
        pairs_lost=int(np.count_nonzero(~known[:, ~lost])),
    )


def _cells(baseline: Baseline, codes: NDArray[np.int64], rows: ReferenceRows) -> _Cells:
    of_trial = np.full(codes.size, -1, dtype=np.int64)
    numbers: dict[tuple[int, int], int] = {}
    for trial in np.flatnonzero(codes >= 0):
        key = (int(codes[trial]), max(int(rows.of_trial[trial]), 0))
        of_trial[trial] = numbers.setdefault(key, len(numbers))
    if not baseline.single_trial:
        # The average over a named reference's trials is needed although they may be in no map.
        for row, members in enumerate(rows.members):
            for trial in members[codes[members] < 0]:
                of_trial[trial] = numbers.setdefault((-1, row), len(numbers))
    refers = [False] * len(numbers)
    for row, members in enumerate(rows.members):
        for cell in set(of_trial[members].tolist()) - {-1}:
            refers[cell] = list(numbers)[cell][1] == row
    return _Cells(of_trial, tuple(key[0] for key in numbers), tuple(key[1] for key in numbers), tuple(refers))


def _read(
    power: TrialPower, baseline: Baseline, window: slice, sums: CellSums | LogarithmSums, windows: TrialWindows
) -> None:
    """The one pass over the subject's power."""
    pending = baseline.single_trial and baseline.unit != "none"
    own = pending and baseline.order == "trial_first"
    for place, block in whole_blocks(power):
        if pending and spans_all_times(place, power):
            windows.add(block[..., window], place[:3])
        elif pending:
            read_windows(power, window, windows)
            pending = False
        if not own:
            sums.add(block, place)
            continue
        references = windows.own_references(place[:3])
        if isinstance(sums, LogarithmSums):
            sums.add(block, place, 1.0 / references.level)
        elif references.spread is not None:
            sums.add(block, place, references.level, 1.0 / references.spread)
        else:
            sums.add(block, place, np.zeros_like(references.level), 1.0 / references.level)


def _references(
    power: TrialPower,
    baseline: Baseline,
    window: slice,
    rows: ReferenceRows,
    cells: _Cells,
    sums: CellSums | LogarithmSums,
    windows: TrialWindows,
) -> References | None:
    """None where the sums are in their unit already."""
    if not rows.members:
        return None
    if baseline.single_trial:
        return references_from_trials(windows, rows)
    levels, spreads = [], []
    ragged = False
    everything = sums.total
    finite = np.broadcast_to(sums.finite, everything.shape)
    for row in range(len(rows.members)):
        chosen = [cell for cell, of in enumerate(cells.row) if of == row and cells.refers[cell]]
        total = everything[chosen][..., window].sum(axis=0)
        count = finite[chosen][..., window].sum(axis=0)
        ragged |= bool(np.any((count > 0) & (count < rows.members[row].size)))
        curve = np.where(count > 0, total / np.maximum(count, 1), np.nan)
        if baseline.mean_kind == "geometric":
            levels.append(np.exp(masked_mean(np.log(curve), axis=-1)))
        else:
            levels.append(masked_mean(curve, axis=-1))
        if baseline.unit == "z_score":
            samples = np.count_nonzero(~np.isnan(curve), axis=-1)
            deviations = np.nansum((curve - masked_mean(curve, axis=-1)[..., None]) ** 2, axis=-1)
            spreads.append(usable_deviation(np.sqrt(deviations / np.maximum(samples - 1, 1)), samples))
    references = References(np.stack(levels), np.stack(spreads) if spreads else None)
    if ragged and baseline.mean_kind == "arithmetic":
        # Trials lack different samples: the mean goes over a trial's finite samples first, then over trials.
        read_windows(power, window, windows)
        references = References(references_from_trials(windows, rows).level, references.spread)
    return references


def _known(
    power: TrialPower,
    baseline: Baseline,
    conditions: Sequence[str],
    codes: NDArray[np.int64],
    cells: _Cells,
    references: References | None,
    windows: TrialWindows,
) -> NDArray[np.bool_]:
    """(channels, frequencies): every condition has a baseline there.  Refused where one has none anywhere."""
    shape = power.values.shape[1:3]
    known = np.ones(shape, dtype=bool)
    if baseline.unit == "none":
        return known
    everything = slice(None)
    own = _usable(windows.own_references((everything,) * 3)) if references is None else np.empty(0, dtype=bool)
    for number, condition in enumerate(conditions):
        if references is None:
            there = own[codes == number].any(axis=0)
        else:
            mine = [row for row, of in zip(cells.row, cells.condition) if of == number]
            there = _usable(references)[mine].any(axis=0)
        if not there.any():
            raise no_finite_baseline(power.subject, baseline, f'the baseline of condition "{condition}"')
        known &= there
    return known


def _usable(references: References) -> NDArray[np.bool_]:
    usable = np.isfinite(references.level)
    return usable if references.spread is None else usable & np.isfinite(references.spread)


def _maps(
    baseline: Baseline,
    conditions: int,
    cells: _Cells,
    sums: CellSums | LogarithmSums,
    references: References | None,
) -> tuple[Floats, NDArray[np.int64]]:
    """(conditions, channels, frequencies, times), and the trials behind each value, broadcastable to it."""
    total = sums.total
    values = np.zeros((conditions, *total.shape[1:]))
    # Where nothing is missing, one number a condition says how many trials there are.
    complete = sums.missing is None and (references is None or bool(_usable(references).all()))
    counts = sums.finite if complete else np.broadcast_to(sums.finite, total.shape)
    finite = np.zeros((conditions, *counts.shape[1:]), dtype=np.int64)
    logarithms = isinstance(sums, LogarithmSums)
    for cell, condition in enumerate(cells.condition):
        if condition < 0:
            continue
        part, count = total[cell], counts[cell]
        if references is not None:
            level = references.level[cells.row[cell]][..., None]
            if baseline.unit == "z_score":
                assert references.spread is not None
                spread = references.spread[cells.row[cell]][..., None]
                part = (part - count * level) / spread
            elif logarithms:
                part = part - count * np.log10(level)
            else:
                part = part / level
            if not complete:
                unusable = np.isnan(part)
                part = np.where(unusable, 0.0, part)
                count = np.where(unusable, 0, count)
        values[condition] += part
        finite[condition] += count
    with np.errstate(invalid="ignore"):
        values /= finite
    if logarithms:
        return 10.0 * values, finite
    already = baseline.unit in ("none", "z_score")
    return values if already else ratio_in_unit(values, baseline.unit), finite


def _corrections(
    power: TrialPower,
    baseline: Baseline,
    window: slice,
    codes: NDArray[np.int64],
    rows: ReferenceRows,
    finite: NDArray[np.int64],
    cells: _Cells,
    sums: CellSums | LogarithmSums,
    references: References | None,
) -> Floats:
    """The jackknife of each condition's mean, less that of the baseline it is held against.

    A decibel is the difference of two logarithms, and the jackknife is linear in what it is applied to: so each may be
    corrected over its own trials, and the correction of a pooled baseline is the same for all conditions.
    """
    assert references is not None
    scale = None
    if baseline.within is not None:
        # Ratios are averaged; their baselines are taken as they are.
        with np.errstate(divide="ignore"):
            scale = 1.0 / references.level[np.maximum(rows.of_trial, 0)]
    totals = np.zeros((len(finite), *power.values.shape[1:]))
    for cell, condition in enumerate(cells.condition):
        if condition >= 0:
            part = sums.total[cell]
            if scale is not None:
                part = part / references.level[cells.row[cell]][..., None]
            totals[condition] += np.where(np.isnan(part), 0.0, part)
    windows = None
    if scale is None:
        windows = TrialWindows(power.values.shape[:3], geometric=False, spread=False)
    made = condition_corrections(power, codes, totals, finite, scale, window, windows)
    if windows is not None:
        of_rows = [reference_correction(windows.mean[members]) for members in rows.members]
        for cell, condition in enumerate(cells.condition):
            if condition >= 0:
                made[condition] -= of_rows[cells.row[cell]][..., None]
    return made
