"""`permutation_test`: validate, collect the null, correct over the plane, wrap."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

import tfstats
from tfstats.contrasts.contrast import (
    ADJUSTED_WELCH_SCORE,
    ONE_SAMPLE_T,
    POOLED_T,
    REGRESSION_T,
    TRIMMED_T,
    WELCH_SCORE,
    Contrast,
)
from tfstats.corrections import Correction, FalseDiscoveryRate, ThresholdFree
from tfstats.corrections.false_discovery import adjusted_p
from tfstats.corrections.p_values import monte_carlo_interval, p_of_null, tie_tolerance
from tfstats.findings.cluster_tables import cluster_table
from tfstats.findings.effect_sizes import Effect, effect_of
from tfstats.foundations.checks import count, one_of, share
from tfstats.foundations.errors import InputError, Problems, listed, refusal
from tfstats.kernels.components import label_components, mark_beyond
from tfstats.kernels.enhancement import enhanced_map, enhancement_workspace
from tfstats.permutation.point_distributions import degrees_of_freedom, forming_threshold
from tfstats.permutation.prepared_tests import NO_EDGES, PreparedTest, prepared_test
from tfstats.permutation.schemes import Rows, planned_rows
from tfstats.permutation.sign_flip_engine import Summary, Tail
from tfstats.permutation.tested_points import as_tested
from tfstats.permutation.thread_count import usable_threads
from tfstats.results.cautions import cautions_of
from tfstats.results.contrast_result import ContrastResult, TestRecord, counted_point_p

__all__ = ["PlannedTest", "permutation_test", "planned_test"]

Floats = NDArray[np.float64]

STATISTIC_NAMES = {
    ONE_SAMPLE_T: "t",
    TRIMMED_T: "t (trimmed)",
    POOLED_T: "t (pooled)",
    REGRESSION_T: "t",
    WELCH_SCORE: "Welch score",
    ADJUSTED_WELCH_SCORE: "Welch score (adjusted)",
}
SUMMARIES: dict[str, Summary] = {
    "maximum": "maximum",
    "false_discovery": "maximum",
    "cluster_mass": "mass",
    "cluster_extent": "extent",
    "threshold_free": "enhanced",
}
"""What one relabelling contributes to the null, by the correction's kind."""

TAILS: tuple[Tail, ...] = ("two-sided", "greater", "less")
ROBUST = ("rank", "trimmed")


def permutation_test(
    contrast: Contrast,
    correction: Correction,
    *,
    permutations: int = 10_000,
    alternative: Tail = "two-sided",
    alpha: float = 0.05,
    seed: int = 0,
    adjacency: pd.DataFrame | None = None,
    fewest_subjects: int | None = None,
    robust: str | None = None,
    threads: int | None = None,
    progress: bool | Callable[[int, int], None] = False,
) -> ContrastResult:
    """Where on the channel, frequency and time plane do the compared values differ from the null hypothesis?

    Parameters
    ----------
    contrast : Contrast
        From `paired`, `against_zero`, `trialwise` ...
    correction : ClusterMass, ClusterExtent, ThresholdFree, MaxStatistic or FalseDiscoveryRate
    permutations : int
        Rows of the null distribution: row 0 is the observed labelling, the others are drawn; or all distinct
        relabellings when they are no more than this.
    alternative : "two-sided", "greater" or "less"
        F has no sign: its upper tail is meant by "two-sided", and the others are refused.
    alpha : float
        Level of the mask and of the refusal of tests that cannot reach it.
    seed : int
        Random numbers belong to (seed, name of the subject or trial, draw).
    adjacency : DataFrame of bool, names x names, or None
        Which channels are neighbours (`channel_adjacency`).  None: channels are not joined, and the result says so.
    fewest_subjects : int or None
        For sign-flip designs with gaps: a point is tested where at least so many subjects have a value, with n and
        the critical value by point.  None: where all have one.
    robust : None, "trimmed" or "rank"
        For sign-flip designs with skewed values or outliers: Yuen's t of the 20 % trimmed mean, or the signed rank,
        in the same flips.  Estimates and effect sizes stay those of the means.
    threads : int or None
        None: every CPU this process may use, lowered by OMP_NUM_THREADS or NUMBA_NUM_THREADS.  The result is the
        same to the byte for any number.
    progress : bool or callable(done, total)

    Returns
    -------
    ContrastResult

    Raises
    ------
    InputError
        Too few subjects or relabellings to reach alpha, constant data, an adjacency that lacks a channel, settings
        out of range; all mistakes of the settings at once.

    Notes
    -----
    p = share of relabellings, the observed one included, at least as extreme (Phipson & Smyth 2010).  Clusters:
    Maris & Oostenveld 2007.  Time grows with permutations x subjects x points; memory is bounded by about twice the
    compared values, whatever the number of permutations.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> values = np.random.default_rng(1).normal(size=(12, 2, 1, 3, 4))
    >>> maps = tfs.ConditionMaps(values, subjects=list("ABCDEFGHIJKL"), conditions=["recalled", "missed"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="decibel")
    >>> result = tfs.permutation_test(tfs.paired(maps, "recalled", "missed"), tfs.MaxStatistic(), seed=1)
    >>> result.enumerated, result.null.size
    (True, 2048)
    """
    planned = planned_test(
        contrast, correction, permutations=permutations, alternative=alternative, alpha=alpha, seed=seed,
        adjacency=adjacency, fewest_subjects=fewest_subjects, robust=robust,
    )  # fmt: skip
    edges, examined, prepared, rows = planned.edges, planned.examined, planned.prepared, planned.rows

    threshold, critical = _thresholds(examined, correction, alternative, prepared)
    with _reported(progress, rows.count) as report:
        null = prepared.null(
            rows,
            summary=SUMMARIES[correction.kind],
            tail=alternative,
            critical=critical,
            edges=edges,
            threads=usable_threads(threads),
            exponents=_exponents(contrast, correction),
            progress=report,
        )
    record = TestRecord(
        correction=correction,
        permutations=int(permutations),
        alternative=alternative,
        alpha=float(alpha),
        seed=int(seed),
        rows=rows.count,
        distinct=rows.distinct,
        enumerated=rows.enumerated,
        exact=rows.exact,
        smallest_p=rows.smallest_p,
        threshold=threshold,
        joined_channels=None if adjacency is None else len(edges),
        version=tfstats.__version__,
        fewest_subjects=None if fewest_subjects is None else int(fewest_subjects),
        robust=robust,
    )
    tested = _Tested(examined, prepared, prepared.observed(rows), critical, edges)
    return _wrapped(contrast, tested, record, null)


@dataclass(frozen=True)
class PlannedTest:
    """A test that may be run: what is examined, where it can be tested, and the relabellings."""

    edges: NDArray[np.int64]
    examined: Contrast
    prepared: PreparedTest
    rows: Rows


def planned_test(
    contrast: Contrast,
    correction: Correction,
    *,
    permutations: int = 10_000,
    alternative: Tail = "two-sided",
    alpha: float = 0.05,
    seed: int = 0,
    adjacency: pd.DataFrame | None = None,
    fewest_subjects: int | None = None,
    robust: str | None = None,
) -> PlannedTest:
    """Refuse all that `permutation_test` refuses, before the first relabelling."""
    _check_settings(contrast, correction, permutations, alternative, alpha, seed, fewest_subjects, robust)
    edges = joined_channels(contrast.channels, adjacency)
    examined = as_tested(contrast, robust)
    prepared = prepared_test(examined, fewest_subjects)
    rows = planned_rows(contrast, alternative, int(permutations), int(seed))
    if rows.smallest_p > alpha:
        raise _too_few(contrast, rows, alternative, alpha, int(permutations))
    return PlannedTest(edges, examined, prepared, rows)


@dataclass(frozen=True)
class _Tested:
    """What was tested, where it differs from the contrast: ranks or trimmed means, the map, thresholds by point."""

    contrast: Contrast
    prepared: PreparedTest
    statistic: Floats
    critical: Floats | float
    edges: NDArray[np.int64]


def _exponents(contrast: Contrast, correction: Correction) -> tuple[float, float]:
    return correction.exponents(is_f=contrast.is_f) if isinstance(correction, ThresholdFree) else (0.5, 2.0)


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
    alternative: object,
    alpha: object,
    seed: object,
    fewest_subjects: object,
    robust: object,
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
    with problems.gathering():
        count(permutations, "permutations", least=2, remedy="10000 gives p-values to about a tenth of .05")
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
        problems.add(
            "robust", expected, repr(robust), "leave it out, or use it with paired, against_zero, weighted ..."
        )
    if fewest_subjects is None:
        return
    with problems.gathering():
        count(fewest_subjects, "fewest_subjects", least=2, remedy="a t needs two values; leave it out for all subjects")
    if not one_sample or robust == "trimmed":
        problems.add(
            "fewest_subjects",
            "None for this design, in which every subject must be present at a point",
            repr(fewest_subjects),
            "leave it out, or use it with paired, against_zero, weighted ...",
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


def _too_few(contrast: Contrast, rows: Rows, alternative: str, alpha: float, permutations: int) -> InputError:
    where = f"{contrast.design}, {contrast.difference}"
    if rows.enumerated and contrast.relabelling.kind == "sign_flips":
        extra = 1 if alternative == "two-sided" else 0
        needed = int(np.ceil(np.log2(1.0 / alpha) - 1e-12)) + extra
        return refusal(
            where,
            f"enough {contrast.unit_kind}s for a p of {alpha:g}",
            f"{len(contrast.unit_names)}, whose smallest p is {rows.smallest_p:.4g} ({alternative})",
            f"at least {needed} {contrast.unit_kind}s are needed",
        )
    if rows.enumerated:
        return refusal(
            where,
            f"enough {contrast.unit_kind}s for a p of {alpha:g}",
            f"{rows.distinct} distinct relabellings, whose smallest p is {rows.smallest_p:.4g} ({alternative})",
            f"add {contrast.unit_kind}s until 1 over the number of relabellings is at most {alpha:g}",
        )
    return refusal(
        "permutations",
        f"enough relabellings for a p of {alpha:g}",
        f"{permutations}, whose smallest p is {rows.smallest_p:.4g}",
        f"ask for at least {int(np.ceil(1.0 / alpha))}, better 10000",
    )


class _reported:
    """A callable for the engine from the user's wish for progress: none, a bar on the terminal, or their own."""

    def __init__(self, progress: bool | Callable[[int, int], None], total: int) -> None:
        self.progress, self.total = progress, total
        self.bar: Any = None

    def __enter__(self) -> Callable[[int], None] | None:
        if callable(self.progress):
            tell = self.progress
            return lambda done: tell(done, self.total)
        if not self.progress:
            return None
        from rich.console import Console
        from rich.progress import Progress

        bar = Progress(console=Console(stderr=True), transient=True)
        self.bar = bar
        task = bar.add_task("relabellings", total=self.total)
        bar.start()
        return lambda done: bar.update(task, completed=done)

    def __exit__(self, *_: object) -> None:
        if self.bar is not None:
            self.bar.stop()


def _wrapped(contrast: Contrast, test: _Tested, record: TestRecord, null: Floats) -> ContrastResult:
    effect = effect_of(contrast, contrast.values.reshape(*contrast.values.shape[:-3], -1), intervals=False)
    statistic, tested = test.statistic, test.prepared.tested
    correction = record.correction
    tolerance = tie_tolerance(contrast.values.dtype)
    kept: dict[str, object] = {}
    if correction.clusterwise:
        labels, weights, masses = _observed_clusters(test, record)
        p = p_of_null(weights, null, tolerance)
        p_values = np.concatenate([[1.0], p])[labels]
        p_low, p_high = monte_carlo_interval(p, record.rows, record.enumerated)
    else:
        point_p, p_values = _point_p(contrast, test, record, null, tolerance)
        if point_p is not None:
            kept["point_p_values"] = point_p
        # Untested points carry NaN; at least as small as alpha is what the mask means.
        significant = np.isfinite(p_values) & (p_values <= record.alpha)
        beyond = np.where(significant, np.sign(statistic), 0).astype(np.int8)
        labels, masses = _by_mass(statistic, beyond, test.edges)
        p = np.array([p_values[labels == number].min() for number in range(1, masses.size + 1)])
        p_low, p_high = _point_interval(p, record)
    p_values = np.where(tested, p_values, np.nan)
    finite = np.isfinite(contrast.values)
    result = ContrastResult(
        contrast=contrast,
        record=record,
        statistic=statistic,
        p_values=p_values,
        estimate=np.where(
            tested | finite.all(axis=tuple(range(finite.ndim - 3))), effect.estimate.reshape(contrast.shape), np.nan
        ),
        effect_size=np.where(tested, effect.size.reshape(contrast.shape), np.nan),
        mask=np.isfinite(p_values) & (p_values <= record.alpha),
        null=null,
        clusters=cluster_table(contrast, statistic, labels, masses, p, p_low, p_high),
        cluster_labels=labels,
        statistic_name=_statistic_name(contrast, record.robust),
        df=_df(test.contrast, test, effect),
        effect_name=effect.name,
        subjects_at_point=_units_at_point(contrast, finite),
        kept=kept,
    )
    object.__setattr__(result, "cautions", cautions_of(result))
    return result


def _statistic_name(contrast: Contrast, robust: str | None) -> str:
    if contrast.is_f:
        return "F"
    return {"trimmed": "t (trimmed)", "rank": "t of signed ranks"}.get(
        robust or "", STATISTIC_NAMES[contrast.statistic]
    )


def _df(contrast: Contrast, test: _Tested, effect: Effect) -> float | tuple[float, float] | Floats:
    """One number (F: two); by point for Welch scores and where the number of subjects differs."""
    tested = test.prepared.tested
    if contrast.statistic in (WELCH_SCORE, ADJUSTED_WELCH_SCORE):
        return np.where(tested, effect.df.reshape(contrast.shape), np.nan)
    if not test.prepared.points.complete:
        return np.where(tested, test.prepared.points.units - 1.0, np.nan)
    return degrees_of_freedom(contrast)


def _units_at_point(contrast: Contrast, finite: NDArray[np.bool_]) -> NDArray[np.int64]:
    there = finite.all(axis=1) if contrast.components is not None else finite
    return np.asarray(there.sum(axis=0), dtype=np.int64)


def _observed_clusters(test: _Tested, record: TestRecord) -> tuple[NDArray[np.int32], Floats, Floats]:
    """Labels by falling mass, and by number what the correction weighs (mass or extent) and the mass."""
    statistic, points = test.statistic, test.prepared.points
    beyond = np.zeros(statistic.shape, dtype=np.int8)
    if np.ndim(test.critical):
        critical = np.asarray(test.critical)[points.units]
    else:
        critical = np.full(statistic.shape, float(test.critical))
    critical[~points.tested] = np.inf
    tail = TAILS.index("greater" if test.contrast.is_f else record.alternative)
    mark_beyond(statistic, critical, tail, beyond)
    labels, masses = _by_mass(statistic, beyond, test.edges)
    if record.correction.kind == "cluster_extent":
        return labels, np.bincount(labels.ravel(), minlength=masses.size + 1)[1:].astype(np.float64), masses
    return labels, masses, masses


def _by_mass(statistic: Floats, beyond: NDArray[np.int8], edges: NDArray[np.int64]) -> tuple[NDArray[np.int32], Floats]:
    """Connected components numbered from 1 by falling mass (equal masses keep the order of their first point)."""
    labels, number = label_components(statistic, beyond, edges)
    weight = np.where(labels > 0, np.abs(statistic), 0.0)
    masses = np.bincount(labels.ravel(), weights=weight.ravel(), minlength=number + 1)[1:]
    order = np.argsort(-masses, kind="stable")
    rank = np.zeros(number + 1, dtype=np.int32)
    rank[order + 1] = np.arange(1, number + 1, dtype=np.int32)
    return rank[labels], np.asarray(masses[order])


def _point_p(
    contrast: Contrast, test: _Tested, record: TestRecord, null: Floats, tolerance: float
) -> tuple[Floats | None, Floats]:
    """Uncorrected p (if it had to be computed) and corrected p of each point."""
    statistic = test.statistic
    tail = "greater" if contrast.is_f else record.alternative
    if isinstance(record.correction, ThresholdFree):
        space = enhancement_workspace(statistic.shape)
        exponents = _exponents(contrast, record.correction)
        lifted = enhanced_map(statistic, TAILS.index(tail), *exponents, test.edges, space)
        # No support at all is no evidence: such a point is as extreme as any relabelling without a cluster.
        corrected = p_of_null(np.nan_to_num(np.abs(lifted).ravel(), nan=0.0), null, tolerance)
        return None, corrected.reshape(statistic.shape)
    if isinstance(record.correction, FalseDiscoveryRate):
        point_p = counted_point_p(contrast, record)
        corrected = np.full(point_p.shape, np.nan)
        tested = np.isfinite(point_p)
        corrected[tested] = adjusted_p(point_p[tested], record.correction.method)
        return point_p, corrected
    extremeness = {"two-sided": np.abs(statistic), "greater": statistic, "less": -statistic}[record.alternative]
    corrected = p_of_null(np.nan_to_num(extremeness.ravel(), nan=0.0), null, tolerance).reshape(statistic.shape)
    return None, corrected


def _point_interval(p: Floats, record: TestRecord) -> tuple[Floats, Floats]:
    """Monte Carlo interval of a part's smallest p; an adjusted p from drawn relabellings has none of this kind."""
    if isinstance(record.correction, FalseDiscoveryRate):
        if record.enumerated or record.correction.p_values == "parametric":
            return p.copy(), p.copy()
        return np.full(p.shape, np.nan), np.full(p.shape, np.nan)
    return monte_carlo_interval(p, record.rows, record.enumerated)
