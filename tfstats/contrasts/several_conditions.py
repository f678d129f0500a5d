"""F over two or more conditions within subjects, main effects and interactions of factors."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from tfstats.averaged_maps import ConditionMaps
from tfstats.contrasts.compared_values import checked_maps
from tfstats.contrasts.contrast import (
    F_OF_FLIPS,
    F_OF_SHUFFLED_CONDITIONS,
    SHUFFLED_CONDITIONS,
    SIGN_FLIPS,
    Contrast,
    Relabelling,
)
from tfstats.contrasts.within_subject import mean_over_units
from tfstats.foundations.axes import label_positions, label_text
from tfstats.foundations.checks import one_of
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.units import symbol_of

__all__ = ["orthonormal_contrasts", "repeated_measures"]

Floats = NDArray[np.float64]
SCHEMES = ("signs", "labels")


def orthonormal_contrasts(levels: int) -> Floats:
    """(levels - 1, levels): each level against the mean of those before it (Helmert), rows orthonormal."""
    rows = np.zeros((levels - 1, levels))
    for row in range(levels - 1):
        rows[row, : row + 1] = -1.0
        rows[row, row + 1] = row + 1.0
    return rows / np.linalg.norm(rows, axis=1, keepdims=True)


def repeated_measures(
    maps: ConditionMaps,
    conditions: Sequence[str] | None = None,
    *,
    factors: Mapping[str, Sequence[str]] | None = None,
    effect: str | None = None,
    scheme: str = "signs",
) -> Contrast:
    """Does power differ anywhere among two or more conditions within subjects?

    Says that conditions differ, not which; follow up with `paired`, `trend` or `weighted`.

    Parameters
    ----------
    maps : ConditionMaps
    conditions : sequence of str, optional
        The conditions compared; None: all of the maps, or all cells of `factors`.
    factors : mapping of factor to its levels, optional
        Condition labels are the levels joined by "/", in the order of the factors:
        {"load": ["2", "4"], "memory": ["recalled", "missed"]} means "2/recalled", "2/missed", "4/recalled", "4/missed".
    effect : str, optional
        A factor ("load") or an interaction of any size ("load:memory").
    scheme : "signs" or "labels"
        "signs": each subject's vector of orthonormal contrasts is multiplied by 1 or -1, valid under any
        covariance when that vector is symmetric about zero.  "labels": the condition labels are shuffled within each
        subject; this tests that the conditions have identical distributions, variances included, not only equal means.

    Returns
    -------
    Contrast

    Raises
    ------
    InputError
        Unknown conditions, factors or effects, a subject without a condition (both named), labels for an interaction.

    Notes
    -----
    Univariate F with (k - 1) and (n - 1)(k - 1) degrees of freedom; no sphericity is assumed by the relabelling.  Factors: the
    contrasts of the effect's factors, averaged over the other factors.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(8, 3, 1, 1, 1)), subjects=list("ABCDEFGH"),
    ...     conditions=["2", "4", "6"], channels=["Fz"], frequencies=[6], times=[0.0], unit="decibel")
    >>> tfs.repeated_measures(maps).components.shape
    (2, 3)
    """
    design = "repeated_measures"
    checked_maps(maps, design)
    problems = Problems()
    with problems.gathering():
        one_of(scheme, SCHEMES, f"{design}, scheme")
    if factors is None and effect is not None:
        problems.add(
            f"{design}, effect", "factors that it belongs to", repr(effect), 'give factors = {"load": ["2", "4"]}'
        )
    if factors is not None and conditions is not None:
        problems.add(design, "conditions or factors", "both", "leave one out")
    problems.raise_if_any()
    if factors is None:
        chosen = maps.conditions if conditions is None else tuple(label_text(label) for label in conditions)
        components, cells, words = (
            orthonormal_contrasts(len(chosen)) if len(chosen) > 1 else None,
            None,
            ", ".join(chosen),
        )
    else:
        chosen, components, cells, words = _of_factors(factors, effect, scheme, design)
    if components is None or len(set(chosen)) != len(chosen):
        raise refusal(design, "at least two different conditions", listed(chosen), "name the conditions")
    places = label_positions(chosen, maps.conditions, design, of="condition")
    values = np.ascontiguousarray(maps.values[:, places])
    _refuse_missing_cells(values, maps.subjects, chosen, design)
    if scheme == "labels" and cells is not None:
        # Levels of the factor, averaged over the other factors: labels are then shuffled over levels.
        values = np.ascontiguousarray(np.tensordot(values, cells, axes=(1, 1)).transpose(0, 4, 1, 2, 3))
        chosen = tuple(label_text(level) for level in (factors or {})[effect or ""])
        components = orthonormal_contrasts(len(chosen))
    return Contrast(
        design=design,
        values=values,
        unit_names=maps.subjects,
        unit_kind="subject",
        channels=maps.channels,
        frequencies=maps.frequencies,
        times=maps.times,
        unit=maps.unit,
        statistic=F_OF_FLIPS if scheme == "signs" else F_OF_SHUFFLED_CONDITIONS,
        relabelling=Relabelling(SIGN_FLIPS if scheme == "signs" else SHUFFLED_CONDITIONS),
        null_hypothesis=(
            f"The subjects' contrasts of {words} are symmetric about zero."
            if scheme == "signs"
            else f"The conditions {words} have identical distributions within each subject."
        ),
        alternatives={"two-sided": f"The means of {words} are not all equal."},
        difference=f"F over {words}" if factors is None else f"{effect} (F)",
        condition_means={label: mean_over_units(values[:, place]) for place, label in enumerate(chosen)},
        condition_values={label: values[:, place] for place, label in enumerate(chosen)},
        history=(
            *maps.history,
            f"The conditions {', '.join(chosen)} in {symbol_of(maps.unit)} were compared within {len(maps.subjects)} subjects"
            + (f" for the effect {effect}." if factors is not None else "."),
        ),
        cautions=maps.cautions,
        trial_counts=None
        if maps.trial_counts is None
        else maps.trial_counts[[maps.conditions[place] for place in places]],
        components=components,
        conditions=tuple(chosen),
    )


def _of_factors(
    factors: Mapping[str, Sequence[str]], effect: str | None, scheme: str, design: str
) -> tuple[tuple[str, ...], Floats | None, Floats | None, str]:
    """Condition labels, the effect's orthonormal contrasts, the averages for one factor's levels, and words."""
    problems = Problems()
    levels = {name: [label_text(level) for level in values] for name, values in factors.items()}
    for name, labels in levels.items():
        if len(labels) < 2 or len(set(labels)) != len(labels):
            problems.add(
                f'{design}, factor "{name}"', "at least two different levels", listed(labels), "name its levels"
            )
    named = [] if effect is None else [part.strip() for part in str(effect).split(":")]
    unknown = [name for name in named if name not in levels]
    if not named or unknown or len(set(named)) != len(named):
        problems.add(
            f"{design}, effect",
            f'one of the factors {listed(levels)}, or several joined by ":"',
            repr(effect),
            "name a main effect or an interaction",
        )
    if scheme == "labels" and len(named) > 1:
        problems.add(
            f"{design}, scheme",
            '"signs" for an interaction',
            '"labels"',
            "labels of one factor alone can be shuffled; use signs",
        )
    problems.raise_if_any()
    components: Floats = np.ones((1, 1))
    averages: Floats = np.ones((1, 1))
    for name, labels in levels.items():
        size = len(labels)
        flat: Floats = np.ones((1, size))
        part = orthonormal_contrasts(size) if name in named else np.asarray(flat / np.sqrt(size))
        components = np.asarray(np.kron(components, part), dtype=np.float64)
        averages = np.asarray(np.kron(averages, np.eye(size) if name in named else flat / size), dtype=np.float64)
    chosen = tuple("/".join(cell) for cell in itertools.product(*levels.values()))
    words = " x ".join(f"{name} ({', '.join(levels[name])})" for name in named)
    return chosen, components, averages, words


def _refuse_missing_cells(
    values: NDArray[np.floating], subjects: Sequence[str], conditions: Sequence[str], design: str
) -> None:
    problems = Problems()
    there = np.isfinite(values).any(axis=(2, 3, 4))
    for unit, place in np.argwhere(~there):
        problems.add(
            f"{design}, subject {subjects[unit]}",
            f'values in condition "{conditions[place]}"',
            "none that is finite",
            "leave out the subject or the condition",
        )
    problems.raise_if_any()
