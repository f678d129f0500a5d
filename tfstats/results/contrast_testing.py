"""`permutation_test`: plan, collect the null, correct over the plane, wrap."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

import tfstats
from tfstats.contrasts.contrast import Contrast
from tfstats.corrections import Correction
from tfstats.corrections.p_values import tie_tolerance
from tfstats.corrections.stopping_rule import GRID, RESAMPLING_RISK, boundaries_on_grid
from tfstats.corrections.tail_approximation import fitted_tail
from tfstats.foundations.thread_count import usable_threads
from tfstats.permutation.schemes import Rows, smallest_p
from tfstats.permutation.sign_flip_engine import Summary, Tail
from tfstats.results.contrast_result import ContrastResult, TestRecord
from tfstats.results.corrected_maps import ObservedMap, observed_map, result_of
from tfstats.results.planned_tests import UNTIL_RESOLVED, Permutations, PlannedTest, planned_test

__all__ = ["permutation_test"]

Floats = NDArray[np.float64]

SUMMARIES: dict[str, Summary] = {
    "maximum": "maximum",
    "false_discovery": "maximum",
    "cluster_mass": "mass",
    "cluster_extent": "extent",
    "threshold_free": "enhanced",
}
"""What one relabelling contributes to the null, by the correction's kind."""


def permutation_test(
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
    threads: int | None = None,
    progress: bool | Callable[[int, int], None] = False,
) -> ContrastResult:
    """Where on the channel, frequency and time plane do the compared values differ from the null hypothesis?

    Parameters
    ----------
    contrast : Contrast
        From `paired`, `against_zero`, `trialwise` ...
    correction : ClusterMass, ClusterExtent, ThresholdFree, MaxStatistic or FalseDiscoveryRate
    permutations : int or "until_resolved"
        Rows of the null distribution: row 0 is the observed labelling, the others are drawn; or all distinct
        relabellings when they are no more than this.  "until_resolved": drawn until every cluster (or point) is on one
        side of alpha with a resampling risk of 0.001 for all of them together (Gandy 2009, J. Am. Stat. Assoc.
        104:1504), looked at every 250 draws.  Intervals of p are then confidence sequences.  Not with
        FalseDiscoveryRate, nor with tail_approximation.
    most_permutations : int or None
        Where "until_resolved" stops all the same; None: 100,000.
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
    tail_approximation : bool
        Whether p-values up to .1 come from a generalised Pareto fit to the tail of the null (Winkler et al. 2016,
        NeuroImage 141:502), where its fit is not rejected; never below the smallest attainable p.
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
    plan = planned_test(
        contrast, correction, permutations=permutations, most_permutations=most_permutations, alternative=alternative,
        alpha=alpha, seed=seed, adjacency=adjacency, fewest_subjects=fewest_subjects, robust=robust,
        tail_approximation=tail_approximation,
    )  # fmt: skip
    rows = plan.rows
    observed = observed_map(plan, correction.kind, alternative)
    sequential = permutations == UNTIL_RESOLVED
    collect = _Collector(plan, correction, alternative, usable_threads(threads))
    with _reported(progress, rows.count) as report:
        if sequential:
            null, unresolved, unresolved_p = _until_resolved(collect, observed, contrast, float(alpha), report)
        else:
            null, unresolved, unresolved_p = collect(0, rows.count, report), 0, None
    record = TestRecord(
        correction=correction,
        permutations=rows.count if sequential else int(permutations),
        alternative=alternative,
        alpha=float(alpha),
        seed=int(seed),
        rows=null.size,
        distinct=rows.distinct,
        enumerated=rows.enumerated,
        exact=rows.exact,
        smallest_p=rows.smallest_p,
        threshold=plan.threshold,
        joined_channels=None if adjacency is None else len(plan.edges),
        version=tfstats.__version__,
        fewest_subjects=None if fewest_subjects is None else int(fewest_subjects),
        robust=robust,
        sequential=sequential,
        unresolved=unresolved,
        unresolved_p=unresolved_p,
        tail_asked=tail_approximation,
        least_p=smallest_p(contrast, alternative),
    )
    if tail_approximation and not rows.enumerated:
        record = replace(record, tail_fit=fitted_tail(null, record.seed))
    return result_of(contrast, plan, observed, record, null)


class _Collector:
    """Parts of the null distribution of a planned test: rows first, ..., last - 1."""

    def __init__(self, plan: PlannedTest, correction: Correction, alternative: Tail, threads: int) -> None:
        self.plan, self.correction, self.alternative, self.threads = plan, correction, alternative, threads

    def __call__(self, first: int, last: int, progress: Callable[[int], None] | None) -> Floats:
        plan = self.plan
        rows = plan.rows if last - first == plan.rows.count else _part_of(plan.rows, first, last)
        return plan.prepared.null(
            rows,
            summary=SUMMARIES[self.correction.kind],
            tail=self.alternative,
            critical=plan.critical,
            edges=plan.edges,
            threads=self.threads,
            exponents=plan.exponents,
            progress=progress,
        )


def _part_of(rows: Rows, first: int, last: int) -> Rows:
    """Rows first, ..., last - 1 as rows of their own.  Row 0 leads each part: engines take group sizes from it."""
    if first == 0:
        return replace(rows, count=last)

    def make(start: int, stop: int) -> Any:
        inside = rows(max(start, 1) - 1 + first, stop - 1 + first) if stop > max(start, 1) else rows(0, 0)
        return np.concatenate([rows(0, 1), inside]) if start == 0 else inside

    return replace(rows, count=last - first + 1, make=make)


def _until_resolved(
    collect: _Collector,
    observed: ObservedMap,
    contrast: Contrast,
    alpha: float,
    report: Callable[[int], None] | None,
) -> tuple[Floats, int, tuple[float, float] | None]:
    """The null up to the look at which all is resolved; how much is not when the rows run out, and between which p.

    All clusters (or points) are compared with one null, so that their counts keep the order of their sizes at every look.
    If a cluster crosses the wrong boundary, so has the one of its side whose p is closest to alpha: half the risk for each
    side serves them all.
    """
    compared = observed.compared[np.isfinite(observed.compared)]
    lowered = compared - tie_tolerance(contrast.values.dtype) * np.abs(compared)
    values, of_value = np.unique(lowered, return_inverse=True)
    total = collect.plan.rows.count
    side = np.zeros(values.size, dtype=np.int8)
    null = np.empty(0)
    draws = 0
    for draws, low, high in boundaries_on_grid(alpha, RESAMPLING_RISK / min(max(values.size, 1), 2), total - 1):
        if null.size <= draws:
            # Larger parts the longer it takes, since each has a cost of its own; what lies past the last look is cut off.
            end = min(total, 1 + GRID * -(-max(draws, null.size + null.size // 4) // GRID))
            null = np.concatenate([null, collect(null.size, end, None)[1 if null.size else 0 :]])
        waiting = np.flatnonzero(side == 0)
        counts = _draws_at_least(null[1 : draws + 1], values[waiting])
        side[waiting] = np.where(counts <= low, -1, np.where(counts >= high, 1, 0))
        if report is not None:
            report(draws + 1)
        if side.all():
            break
    null = null[: draws + 1]
    p = (_draws_at_least(null[1:], values) + 1) / null.size
    # Draws made for one cluster may carry the p of another, resolved before, across alpha: that one is resolved no more.
    still_open = (side == 0) | ((side < 0) != (p <= alpha))
    if not still_open.any():
        return null, 0, None
    return null, int(still_open[of_value].sum()), (float(p[still_open].min()), float(p[still_open].max()))


def _draws_at_least(draws: Floats, values: Floats) -> NDArray[np.int64]:
    return np.asarray(draws.size - np.searchsorted(np.sort(draws), values, side="left"))


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
