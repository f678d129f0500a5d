"""Cluster nulls of statistics that grow with the size of one signed sum: the one-sample t and the pooled t.

The quick way of `kernels.flip_chunk`: `FlipJob` holds what stays the same over all rows of signs.
"""

from __future__ import annotations

import threading
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.kernels.flip_chunk import flip_chunk, sort_rows
from tfstats.kernels.relabelling_panels import summaries_of_lists
from tfstats.kernels.runs import run_lists, run_workspace
from tfstats.kernels.signed_sums import group_sizes
from tfstats.kernels.vector_instructions import wide_vectors
from tfstats.permutation.relabelling_job import LARGEST_T
from tfstats.permutation.row_panels import Progress, RowSource, row_panels, run_in_threads

__all__ = ["FlipJob", "flip_cluster_null", "flip_job"]

_BLOCK = 128
_SCREEN_RANGE = 32000.0
_LIST_BYTES = 56 * 2**20
_PANEL = 16384
_ROWS_FOR_MERGED_LEAD = 2000


# Number of the first row, the rows of a panel, and of some of them in sorted order what `sort_rows` says of them.
_Piece = tuple[int, NDArray[np.uint8], tuple[NDArray[Any], ...]]


@dataclass(frozen=True)
class FlipJob:
    """Values (units, points) and, by point, what turns a signed sum into t.

    With x = values - centre, Q = sum of x^2 and Z the signed sum: t = Z * sqrt(gain * degrees / (Q - gain * Z^2)).
    critical: cluster-forming value of each point, above 0; NaN or infinite where the point takes no part.
    """

    values: NDArray[np.float32] | NDArray[np.float64]
    shape: tuple[int, int, int]
    centre: NDArray[np.float64]
    gain: NDArray[np.float64]
    degrees: NDArray[np.float64]
    critical: NDArray[np.float64]
    scale: NDArray[np.float64]
    limit: NDArray[np.float64]

    @property
    def quantum(self) -> NDArray[np.float32]:
        """int16 steps by point, such that the limit is the same number of steps everywhere."""
        return (self.limit_steps / self.limit).astype(np.float32)

    @property
    def limit_steps(self) -> float:
        tested = self.limit[np.isfinite(self.limit)]
        return _SCREEN_RANGE * float(tested.min()) if tested.size else 1.0

    @property
    def closeness(self) -> float:
        """How far a floating-point sum of scaled values can be from the true one, with room to spare."""
        return (len(self.values) + 4) * float(np.finfo(self.values.dtype).eps)


def flip_job(
    values: NDArray[np.float32] | NDArray[np.float64],
    shape: tuple[int, int, int],
    squares: NDArray[np.float64],
    centre: NDArray[np.float64],
    gain: NDArray[np.float64],
    degrees: NDArray[np.float64],
    critical: NDArray[np.float64],
) -> FlipJob:
    """The job with its scale and limits; squares: sum of (values - centre)^2 by point."""
    with np.errstate(divide="ignore", invalid="ignore"):
        scale = np.where(squares > 0, np.sqrt(gain / squares), 0.0)
        limit = critical / np.sqrt(critical * critical + degrees)
    limit = np.where((squares > 0) & (degrees > 0) & np.isfinite(critical), limit, np.inf)
    return FlipJob(values, shape, centre, gain, degrees, critical, scale, limit)


def _aligned(shape: tuple[int, ...], dtype: type[np.generic] | np.dtype[np.generic]) -> NDArray[np.generic]:
    """An array that begins on a 64-byte boundary: a row of the tables is then a whole number of cache lines."""
    size = int(np.prod(shape)) * np.dtype(dtype).itemsize
    raw = np.empty(size + 64, np.uint8)
    start = -raw.ctypes.data % 64
    return raw[start : start + size].view(dtype).reshape(shape)


class _Space:
    """Working space of one thread."""

    def __init__(self, job: FlipJob, rows: int, sizes: NDArray[np.int64], leading_groups: int) -> None:
        kind = job.values.dtype
        leading_codes = 1 << int(sizes[:leading_groups].sum() - 1)
        table_rows = int((1 << sizes).sum()) - (1 << int(sizes[0] - 1)) + min(rows, leading_codes)
        packed = rows * _BLOCK + 32
        flags = np.zeros(_BLOCK, np.uint8)
        self.kernel_space = (
            _aligned((table_rows + 1, _BLOCK), kind),
            _aligned((table_rows + 1, _BLOCK), np.int16),
            _aligned((len(job.values), _BLOCK), kind),
            _aligned((_BLOCK,), np.float32),
            np.empty(2 * rows + 2, np.uint64),
            np.empty(2 * rows + 2, np.uint64),
            (np.empty(packed, kind), np.empty(packed, kind), np.empty(packed, np.uint64), np.empty(packed, np.uint64)),
            np.empty(packed, kind),
            (np.empty(packed, np.int64), np.empty(packed, np.uint64)),
            (np.full(_BLOCK + 16, np.inf, kind), np.full(_BLOCK + 16, np.inf, kind), np.zeros(_BLOCK + 16, kind)),
            np.empty(min(rows, leading_codes) + 1, np.int64),
            (np.empty(_BLOCK, np.int16), flags, flags.view(np.uint64)),
            np.empty(16, kind),
        )
        # The row past the table is read beyond its last point, and never counted.
        self.kernel_space[0][-1] = 0


def flip_cluster_null(
    job: FlipJob,
    rows: RowSource,
    total: int,
    *,
    by_extent: bool,
    tail: int,
    edges: NDArray[np.int64],
    threads: int,
    progress: Progress | None,
    wide: bool | None = None,
) -> NDArray[np.float64]:
    """Largest cluster mass, or extent, of each row of signs (1 = minus).

    wide: vector versions of the inner steps; None as the processor has it.  The bytes are the same.
    """
    null = np.full(total, np.nan)
    sizes = group_sizes(len(job.values))
    points = job.values.shape[1]
    plane = job.shape[1] * job.shape[2]
    kind = job.values.dtype
    use_wide = wide_vectors() if wide is None else wide
    leading_groups = 2 if total >= _ROWS_FOR_MERGED_LEAD and len(sizes) > 1 else 1
    steps = job.limit_steps
    groups = len(sizes) - leading_groups + 1
    threshold = int(np.ceil(steps - 0.5 * len(sizes) - 0.1 - job.closeness * _SCREEN_RANGE)) - 1
    point_scale = (job.centre, job.scale.astype(kind), job.limit, np.sqrt(np.maximum(job.degrees, 0.0)).astype(kind))
    exact = (job.centre, job.gain, job.degrees, job.critical, LARGEST_T)
    quantum = job.quantum
    centred = bool(job.centre.any())
    uniform = bool((job.degrees == job.degrees[0]).all())
    local = threading.local()

    def work(piece: _Piece) -> int:
        first, flips, (order, leading, entries, turned) = piece
        done = 0
        while done < len(order):
            room = getattr(local, "room", points // 64 + 64)
            most = max(1, min(1024, _LIST_BYTES // (16 * room)))
            if getattr(local, "made", None) != (room, most):
                local.space = _Space(job, most, sizes, leading_groups)
                local.lists = run_lists(most, room)
                local.runs = run_workspace(room, job.shape)
                local.out = np.empty(most)
                local.made = (room, most)
            some = slice(done, min(done + most, len(order)))
            number = some.stop - some.start
            places, masses, counts = (array[:number] for array in local.lists)
            needed = flip_chunk(
                job.values,
                flips,
                order[some],
                leading[some],
                entries[some],
                turned[some],
                sizes,
                leading_groups,
                point_scale,
                exact,
                quantum,
                threshold,
                job.closeness,
                tail,
                by_extent,
                uniform,
                centred,
                job.shape[2],
                use_wide,
                local.space.kernel_space,
                places,
                masses,
                counts,
            )
            if needed > room:
                local.room = needed + needed // 4
                continue
            out = local.out[:number]
            summaries_of_lists(places, masses, counts, job.shape[2], plane, edges, by_extent, use_wide, local.runs, out)
            null[first + order[some]] = out
            done += number
        return len(order)

    def pieces() -> Iterator[_Piece]:
        for first, flips in row_panels(rows, total, _PANEL):
            number = len(flips)
            order, leading = np.empty(number, np.int64), np.empty(number, np.int64)
            entries, turned = np.empty((number, groups), np.int32), np.empty(number, np.uint8)
            sort_rows(flips, sizes, leading_groups, order, leading, entries, turned)
            parts = max(threads, -(-number // 1024))
            parts = -(-parts // threads) * threads
            cuts = np.linspace(0, number, parts + 1).astype(int)
            for start, stop in zip(cuts[:-1], cuts[1:], strict=True):
                if stop > start:
                    some = slice(start, stop)
                    yield first, flips, (order[some], leading[some], entries[some], turned[some])

    run_in_threads(work, pieces(), threads, progress)
    return null
