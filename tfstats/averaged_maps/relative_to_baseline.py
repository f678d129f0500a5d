"""Averaged power, one map a subject and condition, made relative to its baseline."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.averaged_maps.trial_counting import TrialCounting
from tfstats.averaged_maps.what_was_averaged import bias_of_counts, lost_baselines
from tfstats.foundations.axes import label_positions
from tfstats.foundations.errors import InputError, Problems, listed
from tfstats.normalization import Baseline
from tfstats.normalization.baseline_window import no_finite_baseline, window_samples
from tfstats.normalization.relative_values import ratio_in_unit
from tfstats.normalization.window_statistics import masked_mean, usable_deviation

__all__ = ["relative_maps"]

WHERE = "relative_maps"

Floats = NDArray[np.float64]


def relative_maps(
    maps: ConditionMaps, baseline: Baseline, *, conditions: Iterable[object] | None = None
) -> ConditionMaps:
    """What is averaged power relative to its baseline?

    For studies whose power was averaged over trials already.  Where the trials are there, `condition_maps` does more.

    Parameters
    ----------
    maps : ConditionMaps
        Averaged linear power, unit "power", with the baseline window inside its times.  Trial counts are needed for
        reference "pooled", in which each trial weighs the same.
    baseline : Baseline
        Order "average_first", without `within`: the other choices need single trials.
    conditions : sequence of str, optional
        Which, in which order; the pooled reference is over these.  None: all but a named reference condition.

    Returns
    -------
    ConditionMaps
        float64.  The same values as `condition_maps` gives by "average_first" from the trials (to rounding), where no
        trial lacks points that others have.

    Raises
    ------
    InputError
        Maps in another unit or of differences, another order, `within`, missing trial counts, conditions that are
        not there, a window outside the times or without finite power; all mistakes at once.

    Notes
    -----
    No randomness; time and memory are those of the maps.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> power = np.array([1.0, 1.0, 2.0]) * np.ones((1, 2, 1, 1, 3))
    >>> maps = tfs.ConditionMaps(power, subjects=["S1"], conditions=["recalled", "missed"], channels=["Fz"],
    ...     frequencies=[6], times=[-0.2, -0.1, 0.0], unit="power", trial_counts=[[40, 35]])
    >>> tfs.relative_maps(maps, tfs.Baseline((-0.2, -0.1), "percent_change")).values.ravel()[:3]
    array([  0.,   0., 100.])
    """
    chosen = _checked(maps, baseline, conditions)
    window = window_samples(maps.times, baseline, "maps, baseline window")
    names = [maps.conditions[place] for place in chosen]
    counts = None if maps.trial_counts is None else maps.trial_counts[names]
    values = np.empty((len(maps.subjects), len(chosen), *maps.values.shape[2:]))
    lost: dict[str, NDArray[np.bool_]] = {}
    problems = Problems()
    for row, subject in enumerate(maps.subjects):
        power = maps.values[row].astype(np.float64)
        if counts is not None:
            with problems.gathering():
                problem = TrialCounting().problem(baseline, subject, counts.loc[subject].to_dict())
                if problem is not None:
                    raise InputError(problem)
        trials = None if counts is None else counts.loc[subject].to_numpy(dtype=np.float64)
        level, spread = _reference(power, maps, baseline, chosen, window, trials)
        usable = np.isfinite(level) if spread is None else np.isfinite(level) & np.isfinite(spread)
        for name, there in zip(names, usable):
            if not there.any():
                problems.found.append(str(no_finite_baseline(subject, baseline, f'the baseline of condition "{name}"')))
        lost[subject] = np.logical_not(np.all(usable, axis=0))
        if spread is None:
            values[row] = ratio_in_unit(power[chosen] / level[..., None], baseline.unit)
        else:
            values[row] = (power[chosen] - level[..., None]) / spread[..., None]
    problems.raise_if_any()
    return maps._changed(
        values=values,
        conditions=names,
        unit=baseline.unit,
        trial_counts=counts,
        baseline=baseline,
        history=_history(maps, baseline),
        cautions=(*maps.cautions, *_cautions(baseline, counts, lost, maps.frequencies)),
    )


def _reference(
    power: Floats,
    maps: ConditionMaps,
    baseline: Baseline,
    chosen: Sequence[int],
    window: slice,
    trials: Floats | None,
) -> tuple[Floats, Floats | None]:
    """Level, and for z scores SD, of the baseline of each condition chosen: (conditions, channels, frequencies)."""
    if baseline.reference == "named":
        curves = power[[maps.conditions.index(str(baseline.reference_condition))] * len(chosen)][..., window]
    elif baseline.reference == "own":
        curves = power[chosen][..., window]
    else:
        assert trials is not None
        weights = np.where(np.isnan(power[chosen][..., window]), 0.0, trials[:, None, None, None])
        total = np.nansum(weights * power[chosen][..., window], axis=0)
        with np.errstate(invalid="ignore", divide="ignore"):
            pooled = total / weights.sum(axis=0)
        curves = np.broadcast_to(pooled, (len(chosen), *pooled.shape))
    if baseline.mean_kind == "geometric":
        level = np.exp(masked_mean(np.log(curves), axis=-1))
    else:
        level = masked_mean(curves, axis=-1)
    if baseline.unit != "z_score":
        return level, None
    samples = np.count_nonzero(~np.isnan(curves), axis=-1)
    squares = np.nansum((curves - level[..., None]) ** 2, axis=-1)
    return level, usable_deviation(np.sqrt(squares / np.maximum(samples - 1, 1)), samples)


def _checked(maps: ConditionMaps, baseline: Baseline, conditions: Iterable[object] | None) -> list[int]:
    problems = Problems()
    if not isinstance(maps, ConditionMaps):
        problems.add(f"{WHERE}, maps", "ConditionMaps", type(maps).__name__, "make them with ConditionMaps(...)")
    if not isinstance(baseline, Baseline):
        problems.add(f"{WHERE}, baseline", "a Baseline", type(baseline).__name__, "make one with Baseline(...)")
    problems.raise_if_any()
    if maps.unit != "power" or maps.of_differences:
        got = "differences of power" if maps.of_differences else f'unit "{maps.unit}"'
        problems.add(f"{WHERE}, maps", 'averaged linear power (unit "power")', got, 'give power, unit "power"')
    if baseline.unit == "none":
        problems.add(
            f"{WHERE}, baseline",
            'unit "decibel", "percent_change", "ratio" or "z_score"',
            '"none"',
            "choose a unit, or use the maps as they are",
        )
    elif baseline.order != "average_first" or baseline.within is not None:
        got = f'order "{baseline.order}"' if baseline.order != "average_first" else f'within "{baseline.within}"'
        problems.add(
            f"{WHERE}, baseline",
            'order "average_first" and no trial column within which references are made, since the trials are averaged already',
            got,
            "use condition_maps with the single trials",
        )
    named = baseline.reference_condition
    if named is not None and named not in maps.conditions:
        problems.add(
            f"{WHERE}, reference_condition",
            f"one of {listed(maps.conditions)}",
            f'"{named}"',
            "use the spelling of the maps or another reference",
        )
    if baseline.reference == "pooled" and maps.trial_counts is None:
        problems.add(
            f"{WHERE}, trial_counts",
            'the number of trials behind each map for reference "pooled", in which each trial weighs the same',
            "None",
            'give the maps their trial_counts, or use reference "own" or "named"',
        )
    chosen = [place for place, name in enumerate(maps.conditions) if name != named]
    if conditions is not None:
        with problems.gathering():
            chosen = label_positions(conditions, maps.conditions, f"{WHERE}, conditions", of="condition")
    if not chosen:
        problems.add(
            f"{WHERE}, conditions", "at least one besides the reference condition", "none", "name the conditions wanted"
        )
    problems.raise_if_any()
    return chosen


def _history(maps: ConditionMaps, baseline: Baseline) -> tuple[str, ...]:
    """The sentence about averaging without a baseline gives way to the one about this baseline."""
    without = Baseline(unit="none").describe()
    if without in maps.history:
        return tuple(baseline.describe() if sentence == without else sentence for sentence in maps.history)
    return (*maps.history, baseline.describe())


def _cautions(
    baseline: Baseline,
    counts: pd.DataFrame | None,
    lost: dict[str, NDArray[np.bool_]],
    frequencies: Floats,
) -> list[str]:
    cautions = bias_of_counts(counts) if baseline.unit == "decibel" and counts is not None else []
    for subject, absent in lost.items():
        everywhere = absent.all(axis=0)
        cautions += lost_baselines(subject, frequencies[everywhere], int(np.count_nonzero(absent[:, ~everywhere])))
    return cautions
