"""The null distribution of a sign-flip test, from values and rows of flips.

All functions take values (units, channels, frequencies, times), C-contiguous float32 or float64 without NaN; a unit
that is
missing at a point has 0 there and `unit_counts` says how many are present; a point that is not tested is 0 in all
units.  Flips are rows of 0 (keep) and 1 (flip), an array (rows, units) uint8 or a callable rows(first, last) with
`number_of_rows`; row 0 is all zeros, the observed labelling, and goes through the same arithmetic as every other row.

The statistic is the one-sample t with the units present as its n.  Where the values of a point have no spread it is
`LARGEST_T` in size.
"""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from tfstats.kernels.point_sums import sums_of_squares
from tfstats.permutation.flip_job import flip_cluster_null, flip_job
from tfstats.permutation.relabelling_job import (
    LARGEST_T,
    SUMMARY_CODES,
    TAIL_CODES,
    RelabellingJob,
    edge_array,
    job_counts,
    job_map,
    job_null,
)
from tfstats.permutation.row_panels import Progress, RowSource, row_count

__all__ = ["LARGEST_T", "Summary", "Tail", "counts_at_least", "null_of_sign_flips", "statistic_of_flips"]

Summary = Literal["maximum", "mass", "extent", "enhanced"]
Tail = Literal["two-sided", "greater", "less"]

_Values = NDArray[np.float32] | NDArray[np.float64]


def _contiguous(values: _Values) -> Any:
    """Values in C order, so that a kernel has one signature for each kind of float."""
    return np.ascontiguousarray(values)


def _job(values: _Values, unit_counts: NDArray[np.integer] | None) -> RelabellingJob:
    units = len(values)
    shape = values.shape[1:]
    if unit_counts is None:
        counts = np.full(int(np.prod(shape)), float(units))
    else:
        counts = np.ascontiguousarray(unit_counts, np.float64).reshape(-1)
    flat = _contiguous(values).reshape(units, 1, -1)
    return RelabellingJob(0, flat, shape, np.array([units], np.float64), counts, lambda rows: rows[None])


def _critical_map(counts: NDArray[np.float64], critical: float | NDArray[np.float64] | None) -> NDArray[np.float64]:
    if critical is None:
        return np.full(counts.shape, np.inf)
    by_count = np.asarray(critical, np.float64)
    return np.full(counts.shape, float(by_count)) if by_count.ndim == 0 else by_count[counts.astype(np.int64)]


def null_of_sign_flips(
    values: _Values,
    flips: RowSource,
    *,
    summary: Summary,
    tail: Tail,
    critical: float | NDArray[np.float64] | None = None,
    edges: NDArray[np.integer] | None = None,
    threads: int = 1,
    unit_counts: NDArray[np.integer] | None = None,
    E: float = 0.5,
    H: float = 2.0,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """One extremeness for each row of flips: the largest |t|, cluster mass, cluster extent or enhanced value of its
    map.

    Parameters
    ----------
    summary : "maximum", "mass", "extent" or "enhanced"
    tail : "two-sided", "greater" or "less"
        Two-sided takes the larger of both signs; less the extremeness of -t.
    critical : float or float64 array by unit count
        Cluster-forming value, strict; entry c of the array is for points with c units.
    edges : (edges, 2) integers
        Channels that are neighbours; None joins none.
    """
    job = _job(values, unit_counts)
    limit = _critical_map(job.counts, critical)
    total = row_count(flips, number_of_rows)
    if summary in ("mass", "extent") and not (limit <= 0).any():
        flat = job.values[:, 0]
        quick = flip_job(
            flat,
            job.shape,
            sums_of_squares(flat),
            np.zeros(limit.shape),
            1.0 / np.maximum(job.counts, 1.0),
            job.counts - 1.0,
            limit,
        )
        return flip_cluster_null(
            quick,
            flips,
            total,
            by_extent=summary == "extent",
            tail=TAIL_CODES[tail],
            edges=edge_array(edges),
            threads=threads,
            progress=progress,
        )
    return job_null(
        job,
        flips,
        total,
        summary=SUMMARY_CODES[summary],
        tail=TAIL_CODES[tail],
        critical=limit,
        edges=edge_array(edges),
        threads=threads,
        exponents=(E, H),
        progress=progress,
    )


def counts_at_least(
    values: _Values,
    flips: RowSource,
    *,
    tail: Tail,
    tolerance: float,
    threads: int = 1,
    unit_counts: NDArray[np.integer] | None = None,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.int64]:
    """How many rows have a t at each point that is at least as extreme as that of row 0, row 0 included.

    At least: t_b >= t_0 - tolerance * |t_0|, with |t| two-sided and -t for less.
    """
    return job_counts(
        _job(values, unit_counts),
        flips,
        row_count(flips, number_of_rows),
        tail=TAIL_CODES[tail],
        tolerance=tolerance,
        threads=threads,
        progress=progress,
    )


def statistic_of_flips(
    values: _Values, flip_row: NDArray[np.uint8], *, unit_counts: NDArray[np.integer] | None = None
) -> NDArray[np.float64]:
    """The t map (channels, frequencies, times) of one row of flips, float64; 0 where all values are 0."""
    return job_map(_job(values, unit_counts), flip_row)
