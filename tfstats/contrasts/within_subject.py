"""Designs that compare conditions within each subject: sign flips of one compared value a subject.

Under the null hypothesis the compared values of the subjects are symmetric about zero, so the sign of each is
arbitrary (Fisher 1935, The Design of Experiments).
"""

from __future__ import annotations

import warnings
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.contrasts.compared_values import checked_maps, checked_weights, combined_values, weights_in_words
from tfstats.contrasts.contrast import ONE_SAMPLE_T, SIGN_FLIPS, Contrast, Relabelling
from tfstats.foundations.axes import label_positions, label_text
from tfstats.foundations.errors import Problems, refusal
from tfstats.foundations.units import symbol_of, unchanged_value
from tfstats.normalization import averaging_for_chance, chance_problem

if TYPE_CHECKING:
    from tfstats.foundations.axes import Floats

__all__ = ["against_zero", "interaction", "paired", "mean_over_units", "trend", "weighted"]


def paired(maps: ConditionMaps, first: str, second: str) -> Contrast:
    """Does power differ between two conditions within subjects?

    The compared value of each subject is `first` - `second` at each channel, frequency and time; the null
    distribution comes from flipping its sign.  Not for different people in the two conditions.

    Parameters
    ----------
    maps : ConditionMaps
        Relative power, (subjects, conditions, channels, frequencies, times).
    first, second : str
        Two of `maps.conditions`.

    Returns
    -------
    Contrast
        In the unit of the maps.  No randomness; cost and memory are one copy of the difference.

    Raises
    ------
    InputError
        A label that is not among the conditions, or the same label twice.

    Notes
    -----
    Paired t with sign flips: Fisher 1935; for maps, Maris & Oostenveld 2007, J. Neurosci. Methods 164:177.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> values = np.random.default_rng(1).normal(size=(8, 2, 1, 3, 4))
    >>> maps = tfs.ConditionMaps(values, subjects=[f"S{i}" for i in range(8)], conditions=["recalled", "missed"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="decibel")
    >>> tfs.paired(maps, "recalled", "missed")
    <Contrast paired: recalled - missed, 8 subjects, 1 channels x 3 frequencies x 4 times, dB>
    """
    first, second = label_text(first), label_text(second)
    if first == second:
        raise refusal(
            "paired", "two different conditions", f'"{first}" twice', "name the condition it is compared with"
        )
    return _combination(maps, {first: 1.0, second: -1.0}, design="paired", difference=f"{first} - {second}")


def against_zero(maps: ConditionMaps, condition: str) -> Contrast:
    """Does one condition's power differ from its baseline?

    The compared value of each subject is the relative power itself (for ratios: less 1).  Only units and orders
    whose mean is zero under no change are accepted; the refusal names the remedy.  Not for comparing
    conditions: two significant tests against zero, or one and not the other, say nothing about their difference.

    Parameters
    ----------
    maps : ConditionMaps
        Relative power.  Maps without a recorded baseline are accepted with a caution.
    condition : str
        One of `maps.conditions`.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        An unknown condition; unit "none"; a unit and order whose mean under no change is not zero (single-trial
        decibels against a linear baseline mean, single-trial percent change); decibels that were averaged as
        decibels over channels, frequencies or times.

    Notes
    -----
    The decibel of a noisy trial lies 2.5 dB below the decibel of the mean on average (mean of the logarithm of a
    chi-square with 2 df), which is why the order of averaging and dividing decides what may be tested.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(8, 1, 1, 3, 4)), subjects=list("ABCDEFGH"),
    ...     conditions=["recalled"], channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3],
    ...     unit="percent_change")
    >>> tfs.against_zero(maps, "recalled").estimate_unit
    '%'
    """
    checked_maps(maps, "against_zero")
    condition = label_text(condition)
    cautions = () if maps.of_differences else _checked_against_chance(maps)
    unchanged = 0.0 if maps.of_differences else unchanged_value(maps.unit)
    return _combination(
        maps,
        {condition: 1.0},
        design="against_zero",
        difference=f"{condition} against baseline",
        less=unchanged,
        cautions=cautions,
    )


def _checked_against_chance(maps: ConditionMaps) -> tuple[str, ...]:
    """Refuse relative power whose mean is not zero under no change; cautions where that cannot be known."""
    problems = Problems()
    cautions: tuple[str, ...] = ()
    if maps.unit in ("none", "power"):
        problems.add(
            "against_zero",
            "relative power",
            f'unit "{maps.unit}"',
            "give a Baseline with a unit, power itself is never zero",
        )
    elif maps.baseline is None:
        cautions = (
            "The maps carry no record of their baseline: whether their mean is zero under no change could not be checked.",
        )
    else:
        problem = chance_problem(maps.baseline)
        if problem is not None:
            problems.found.append(problem)
    # Which average of decibels is unbiased depends on the baseline mean: of ratios against an arithmetic one.
    valid = averaging_for_chance(maps.baseline) if maps.baseline is not None else "ratios"
    if maps.unit == "decibel" and any(of != valid for _, of in maps.averaged_by):
        kinds = {
            "ratios": 'averaged as the decibel of the mean ratio (of="ratios")',
            "units": 'averaged over points as decibels (of="units")',
        }
        other = "units" if valid == "ratios" else "ratios"
        problems.add(
            "against_zero",
            f"decibels {kinds[valid]}",
            f"decibels {kinds[other]}, whose bias does not shrink by averaging",
            f'average with mean_across(..., of="{valid}")',
        )
    problems.raise_if_any()
    return cautions


def weighted(maps: ConditionMaps, weights: Mapping[str, float]) -> Contrast:
    """Does a weighted combination of conditions differ from zero within subjects?

    Parameters
    ----------
    maps : ConditionMaps
    weights : mapping of condition to number
        Used as given; conditions that are not named weigh nothing.  Weights that do not sum to zero make a test
        against the baseline, with the same restrictions as `against_zero`.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        Unknown conditions, weights that are not finite or are all zero, and what `against_zero` refuses where
        the weights do not sum to zero.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(8, 3, 1, 1, 1)), subjects=list("ABCDEFGH"),
    ...     conditions=["2", "4", "6"], channels=["Fz"], frequencies=[6], times=[0.0], unit="decibel")
    >>> tfs.weighted(maps, {"6": 1, "4": -0.5, "2": -0.5}).difference
    '1 x 6 - 0.5 x 4 - 0.5 x 2'
    """
    checked = checked_weights(weights, "weighted")
    sums_to_zero = abs(sum(checked.values())) <= 1e-9 * sum(abs(weight) for weight in checked.values())
    cautions: tuple[str, ...] = ()
    checked_maps(maps, "weighted")
    if not sums_to_zero and not maps.of_differences:
        cautions = _checked_against_chance(maps)
    total = sum(checked.values())
    return _combination(
        maps,
        checked,
        design="weighted",
        difference=weights_in_words(checked),
        less=0.0 if sums_to_zero or maps.of_differences else total * unchanged_value(maps.unit),
        cautions=cautions,
    )


def trend(maps: ConditionMaps, levels: Mapping[str, float]) -> Contrast:
    """Does power rise or fall with the level of the conditions, within subjects?

    The compared value is each subject's least-squares slope over the levels.

    Parameters
    ----------
    maps : ConditionMaps
    levels : mapping of condition to number
        At least two conditions with two different levels, such as {"2": 2, "4": 4, "6": 6}.

    Returns
    -------
    Contrast
        In the unit of the maps per unit of level.

    Raises
    ------
    InputError
        Unknown conditions, fewer than two different levels.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> values = np.arange(3.0).reshape(1, 3, 1, 1, 1) * 2 + np.random.default_rng(0).normal(size=(9, 1, 1, 1, 1))
    >>> maps = tfs.ConditionMaps(values, subjects=list("ABCDEFGHI"), conditions=["2", "4", "6"], channels=["Fz"],
    ...     frequencies=[6], times=[0.0], unit="decibel")
    >>> contrast = tfs.trend(maps, {"2": 2, "4": 4, "6": 6})
    >>> contrast.estimate_unit, float(contrast.values.mean().round(6))
    ('dB per unit of level', 1.0)
    """
    checked = checked_weights(levels, "trend", all_zero_is_wrong=False)
    spread = np.array(list(checked.values()))
    if len(checked) < 2 or np.ptp(spread) == 0:
        raise refusal(
            "trend", "at least two different levels", f"{list(checked.values())}", "give each condition its level"
        )
    centred = spread - spread.mean()
    slopes = dict(zip(checked, centred / np.sum(centred**2)))
    return _combination(
        maps,
        slopes,
        design="trend",
        difference="slope over " + ", ".join(f"{name} = {level:g}" for name, level in checked.items()),
        per=" per unit of level",
    )


def interaction(maps: ConditionMaps, first: Sequence[str], second: Sequence[str]) -> Contrast:
    """Is one difference of conditions larger than another, within subjects?

    The compared value is (a1 - a2) - (b1 - b2).  In decibels it is a ratio of ratios, in percent a difference of
    percents: an interaction in one unit need not be one in the other.

    Parameters
    ----------
    maps : ConditionMaps
    first, second : pairs of str
        (a1, a2) and (b1, b2), conditions of the maps.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        Not two pairs, unknown conditions, or a combination in which everything cancels.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> labels = ["low/recalled", "low/missed", "high/recalled", "high/missed"]
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(8, 4, 1, 1, 1)), subjects=list("ABCDEFGH"),
    ...     conditions=labels, channels=["Fz"], frequencies=[6], times=[0.0], unit="decibel")
    >>> tfs.interaction(maps, ("high/recalled", "high/missed"), ("low/recalled", "low/missed")).difference
    '(high/recalled - high/missed) - (low/recalled - low/missed)'
    """
    problems = Problems()
    pairs: list[tuple[str, ...]] = []
    for where, pair in (("interaction, first pair", first), ("interaction, second pair", second)):
        labels = () if isinstance(pair, str) else tuple(label_text(label) for label in pair)
        if len(labels) != 2 or len(set(labels)) != 2:
            problems.add(where, "two different conditions", repr(pair), 'write ("first", "second")')
        pairs.append(labels)
    problems.raise_if_any()
    (a1, a2), (b1, b2) = pairs
    weights: dict[str, float] = {}
    for label, weight in ((a1, 1.0), (a2, -1.0), (b1, -1.0), (b2, 1.0)):
        weights[label] = weights.get(label, 0.0) + weight
    weights = {label: weight for label, weight in weights.items() if weight}
    if not weights:
        raise refusal(
            "interaction", "two different differences", "the same pair twice", "name the pair it is compared with"
        )
    return _combination(maps, weights, design="interaction", difference=f"({a1} - {a2}) - ({b1} - {b2})")


def _combination(
    maps: ConditionMaps,
    weights: Mapping[str, float],
    *,
    design: str,
    difference: str,
    less: float = 0.0,
    per: str = "",
    cautions: tuple[str, ...] = (),
) -> Contrast:
    """The contrast of one weighted combination of conditions in each subject."""
    checked_maps(maps, design)
    places = label_positions(weights, maps.conditions, design, of="condition")
    values = combined_values(maps.values, places, list(weights.values()), less)
    what = "zero change from baseline" if design == "against_zero" else "a difference of zero"
    against = difference if design != "against_zero" else f"{next(iter(weights))}"
    return Contrast(
        design=design,
        values=values,
        unit_names=tuple(maps.subjects),
        unit_kind="subject",
        channels=tuple(maps.channels),
        frequencies=maps.frequencies,
        times=maps.times,
        unit=maps.unit,
        statistic=ONE_SAMPLE_T,
        relabelling=Relabelling(SIGN_FLIPS),
        null_hypothesis=f"The subjects' values of {against} are symmetric about {what}.",
        alternatives={
            "two-sided": f"The values of {against} are shifted to either side of {what}.",
            "greater": f"The values of {against} are shifted above {what}.",
            "less": f"The values of {against} are shifted below {what}.",
        },
        difference=difference,
        condition_means={maps.conditions[place]: mean_over_units(maps.values[:, place]) for place in places},
        condition_values={maps.conditions[place]: maps.values[:, place] for place in places},
        per=per,
        history=(*maps.history, _value_in_words(difference, maps, per)),
        cautions=(*maps.cautions, *cautions),
        trial_counts=None
        if maps.trial_counts is None
        else maps.trial_counts[[maps.conditions[place] for place in places]],
    )


def _value_in_words(difference: str, maps: ConditionMaps, per: str) -> str:
    return (
        f"The compared value of each subject was {difference} in {symbol_of(maps.unit)}{per} "
        f"(n = {len(maps.subjects)} subjects)."
    )


def mean_over_units(values: NDArray[np.floating]) -> Floats:
    """Mean over the first axis of what is there; NaN where nothing is."""
    # A point that no subject has is NaN in the mean, which is what it is: no warning.
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)
        return np.asarray(np.nanmean(values, axis=0), dtype=np.float64)
