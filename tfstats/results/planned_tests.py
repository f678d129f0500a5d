"""What a test needs before its first relabelling: settings checked, points chosen, neighbours, rows, thresholds."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.contrasts.contrast import ONE_SAMPLE_T, Contrast
from tfstats.corrections import Correction, FalseDiscoveryRate, ThresholdFree
from tfstats.foundations.checks import count, one_of, share
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.permutation.point_distributions import forming_threshold
from tfstats.permutation.prepared_tests import NO_EDGES, PreparedTest, prepared_test
from tfstats.permutation.schemes import Rows, planned_rows, smallest_p
from tfstats.permutation.sign_flip_engine import Tail
from tfstats.permutation.tested_points import as_tested

__all__ = ["MOST_PERMUTATIONS", "Permutations", "PlannedTest", "TAILS", "UNTIL_RESOLVED", "planned_test"]

Floats = NDArray[np.float64]
Permutations = int | Literal["until_resolved"]

UNTIL_RESOLVED = "until_resolved"
MOST_PERMUTATIONS = 100_000
"""Where a test that runs until resolved stops all the same."""

TAILS: tuple[Tail, ...] = ("two-sided", "greater", "less")
ROBUST = ("rank", "trimmed")


@dataclass(frozen=True)
class PlannedTest:
    """A test that may be run: what is examined, where it can be tested, its neighbours, relabellings and thresholds."""

    examined: Contrast
    """The contrast as the statistic sees it: ranks or trimmed means where robust."""
    prepared: PreparedTest
    edges: NDArray[np.int64]
    rows: Rows
    threshold: float | None
    """Forming threshold with all units; None without clusters."""
    critical: Floats | float
    """What the engine takes: that threshold, or an array by number of units."""
    exponents: tuple[float, float]


def planned_test(
    contrast: Contrast,
    correction: Correction,
    *,
    permutations: Permutations = 10_000,
    most_permutations: int | None = None,
    alternative: Tail = "two-sided",
    alpha: float = 0.05,
    seed: int = 0,
    adjacency: pd.DataFrame | None = None,
    fewest_subjects: int | None = None,
    robust: str | None = None,
    tail_approximation: bool = False,
) -> PlannedTest:
    """Refuse all that `permutation_test` refuses, before the first relabelling."""
    _check_settings(
        contrast, correction, permutations, most_permutations, alternative, alpha, seed, fewest_subjects, robust,
        tail_approximation,
    )  # fmt: skip
    edges = joined_channels(contrast.channels, adjacency)
    examined = as_tested(contrast, robust)
    prepared = prepared_test(examined, fewest_subjects)
    sequential = permutations == UNTIL_RESOLVED
    asked = int(most_permutations or MOST_PERMUTATIONS) if sequential else int(permutations)
    rows = planned_rows(contrast, alternative, asked, int(seed), enumerate_all=not sequential)
    if rows.smallest_p > alpha:
        raise _too_few(contrast, rows, alternative, alpha, "most_permutations" if sequential else "permutations", asked)
    threshold, critical = _thresholds(examined, correction, alternative, prepared)
    exponents = correction.exponents(is_f=contrast.is_f) if isinstance(correction, ThresholdFree) else (0.5, 2.0)
    return PlannedTest(examined, prepared, edges, rows, threshold, critical, exponents)


def _thresholds(
    contrast: Contrast, correction: Correction, alternative: str, prepared: PreparedTest
) -> tuple[float | None, Floats | float]:
    """The forming threshold with all units, and what the engine takes: that, or an array by number of units."""
    if not correction.clusterwise:
        return None, np.inf
    forming_p = correction.forming_p  # type: ignore[attr-defined]
    threshold = forming_threshold(contrast, forming_p, alternative)
    if prepared.points.complete:
        return threshold, threshold
    by_units = np.full(len(contrast.unit_names) + 1, np.inf)
    for units in np.unique(prepared.points.units[prepared.tested]):
        if units >= 2:
            by_units[units] = forming_threshold(contrast, forming_p, alternative, float(units))
    return threshold, by_units


def _check_settings(
    contrast: object,
    correction: object,
    permutations: object,
    most_permutations: object,
    alternative: object,
    alpha: object,
    seed: object,
    fewest_subjects: object,
    robust: object,
    tail_approximation: object,
) -> None:
    problems = Problems()
    if not isinstance(contrast, Contrast):
        problems.add(
            "permutation_test, contrast", "a contrast", type(contrast).__name__, "make it with paired, against_zero ..."
        )
    if not isinstance(correction, Correction):
        problems.add(
            "permutation_test, correction",
            "ClusterExtent, ClusterMass, FalseDiscoveryRate, MaxStatistic or ThresholdFree",
            repr(correction),
            "write ClusterMass(forming_p=0.01)",
        )
    _check_permutations(permutations, most_permutations, correction, tail_approximation, problems)
    with problems.gathering():
        one_of(alternative, TAILS, "alternative", remedy="one-sided tests are fixed before seeing the data")
    with problems.gathering():
        share(alpha, "alpha")
    with problems.gathering():
        if count(seed, "seed", least=0) >= 2**64:
            raise refusal("seed", "a whole number below 2**64", seed, "choose a smaller one")
    if isinstance(contrast, Contrast):
        _check_for_design(contrast, alternative, fewest_subjects, robust, problems)
    problems.raise_if_any()


def _check_permutations(
    permutations: object, most_permutations: object, correction: object, tail_approximation: object, problems: Problems
) -> None:
    false_discovery = isinstance(correction, FalseDiscoveryRate)
    if isinstance(permutations, str):
        if permutations != UNTIL_RESOLVED:
            problems.add(
                "permutations", f'a whole number or "{UNTIL_RESOLVED}"', repr(permutations), "10000 is the usual number"
            )
        elif false_discovery:
            problems.add(
                "permutations", "a whole number for FalseDiscoveryRate, which has a p for every point", repr(permutations),
                "10000 is the usual number",
            )  # fmt: skip
    else:
        with problems.gathering():
            count(permutations, "permutations", least=2, remedy="10000 gives p-values to about a tenth of .05")
    if most_permutations is not None:
        with problems.gathering():
            count(most_permutations, "most_permutations", least=1000, remedy="100000 is the usual bound")
        if permutations != UNTIL_RESOLVED:
            problems.add(
                "most_permutations",
                f'None unless permutations = "{UNTIL_RESOLVED}"',
                repr(most_permutations),
                "leave it out",
            )
    if not isinstance(tail_approximation, bool) or (tail_approximation and false_discovery):
        expected = "False for FalseDiscoveryRate" if false_discovery else "True or False"
        problems.add("tail_approximation", expected, repr(tail_approximation), "leave it out")
    elif tail_approximation and permutations == UNTIL_RESOLVED:
        problems.add(
            "tail_approximation", f'False with permutations = "{UNTIL_RESOLVED}", whose decisions are counts', "True",
            "leave out one of the two",
        )  # fmt: skip


def _check_for_design(
    contrast: Contrast, alternative: object, fewest_subjects: object, robust: object, problems: Problems
) -> None:
    """Settings that only some designs can take."""
    if contrast.is_f and alternative in ("greater", "less"):
        problems.add(
            f"alternative for {contrast.design}",
            '"two-sided", the upper tail of F',
            repr(alternative),
            "F has no sign; leave it out",
        )
    one_sample = contrast.statistic == ONE_SAMPLE_T
    if robust is not None and (robust not in ROBUST or not one_sample):
        expected = (
            f"one of {listed(ROBUST)} or None" if one_sample else "None for a design without sign flips of one value"
        )
        problems.add("robust", expected, repr(robust), "leave it out, or use it with paired, against_zero or weighted")
    if fewest_subjects is None:
        return
    with problems.gathering():
        count(fewest_subjects, "fewest_subjects", least=2, remedy="a t needs two values; leave it out for all subjects")
    if not one_sample or robust == "trimmed":
        problems.add(
            "fewest_subjects",
            "None for this design, in which every subject must be present at a point",
            repr(fewest_subjects),
            "leave it out, or use it with paired, against_zero or weighted",
        )


def joined_channels(channels: tuple[str, ...], adjacency: pd.DataFrame | None) -> NDArray[np.int64]:
    """Pairs of neighbouring channels as positions, from a names x names table."""
    if adjacency is None:
        return NO_EDGES
    if not isinstance(adjacency, pd.DataFrame):
        raise refusal(
            "adjacency", "a table of channel names x channel names", type(adjacency).__name__, "use channel_adjacency"
        )
    missing = [name for name in channels if name not in adjacency.index or name not in adjacency.columns]
    if missing:
        raise InputError(
            f"adjacency: expected every channel of the data, got none of {listed(missing)}; add them to the electrode table."
        )
    matrix = adjacency.loc[list(channels), list(channels)].to_numpy(dtype=bool)
    if not np.array_equal(matrix, matrix.T):
        raise refusal("adjacency", "a symmetric table", "one-sided neighbours", "make both directions true")
    return np.argwhere(np.triu(matrix, 1)).astype(np.int64)


def _too_few(contrast: Contrast, rows: Rows, alternative: str, alpha: float, setting: str, asked: int) -> InputError:
    where = f"{contrast.design}, {contrast.difference}"
    # Drawn from so few that no number of draws could reach alpha, the subjects are what lacks.
    too_few_distinct = rows.enumerated or smallest_p(contrast, alternative) > alpha
    if too_few_distinct and contrast.relabelling.kind == "sign_flips":
        extra = 1 if alternative == "two-sided" else 0
        needed = int(np.ceil(np.log2(1.0 / alpha) - 1e-12)) + extra
        return refusal(
            where,
            f"enough {contrast.unit_kind}s for a p of {alpha:g}",
            f"{len(contrast.unit_names)}, whose smallest p is {rows.smallest_p:.4g} ({alternative})",
            f"at least {needed} {contrast.unit_kind}s are needed",
        )
    if too_few_distinct:
        return refusal(
            where,
            f"enough {contrast.unit_kind}s for a p of {alpha:g}",
            f"{rows.distinct} distinct relabellings, whose smallest p is {rows.smallest_p:.4g} ({alternative})",
            f"add {contrast.unit_kind}s until 1 over the number of relabellings is at most {alpha:g}",
        )
    return refusal(
        setting,
        f"enough relabellings for a p of {alpha:g}",
        f"{asked}, whose smallest p is {rows.smallest_p:.4g}",
        f"ask for at least {int(np.ceil(1.0 / alpha))}, better 10000",
    )
