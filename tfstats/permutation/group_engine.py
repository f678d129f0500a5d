"""The null distributions of two groups (or trials) and of F, from values and rows of relabellings.

values are C-contiguous float32 or float64 without NaN, the units on the first axis; a point that is not tested is 0 in
all units.  Relabellings are an array (rows, units) uint8 or a callable rows(first, last) with `number_of_rows`; row
0 is
the observed labelling.  Every relabelling has the same group sizes.

"pooled_t" is Student's t with the pooled variance.  "welch_score" is Welch's t turned into the normal score with the
same tail
probability under its own Welch-Satterthwaite degrees of freedom, by a fit to the exact probability
(`kernels.normal_score`):
relative error below 1e-7 for |z| < 8.  F of flips multiplies the k - 1 orthonormal contrasts of a unit by one sign:
degrees
of freedom k - 1 and (n - 1)(k - 1).  F of labels is the one-way F: k - 1 and n - k.  Sums are float64, centred at
each point.
A t is at most `LARGEST_T` in size, an F at most its square.
"""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from tfstats.kernels.normal_score import fitted_score
from tfstats.kernels.point_sums import centres_and_squares
from tfstats.permutation.flip_job import FlipJob, flip_cluster_null, flip_job
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
from tfstats.permutation.row_panels import Progress, RowSource, row_count, row_panels
from tfstats.permutation.sign_flip_engine import Summary, Tail

__all__ = [
    "LARGEST_T",
    "TwoGroupStatistic",
    "counts_at_least_of_contrast_flips",
    "counts_at_least_of_groups",
    "counts_at_least_of_labels",
    "null_of_contrast_flips",
    "null_of_groups",
    "null_of_labels",
    "statistic_of_contrast_flips",
    "statistic_of_groups",
    "statistic_of_labels",
]

TwoGroupStatistic = Literal["welch_score", "pooled_t"]
_Values = NDArray[np.float32] | NDArray[np.float64]
_Rows = NDArray[np.uint8]


def _contiguous(values: _Values) -> Any:
    """Values in C order, so that a kernel has one signature for each kind of float."""
    return np.ascontiguousarray(values)


def _first_row(rows: RowSource, total: int) -> _Rows:
    return next(row_panels(rows, total, 1))[1][0]


def _group_job(values: _Values, observed: _Rows, statistic: TwoGroupStatistic) -> RelabellingJob:
    """observed: 1 for members of group one."""
    units = len(values)
    ones = int(np.count_nonzero(observed))
    sizes = np.array([ones, units - ones], np.float64)
    fit = {}
    if statistic == "welch_score":
        fit = {"fit": fitted_score(max(1.0, min(sizes) - 1.0), units - 2.0)}
    shape = values.shape[1:]
    return RelabellingJob(
        2 if statistic == "welch_score" else 1,
        _contiguous(values).reshape(units, 1, -1),
        shape,
        sizes,
        np.full(int(np.prod(shape)), float(units)),
        lambda rows: (rows == 0).astype(np.uint8)[None],
        **fit,
    )


def _pooled_flip_job(job: RelabellingJob, limit: NDArray[np.float64]) -> FlipJob:
    """Pooled t by one signed sum: with centred values and sizes n1, n2 the sum of group one is half the signed sum
    Z, and
    t = Z * sqrt(gain * degrees / (Q - gain * Z^2)), gain (1 / n1 + 1 / n2) / 4.
    """
    flat = job.values[:, 0]
    ones, others = job.groups
    centre, squares = centres_and_squares(flat)
    gain = np.full(len(limit), 0.25 * (1.0 / ones + 1.0 / others))
    degrees = np.full(len(limit), ones + others - 2.0)
    return flip_job(flat, job.shape, squares, centre, gain, degrees, np.ascontiguousarray(limit))


def _membership_as_flips(rows: RowSource) -> RowSource:
    """Members of group one get a plus, the others a minus."""
    if callable(rows):
        return lambda first, last: (rows(first, last) == 0).astype(np.uint8)
    return lambda first, last: (rows[first:last] == 0).astype(np.uint8)


def _contrast_job(values: _Values) -> RelabellingJob:
    units, components = values.shape[:2]
    shape = values.shape[2:]
    return RelabellingJob(
        3,
        _contiguous(values).reshape(units, components, -1),
        shape,
        np.array([units], np.float64),
        np.full(int(np.prod(shape)), float(units)),
        lambda rows: rows[None],
    )


def _label_job(values: _Values, observed: _Rows) -> RelabellingJob:
    """observed: the group of each unit, 0 .. k - 1."""
    units = len(values)
    sizes = np.bincount(observed).astype(np.float64)
    members = np.arange(len(sizes) - 1, dtype=np.uint8)[:, None, None]
    shape = values.shape[1:]
    return RelabellingJob(
        4,
        _contiguous(values).reshape(units, 1, -1),
        shape,
        sizes,
        np.full(int(np.prod(shape)), float(units)),
        lambda rows: (rows[None] != members).astype(np.uint8),
    )


def _null(
    job: RelabellingJob,
    rows: RowSource,
    total: int,
    summary: Summary,
    tail: Tail,
    critical: float | NDArray[np.float64] | None,
    edges: NDArray[np.integer] | None,
    threads: int,
    exponents: tuple[float, float],
    progress: Progress | None,
) -> NDArray[np.float64]:
    limit = np.inf if critical is None else critical
    by_point = np.ascontiguousarray(np.broadcast_to(np.asarray(limit, np.float64), job.shape)).reshape(-1)
    return job_null(
        job,
        rows,
        total,
        summary=SUMMARY_CODES[summary],
        tail=TAIL_CODES[tail],
        critical=by_point,
        edges=edge_array(edges),
        threads=threads,
        exponents=exponents,
        progress=progress,
    )


def null_of_groups(
    values: _Values,
    rows: RowSource,
    *,
    statistic: TwoGroupStatistic,
    summary: Summary,
    tail: Tail,
    critical: float | NDArray[np.float64] | None = None,
    edges: NDArray[np.integer] | None = None,
    threads: int = 1,
    E: float = 0.5,
    H: float = 2.0,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """One extremeness for each row of group-one membership (1 = in group one) over values (units, channels,
    frequencies, times).

    critical: cluster-forming value, strict, one number or a map; on the scale of the statistic (the normal quantile for
    "welch_score").  summary, tail, edges, E and H as in `null_of_sign_flips`.
    """
    total = row_count(rows, number_of_rows)
    job = _group_job(values, _first_row(rows, total), statistic)
    limit = np.broadcast_to(np.asarray(np.inf if critical is None else critical, np.float64), job.shape).reshape(-1)
    if statistic == "pooled_t" and summary in ("mass", "extent") and not (limit <= 0).any():
        return flip_cluster_null(
            _pooled_flip_job(job, limit),
            _membership_as_flips(rows),
            total,
            by_extent=summary == "extent",
            tail=TAIL_CODES[tail],
            edges=edge_array(edges),
            threads=threads,
            progress=progress,
        )
    return _null(job, rows, total, summary, tail, critical, edges, threads, (E, H), progress)


def counts_at_least_of_groups(
    values: _Values,
    rows: RowSource,
    *,
    statistic: TwoGroupStatistic,
    tail: Tail,
    tolerance: float,
    threads: int = 1,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.int64]:
    """How many rows are at each point at least as extreme as row 0, row 0 included."""
    total = row_count(rows, number_of_rows)
    job = _group_job(values, _first_row(rows, total), statistic)
    return job_counts(job, rows, total, tail=TAIL_CODES[tail], tolerance=tolerance, threads=threads, progress=progress)


def statistic_of_groups(values: _Values, row: _Rows, *, statistic: TwoGroupStatistic) -> NDArray[np.float64]:
    """The map (channels, frequencies, times) of one membership row: group one less the others."""
    return job_map(_group_job(values, np.asarray(row), statistic), row)


def null_of_contrast_flips(
    values: _Values,
    flips: RowSource,
    *,
    summary: Summary,
    critical: float | NDArray[np.float64] | None = None,
    edges: NDArray[np.integer] | None = None,
    threads: int = 1,
    E: float = 0.5,
    H: float = 1.0,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """One extremeness of F for each row of flips over values (units, components, channels, frequencies, times).

    The components are the orthonormal contrasts of the k conditions of a unit; a flip turns all of them.  The upper
    tail.
    """
    total = row_count(flips, number_of_rows)
    return _null(_contrast_job(values), flips, total, summary, "greater", critical, edges, threads, (E, H), progress)


def counts_at_least_of_contrast_flips(
    values: _Values,
    flips: RowSource,
    *,
    tolerance: float,
    threads: int = 1,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.int64]:
    """How many rows have an F at each point at least as large as row 0, row 0 included."""
    total = row_count(flips, number_of_rows)
    return job_counts(
        _contrast_job(values), flips, total, tail=1, tolerance=tolerance, threads=threads, progress=progress
    )


def statistic_of_contrast_flips(values: _Values, row: _Rows) -> NDArray[np.float64]:
    """The F map (channels, frequencies, times) of one row of flips."""
    return job_map(_contrast_job(values), row)


def null_of_labels(
    values: _Values,
    rows: RowSource,
    *,
    summary: Summary,
    critical: float | NDArray[np.float64] | None = None,
    edges: NDArray[np.integer] | None = None,
    threads: int = 1,
    E: float = 0.5,
    H: float = 1.0,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.float64]:
    """One extremeness of the one-way F for each row of group labels 0 .. k - 1 over values (units, channels,
    frequencies, times)."""
    total = row_count(rows, number_of_rows)
    job = _label_job(values, _first_row(rows, total))
    return _null(job, rows, total, summary, "greater", critical, edges, threads, (E, H), progress)


def counts_at_least_of_labels(
    values: _Values,
    rows: RowSource,
    *,
    tolerance: float,
    threads: int = 1,
    number_of_rows: int | None = None,
    progress: Progress | None = None,
) -> NDArray[np.int64]:
    """How many rows have an F at each point at least as large as row 0, row 0 included."""
    total = row_count(rows, number_of_rows)
    job = _label_job(values, _first_row(rows, total))
    return job_counts(job, rows, total, tail=1, tolerance=tolerance, threads=threads, progress=progress)


def statistic_of_labels(values: _Values, row: _Rows) -> NDArray[np.float64]:
    """The one-way F map (channels, frequencies, times) of one row of labels."""
    return job_map(_label_job(values, np.asarray(row)), row)
