"""One corrected p for each of several contrasts, bands or channel groups that share their relabellings."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.contrasts.contrast import CIRCULAR_SHIFT, SHUFFLE, SHUFFLED_CONDITIONS, Contrast
from tfstats.corrections.p_values import tie_tolerance
from tfstats.foundations.errors import Problems, refusal
from tfstats.results.contrast_result import ContrastResult

__all__ = ["family_of_tests"]

Floats = NDArray[np.float64]


def family_of_tests(results: Mapping[str, ContrastResult]) -> pd.DataFrame:
    """Which of several contrasts holds when all of them are looked at?

    Each contrast enters with one p, that of its largest cluster (or point).  A relabelling is one for all of them, so
    their dependence is kept: the smallest p over the contrasts is compared with the smallest p of each relabelling.

    Parameters
    ----------
    results : mapping of name to ContrastResult
        Tests that share subjects and relabellings: the same units in the same order, scheme, blocks, seed, alternative
        and number of relabellings, set before the test (not "until_resolved").  Corrections may differ;
        FalseDiscoveryRate enters with its largest point.

    Returns
    -------
    DataFrame
        contrast, p (of the contrast alone, counted), p_family (corrected over the family), in the order given.

    Raises
    ------
    InputError
        Fewer than two results, results whose relabellings differ (what differs is named) or were drawn until resolved.

    Notes
    -----
    Step-down minimum p (Westfall & Young 1993, Resampling-Based Multiple Testing, algorithm 2.8): the i-th smallest p
    is compared with the minimum over itself and all larger ones, and kept monotone.  Holds the family-wise error in the strong
    sense where the null of each contrast does not depend on the truth of the others.  No randomness; cost is one sort a contrast.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.random.default_rng(1).normal(size=(9, 3, 1, 1, 1)), subjects=list("ABCDEFGHI"),
    ...     conditions=["2", "4", "6"], channels=["Fz"], frequencies=[6], times=[0.0], unit="decibel")
    >>> tests = {name: tfs.permutation_test(tfs.paired(maps, name, "2"), tfs.MaxStatistic()) for name in ("4", "6")}
    >>> tfs.family_of_tests(tests).columns.tolist()
    ['contrast', 'p', 'p_family']
    """
    if not isinstance(results, Mapping) or len(results) < 2:
        raise refusal(
            "family_of_tests", "a mapping of name to at least two results", repr(results)[:60], "name each result"
        )
    _refuse_other_relabellings(results)
    p = np.stack([_p_of_rows(result) for result in results.values()], axis=1)
    corrected = _step_down_minimum(p)
    return pd.DataFrame({"contrast": list(results), "p": p[0], "p_family": corrected})


def _refuse_other_relabellings(results: Mapping[str, ContrastResult]) -> None:
    problems = Problems()
    first_name, first = next(iter(results.items()))
    for name, result in results.items():
        if not isinstance(result, ContrastResult):
            problems.add(
                f'family_of_tests, "{name}"', "a ContrastResult", type(result).__name__, "run permutation_test first"
            )
            continue
        if result.record.sequential:
            problems.add(
                f'family_of_tests, "{name}"', "a number of relabellings that was set before",
                f"{result.record.rows}, drawn until resolved", "give permutations as a whole number",
            )  # fmt: skip
        for what, ours, theirs in _shared_by_all(first, result):
            if ours != theirs:
                problems.add(
                    f'family_of_tests, "{name}"',
                    f'the {what} of "{first_name}" ({_short(ours)})',
                    _short(theirs),
                    "test them with the same subjects and settings",
                )
    problems.raise_if_any()


def _shared_by_all(first: ContrastResult, other: ContrastResult) -> list[tuple[str, object, object]]:
    one, two = first.contrast, other.contrast
    compared: list[tuple[str, object, object]] = [
        (f"{one.unit_kind}s", one.unit_names, two.unit_names),
        ("relabellings", one.relabelling.kind, two.relabelling.kind),
        ("blocks", one.relabelling.blocks, two.relabelling.blocks),
        ("number of relabellings", first.null.size, other.null.size),
        ("enumeration", first.enumerated, other.enumerated),
        ("seed", first.record.seed, other.record.seed),
        ("alternative", first.record.alternative, other.record.alternative),
    ]
    if one.relabelling.kind == two.relabelling.kind == CIRCULAR_SHIFT:
        compared.append(("names of blocks", one.relabelling.block_names, two.relabelling.block_names))
    if one.relabelling.kind == two.relabelling.kind == SHUFFLED_CONDITIONS:
        compared.append(("conditions", one.conditions, two.conditions))
    if first.enumerated and other.enumerated and one.relabelling.kind == two.relabelling.kind == SHUFFLE:
        # All allocations of one grouping are visited in an order that belongs to that grouping.
        compared.append(("groups", _allocated(one), _allocated(two)))
    return compared


def _allocated(contrast: Contrast) -> tuple[int, ...] | None:
    """Who is in which group, where only that is shuffled; None where the order of all units is."""
    if contrast.labels is None or contrast.nuisance is not None:
        return None
    return tuple(contrast.labels.tolist())


def _short(value: object) -> str:
    if isinstance(value, tuple):
        return f"{len(value)}: {', '.join(str(part) for part in value[:4])}{' ...' if len(value) > 4 else ''}"
    return str(value)


def _p_of_rows(result: ContrastResult) -> Floats:
    """For each relabelling the share of relabellings at least as extreme."""
    null = result.null
    tolerance = tie_tolerance(result.contrast.values.dtype)
    ordered = np.sort(null)
    below = np.searchsorted(ordered, null - tolerance * np.abs(null), side="left")
    return np.asarray((null.size - below) / null.size)


def _step_down_minimum(p: Floats) -> Floats:
    order = np.argsort(p[0], kind="stable")
    ordered = p[:, order]
    minima = np.minimum.accumulate(ordered[:, ::-1], axis=1)[:, ::-1]
    shares = (minima <= ordered[0] * (1.0 + 1e-12)).mean(axis=0)
    corrected = np.empty(shares.size)
    corrected[order] = np.maximum.accumulate(shares)
    return corrected
