"""One test as the kernels see it, and the null, the counts and the map that follow from its relabellings.

A `RelabellingJob` holds the values, the design code and what stays the same over all relabellings.  The functions
here go
panel by panel of relabellings; each row of relabellings writes its own slot, so that neither the threads nor the
size of a panel
nor the order of work can change a byte.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from tfstats.kernels.enhancement import enhancement_workspace, largest_enhanced
from tfstats.kernels.relabelling_panels import (
    panel_at_least,
    panel_maps,
    panel_maxima,
    panel_of_runs,
    summaries_of_lists,
)
from tfstats.kernels.runs import run_lists, run_workspace
from tfstats.kernels.signed_sums import group_sizes, table_rows
from tfstats.kernels.vector_instructions import wide_vectors
from tfstats.permutation.row_panels import Progress, RowSource, row_panels, run_in_threads

__all__ = [
    "LARGEST_T",
    "SUMMARY_CODES",
    "TAIL_CODES",
    "RelabellingJob",
    "edge_array",
    "job_counts",
    "job_map",
    "job_null",
]

LARGEST_T = 1e6

SUMMARY_CODES: dict[str, int] = {"maximum": 0, "mass": 1, "extent": 2, "enhanced": 3}
TAIL_CODES: dict[str, int] = {"two-sided": 0, "greater": 1, "less": 2}

_LIST_BYTES = 48 * 2**20
_MOST_ROWS = 1024


def _no_fit() -> NDArray[np.float64]:
    return np.zeros((2, 3))


@dataclass(frozen=True)
class RelabellingJob:
    """Values, design and constants of one test.

    values (units, components, points); shape of the map; groups: group sizes, or for flips of several components the
    number of units; counts: units present at each point; flips_of: rows of relabellings -> (code sets, rows, units)
    uint8 flips.
    """

    design: int
    values: NDArray[np.float32] | NDArray[np.float64]
    shape: tuple[int, int, int]
    groups: NDArray[np.float64]
    counts: NDArray[np.float64]
    flips_of: Callable[[NDArray[np.uint8]], NDArray[np.uint8]]
    fit: NDArray[np.float64] = field(default_factory=_no_fit)

    def sizes(self) -> NDArray[np.int64]:
        return group_sizes(len(self.values))

    def codes(self, rows: NDArray[np.uint8]) -> NDArray[np.int32]:
        flips = self.flips_of(rows)
        sizes = self.sizes()
        codes = np.empty((*flips.shape[:2], len(sizes)), np.int32)
        for part, out in zip(flips, codes, strict=True):
            table_rows(np.ascontiguousarray(part), sizes, out)
        return codes

    def arguments(self, rows: NDArray[np.uint8]) -> tuple[object, ...]:
        """What every panel kernel begins with."""
        codes = self.codes(rows)
        return (self.design, self.values, codes, self.sizes(), self.counts, self.groups, LARGEST_T, self.fit)


def edge_array(edges: NDArray[np.integer] | None) -> NDArray[np.int64]:
    """Pairs of channels as the kernels take them; None joins no channels."""
    return np.zeros((0, 2), np.int64) if edges is None else np.ascontiguousarray(edges, np.int64).reshape(-1, 2)


def job_null(
    job: RelabellingJob,
    rows: RowSource,
    total: int,
    *,
    summary: int,
    tail: int,
    critical: NDArray[np.float64],
    edges: NDArray[np.int64],
    threads: int,
    exponents: tuple[float, float],
    progress: Progress | None,
) -> NDArray[np.float64]:
    """One extremeness a relabelling: largest statistic, cluster mass, cluster extent or enhanced value."""
    null = np.full(total, np.nan)
    points = job.values.shape[2]
    local = threading.local()
    wide = wide_vectors()
    # A panel needs enough rows to pay for its tables, and there should be work for every thread.
    panel = max(16, min(_MOST_ROWS, -(-total // (4 * threads))))
    most_maps = max(1, min(panel, _LIST_BYTES // (8 * points)))

    def maxima(piece: tuple[int, NDArray[np.uint8]]) -> int:
        first, part = piece
        panel_maxima(*job.arguments(part), tail, null[first : first + len(part)])
        return len(part)

    def enhanced(piece: tuple[int, NDArray[np.uint8]]) -> int:
        first, part = piece
        if not hasattr(local, "enhancing"):
            local.enhancing = enhancement_workspace(job.shape)
            local.maps = np.empty((most_maps, points))
        maps = local.maps[: len(part)]
        panel_maps(*job.arguments(part), maps)
        for row in range(len(part)):
            null[first + row] = largest_enhanced(maps[row].reshape(job.shape), tail, *exponents, edges, local.enhancing)
        return len(part)

    def clusters(piece: tuple[int, NDArray[np.uint8]]) -> int:
        first, part = piece
        done = 0
        while done < len(part):
            room = getattr(local, "room", points // 64 + 64)
            most = max(1, min(_MOST_ROWS, _LIST_BYTES // (16 * room)))
            if getattr(local, "made", None) != (room, most):
                local.lists = run_lists(most, room)
                local.space = run_workspace(room, job.shape)
                local.made = (room, most)
            some = part[done : done + most]
            lists = tuple(array[: len(some)] for array in local.lists)
            times = job.shape[2]
            needed = panel_of_runs(*job.arguments(some), critical, tail, times, *lists)
            if needed > room:
                local.room = needed + needed // 4
                continue
            out = null[first + done : first + done + len(some)]
            summaries_of_lists(*lists, times, job.shape[1] * times, edges, summary == 2, wide, local.space, out)
            done += len(some)
        return len(part)

    if summary == SUMMARY_CODES["enhanced"]:
        run_in_threads(enhanced, row_panels(rows, total, most_maps), threads, progress)
    else:
        task = maxima if summary == SUMMARY_CODES["maximum"] else clusters
        run_in_threads(task, row_panels(rows, total, panel), threads, progress)
    return null


def job_map(job: RelabellingJob, row: NDArray[np.uint8]) -> NDArray[np.float64]:
    """The statistic map (channels, frequencies, times) of one relabelling."""
    out = np.full((1, job.values.shape[2]), np.nan)
    panel_maps(*job.arguments(np.ascontiguousarray(row, np.uint8).reshape(1, -1)), out)
    return out.reshape(job.shape)


def _ratio_bounds(job: RelabellingJob, limits: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Ratios (with sign) below which the statistic is under its limit, and from which on it is not.

    They are one for t and F.  A Welch score lies between those of the fewest and the most degrees of freedom; what
    is between is looked at.
    """
    if job.design in (3, 4):
        return limits, limits
    if job.design != 2:
        bound = limits * np.abs(limits)
        return bound, bound
    fewest, most = max(1.0, job.groups.min() - 1.0), job.groups.sum() - 2.0
    tail = stats.norm.sf(np.abs(limits))
    many, few = (np.where(tail > 0, stats.t.isf(tail, df), np.inf) for df in (most, fewest))
    low, high = np.minimum(many, few) * (1.0 - 1e-6), np.maximum(many, few) * (1.0 + 1e-6)
    # In the deepest tails there is no telling; from the largest t on there is nothing to tell.
    low, high = np.minimum(low, np.abs(limits) * (1.0 - 1e-6)), np.minimum(high, LARGEST_T)
    least = np.where(limits > 0, low * low, -high * high)
    sure = np.where(limits > 0, high * high, -low * low)
    return least, sure


def job_counts(
    job: RelabellingJob,
    rows: RowSource,
    total: int,
    *,
    tail: int,
    tolerance: float,
    threads: int,
    progress: Progress | None,
) -> NDArray[np.int64]:
    """How many relabellings are at each point at least as extreme as row 0, row 0 included."""
    _first, observed_row = next(row_panels(rows, total, 1))
    observed = job_map(job, observed_row[0]).reshape(-1)
    if tail == TAIL_CODES["two-sided"]:
        observed = np.abs(observed)
    elif tail == TAIL_CODES["less"]:
        observed = -observed
    limits = observed - tolerance * np.abs(observed)
    least, sure = _ratio_bounds(job, limits)
    tallies = np.zeros(len(observed), np.int64)
    lock = threading.Lock()

    def work(piece: tuple[int, NDArray[np.uint8]]) -> int:
        _start, part = piece
        own = np.zeros(len(observed), np.int64)
        panel_at_least(*job.arguments(part), tail, limits, least, sure, own)
        # Whole numbers: the order in which the threads add does not matter.
        with lock:
            tallies.__iadd__(own)
        return len(part)

    panel = max(16, min(_MOST_ROWS, -(-total // (4 * threads))))
    run_in_threads(work, row_panels(rows, total, panel), threads, progress)
    return tallies.reshape(job.shape)
