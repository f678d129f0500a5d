"""Designs that compare subjects with each other: groups and covariates, by shuffling over subjects."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.contrasts.compared_values import (
    block_codes,
    check_model,
    checked_maps,
    compared_combination,
    numeric_column,
    table_column,
)
from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    F_OF_GROUPS,
    F_OF_REGRESSION,
    POOLED_T,
    REGRESSION_T,
    SHUFFLE,
    WELCH_SCORE,
    Contrast,
    Relabelling,
    Statistic,
)
from tfstats.contrasts.within_subject import mean_over_units
from tfstats.foundations.axes import label_text
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.units import symbol_of

__all__ = ["between_groups", "several_groups", "slope"]

LARGE_SD_RATIO = 1.5


def between_groups(
    maps: ConditionMaps,
    column: str,
    first: str,
    second: str,
    *,
    condition: str | None = None,
    combine: Mapping[str, float] | None = None,
    nuisance: Sequence[str] = (),
    blocks: str | None = None,
    equal_variance: bool = False,
) -> Contrast:
    """Does power differ between two groups of people?

    Parameters
    ----------
    maps : ConditionMaps
        With a participants table.
    column : str
        Column of `maps.participants` with the group labels.
    first, second : str
        The groups compared, first - second; subjects of other groups are left out.
    condition, combine
        What is compared: one condition, or {condition: weight}; weights that sum to zero ask for group x condition.
    nuisance : columns of numbers
        Covariates that are taken out (Freedman & Lane 1983; p-values then hold approximately).
    blocks : column, optional
        Site or batch: subjects are shuffled within it, and its means are taken out.
    equal_variance : bool
        False: Welch's t turned into a normal score through its own degrees of freedom.  True: pooled t.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        Columns, labels or values that are not there (all at once), fewer than two subjects in a group, covariates
        that leave no degrees of freedom or that determine the groups.

    Notes
    -----
    A group difference in one condition depends on each group's baseline power; a difference of conditions in decibels
    does not.  Welch 1947, Biometrika 34:28; Janssen 1997, Statistics & Probability Letters 36:9; Winkler et al. 2014,
    NeuroImage 92:381; blocks: Winkler et al. 2015, NeuroImage 123:253.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tfstats as tfs
    >>> people = pd.DataFrame({"participant_id": list("ABCDEFGH"), "group": ["patient"] * 4 + ["control"] * 4})
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(8, 1, 1, 2, 3)), subjects=list("ABCDEFGH"),
    ...     conditions=["rest"], channels=["Fz"], frequencies=[4, 8], times=[0.0, 0.1, 0.2], unit="decibel",
    ...     participants=people)
    >>> tfs.between_groups(maps, "group", "patient", "control").label_names
    ('patient', 'control')
    """
    design = "between_groups"
    checked_maps(maps, design)
    first, second = label_text(first), label_text(second)
    if first == second:
        raise refusal(design, "two different groups", f'"{first}" twice', "name the group it is compared with")
    problems = Problems()
    kept, members = _subjects_in(maps, column, (first, second), design, problems)
    values, words, conditions = _gathered(problems, maps, condition, combine, design)
    covariates, names = _covariates(maps, kept, nuisance, design, problems)
    relabelling = _relabelling(maps, kept, blocks, design, problems)
    problems.raise_if_any()
    labels = np.array([member == first for member in members], dtype=np.uint8)
    adjusted = bool(names) or blocks is not None
    check_model(labels.astype(np.float64), covariates, relabelling, design, column, of="subject")
    statistic: Statistic
    if adjusted:
        statistic = REGRESSION_T if equal_variance else ADJUSTED_WELCH_SCORE
    else:
        statistic = POOLED_T if equal_variance else WELCH_SCORE
    compared = np.ascontiguousarray(values[kept])
    history, cautions = _groups_in_words(maps, compared, labels, (first, second), words, names, blocks, conditions)
    groups = f"{first} and {second}"
    return Contrast(
        design=design,
        values=compared,
        unit_names=tuple(maps.subjects[row] for row in kept),
        unit_kind="subject",
        channels=maps.channels,
        frequencies=maps.frequencies,
        times=maps.times,
        unit=maps.unit,
        statistic=statistic,
        relabelling=relabelling,
        null_hypothesis=f"{words} has the same distribution in {groups}.",
        alternatives={
            "two-sided": f"The mean of {words} differs between {groups}.",
            "greater": f"The mean of {words} is larger in {first} than in {second}.",
            "less": f"The mean of {words} is smaller in {first} than in {second}.",
        },
        difference=f"{first} - {second} ({words})",
        labels=labels,
        label_names=(first, second),
        condition_means={name: mean_over_units(compared[labels == code]) for name, code in ((first, 1), (second, 0))},
        history=history,
        cautions=cautions,
        trial_counts=_counts(maps, kept, conditions),
        nuisance=covariates if names else None,
        nuisance_names=names,
    )


def several_groups(
    maps: ConditionMaps,
    column: str,
    groups: Sequence[str] | None = None,
    *,
    condition: str | None = None,
    combine: Mapping[str, float] | None = None,
    blocks: str | None = None,
) -> Contrast:
    """Does power differ anywhere among two or more groups of people?  F, shuffled over subjects.

    Says that groups differ, not which; follow up with `between_groups`.

    Parameters
    ----------
    maps : ConditionMaps
        With a participants table.
    column : str
        Column of `maps.participants` with the group labels.
    groups : sequence of str, optional
        The groups compared; None: all, sorted.
    condition, combine, blocks
        As in `between_groups`.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        Fewer than two groups, a group of fewer than two subjects, and what `between_groups` refuses.

    Notes
    -----
    One-way F (Fisher 1925); exact only where the groups have the same distribution under the null, spread included.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tfstats as tfs
    >>> people = pd.DataFrame({"participant_id": list("ABCDEF"), "age": ["young", "middle", "old"] * 2})
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(6, 1, 1, 1, 1)), subjects=list("ABCDEF"),
    ...     conditions=["rest"], channels=["Fz"], frequencies=[6], times=[0.0], unit="decibel", participants=people)
    >>> tfs.several_groups(maps, "age").label_names
    ('middle', 'old', 'young')
    """
    design = "several_groups"
    checked_maps(maps, design)
    problems = Problems()
    if groups is None:
        with problems.gathering():
            texts = table_column(maps.participants, column, design, maps.subjects, of="subject")
            groups = sorted(set(texts))
    names = tuple(dict.fromkeys(label_text(name) for name in groups or ()))
    kept: list[int] = []
    members: list[str] = []
    if not problems.found:
        if len(names) < 2:
            problems.add(f'{design}, column "{column}"', "at least two groups", listed(names), "name the groups")
        kept, members = _subjects_in(maps, column, names, design, problems)
    values, words, conditions = _gathered(problems, maps, condition, combine, design)
    relabelling = _relabelling(maps, kept, blocks, design, problems)
    problems.raise_if_any()
    labels = np.array([names.index(member) for member in members], dtype=np.uint8)
    compared = np.ascontiguousarray(values[kept])
    sizes = ", ".join(f"{name} n = {members.count(name)}" for name in names)
    return Contrast(
        design=design,
        values=compared,
        unit_names=tuple(maps.subjects[row] for row in kept),
        unit_kind="subject",
        channels=maps.channels,
        frequencies=maps.frequencies,
        times=maps.times,
        unit=maps.unit,
        statistic=F_OF_GROUPS if blocks is None else F_OF_REGRESSION,
        relabelling=relabelling,
        null_hypothesis=f"{words} has the same distribution in the groups {', '.join(names)}.",
        alternatives={"two-sided": f"The mean of {words} is not the same in all groups."},
        difference=f"groups {', '.join(names)} ({words})",
        labels=labels,
        label_names=names,
        condition_means={name: mean_over_units(compared[labels == code]) for code, name in enumerate(names)},
        history=(
            *maps.history,
            f"The compared value of each subject was {words} in {symbol_of(maps.unit)}; groups: {sizes}."
            + (f" Means of {blocks} were taken out." if blocks else ""),
        ),
        cautions=(
            *maps.cautions,
            *_baseline_caution(maps, conditions),
            *_spread_caution(_typical_spreads(compared, labels), len({members.count(name) for name in names}) > 1),
        ),
        trial_counts=_counts(maps, kept, conditions),
    )


def slope(
    maps: ConditionMaps,
    covariate: str,
    *,
    condition: str | None = None,
    combine: Mapping[str, float] | None = None,
    nuisance: Sequence[str] = (),
    blocks: str | None = None,
    rank: bool = False,
) -> Contrast:
    """Does power rise or fall with a covariate across people?

    Parameters
    ----------
    maps : ConditionMaps
        With a participants table.
    covariate : str
        Column of numbers, continuous or ordered.
    condition, combine, nuisance, blocks
        As in `between_groups`.
    rank : bool
        Replace values and covariate by their ranks over subjects before anything is taken out.

    Returns
    -------
    Contrast
        Estimate: slope per unit of the covariate; effect size: (partial) correlation r.

    Raises
    ------
    InputError
        A covariate that is constant or determined by the nuisance covariates, missing values, too few subjects.

    Notes
    -----
    Freedman & Lane 1983, J. Bus. Econ. Stat. 1:292, with the pivotal t (Winkler et al. 2014, NeuroImage 92:381).

    Examples
    --------
    >>> import numpy as np, pandas as pd, tfstats as tfs
    >>> people = pd.DataFrame({"participant_id": list("ABCDEFGH"), "score": range(8)})
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(8, 1, 1, 1, 1)), subjects=list("ABCDEFGH"),
    ...     conditions=["rest"], channels=["Fz"], frequencies=[6], times=[0.0], unit="decibel", participants=people)
    >>> tfs.slope(maps, "score").estimate_unit
    'dB per unit of score'
    """
    design = "slope"
    checked_maps(maps, design)
    problems = Problems()
    numbers = np.zeros(len(maps.subjects))
    with problems.gathering():
        numbers = numeric_column(maps.participants, covariate, design, maps.subjects, of="subject")
    values, words, conditions = _gathered(problems, maps, condition, combine, design)
    everyone = list(range(len(maps.subjects)))
    covariates, names = _covariates(maps, everyone, nuisance, design, problems)
    relabelling = _relabelling(maps, everyone, blocks, design, problems)
    problems.raise_if_any()
    check_model(numbers, covariates, relabelling, design, covariate, of="subject")
    taken_out = [*names, *([blocks] if blocks else [])]
    return Contrast(
        design=design,
        values=np.ascontiguousarray(values),
        unit_names=tuple(maps.subjects),
        unit_kind="subject",
        channels=maps.channels,
        frequencies=maps.frequencies,
        times=maps.times,
        unit="rank" if rank else maps.unit,
        statistic=REGRESSION_T,
        relabelling=relabelling,
        null_hypothesis=f"{words} is unrelated to {covariate} over subjects.",
        alternatives={
            "two-sided": f"{words} rises or falls with {covariate}.",
            "greater": f"{words} rises with {covariate}.",
            "less": f"{words} falls with {covariate}.",
        },
        difference=f"slope on {covariate} ({words})",
        per=f" per {'rank' if rank else 'unit'} of {covariate}",
        condition_means={words: mean_over_units(values)},
        history=(
            *maps.history,
            f"The compared value of each subject was {words} in {symbol_of(maps.unit)} (n = {len(everyone)} subjects), "
            f"related to {covariate}{' by ranks' if rank else ''}"
            + (f", with {', '.join(taken_out)} taken out (Freedman & Lane 1983)." if taken_out else "."),
        ),
        cautions=(*maps.cautions, *_baseline_caution(maps, conditions)),
        trial_counts=_counts(maps, everyone, conditions),
        predictor=numbers,
        predictor_name=covariate,
        nuisance=covariates if names else None,
        nuisance_names=names,
        rank=rank,
    )


def _gathered(
    problems: Problems, maps: ConditionMaps, condition: str | None, combine: Mapping[str, float] | None, design: str
) -> tuple[NDArray[np.floating], str, tuple[str, ...]]:
    with problems.gathering():
        return compared_combination(maps, condition, combine, design)
    return maps.values[:, 0], "", ()


def _subjects_in(
    maps: ConditionMaps, column: str, groups: Sequence[str], design: str, problems: Problems
) -> tuple[list[int], list[str]]:
    """Rows and labels of the subjects in the groups; a group of fewer than two is refused."""
    texts: list[str] = []
    with problems.gathering():
        texts = table_column(maps.participants, column, design, maps.subjects, of="subject")
    if not texts:
        return [], []
    for group in groups:
        if texts.count(group) < 2:
            problems.add(
                f'{design}, column "{column}"',
                f'at least two subjects in group "{group}"',
                f"{texts.count(group)} (groups there: {listed(set(texts))})",
                "use the spelling of the participants table",
            )
    kept = [row for row, text in enumerate(texts) if text in groups]
    return kept, [texts[row] for row in kept]


def _covariates(
    maps: ConditionMaps, kept: Sequence[int], nuisance: Sequence[str], design: str, problems: Problems
) -> tuple[NDArray[np.float64], tuple[str, ...]]:
    """Columns of numbers of the subjects compared; what the others lack is of no account."""
    names = (nuisance,) if isinstance(nuisance, str) else tuple(nuisance)
    table, subjects = _rows_of(maps, kept)
    columns = []
    for name in names:
        with problems.gathering():
            columns.append(numeric_column(table, name, f"{design}, nuisance", subjects, of="subject"))
    return (np.stack(columns, axis=1) if columns else np.zeros((len(subjects), 0))), names


def _relabelling(
    maps: ConditionMaps, kept: Sequence[int], blocks: str | None, design: str, problems: Problems
) -> Relabelling:
    if blocks is None:
        return Relabelling(SHUFFLE)
    table, subjects = _rows_of(maps, kept)
    with problems.gathering():
        codes, names = block_codes(table_column(table, blocks, f"{design}, blocks", subjects, of="subject"))
        return Relabelling(SHUFFLE, codes, names)
    return Relabelling(SHUFFLE)


def _rows_of(maps: ConditionMaps, kept: Sequence[int]) -> tuple[pd.DataFrame | None, list[str]]:
    table = None if maps.participants is None else maps.participants.iloc[list(kept)]
    return table, [maps.subjects[row] for row in kept]


def _groups_in_words(
    maps: ConditionMaps,
    values: NDArray[np.floating],
    labels: NDArray[np.uint8],
    names: tuple[str, str],
    words: str,
    nuisance: Sequence[str],
    blocks: str | None,
    conditions: Sequence[str],
) -> tuple[tuple[str, ...], tuple[str, ...]]:
    counts = (int(labels.sum()), int(labels.size - labels.sum()))
    spreads = [np.std(values[labels == code].astype(np.float64), axis=0, ddof=1) for code in (1, 0)]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = spreads[0] / spreads[1]
    ratio = float(np.nanmedian(ratios)) if np.isfinite(ratios).any() else np.nan
    taken_out = [*nuisance, *([blocks] if blocks else [])]
    history = [
        *maps.history,
        f"The compared value of each subject was {words} in {symbol_of(maps.unit)}, in {names[0]} (n = {counts[0]}) "
        f"and {names[1]} (n = {counts[1]})"
        + (f", with {', '.join(taken_out)} taken out (Freedman & Lane 1983)." if taken_out else "."),
    ]
    cautions = [*maps.cautions, *_baseline_caution(maps, conditions)]
    if np.isfinite(ratio):
        history.append(f"The ratio of the groups' standard deviations was {ratio:.2f} (median over points).")
        cautions.extend(_spread_caution([1.0, ratio], counts[0] != counts[1]))
    return tuple(history), tuple(cautions)


def _typical_spreads(values: NDArray[np.floating], labels: NDArray[np.uint8]) -> list[float]:
    """By group the median over points of the SD over people, relative to the pooled one."""
    groups = [np.std(values[labels == code].astype(np.float64), axis=0, ddof=1) for code in np.unique(labels)]
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.stack(groups) / np.sqrt(np.mean(np.square(groups), axis=0))
    return [float(np.nanmedian(part)) if np.isfinite(part).any() else 1.0 for part in relative]


def _spread_caution(spreads: Sequence[float], uneven: bool) -> tuple[str, ...]:
    """Groups of unequal spread are no longer exchangeable; the maximum over points feels it most."""
    ratio = max(spreads) / max(min(spreads), 1e-300)
    if ratio <= LARGE_SD_RATIO:
        return ()
    sizes = " and in size" if uneven else ""
    return (
        f"The groups differ in spread (ratio of SDs {ratio:.2f}){sizes}: p-values hold only approximately, and those of a "
        "maximum over points reject too often (simulated at .05, SD 2:1, 8 people a group: .11).",
    )


def _baseline_caution(maps: ConditionMaps, conditions: Sequence[str]) -> tuple[str, ...]:
    if len(conditions) != 1 or maps.unit == "power":
        return ()
    return (
        "People are compared on one condition in relative units: a difference in their baseline power would appear as "
        "an effect of the opposite sign.",
    )


def _counts(maps: ConditionMaps, kept: Sequence[int], conditions: Sequence[str]):  # type: ignore[no-untyped-def]
    if maps.trial_counts is None:
        return None
    return maps.trial_counts.iloc[list(kept)][list(conditions)]
