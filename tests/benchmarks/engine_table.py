"""Prints the table of ratios of the engine; see README.md beside this file."""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable

import numpy as np
from threadpoolctl import threadpool_info, threadpool_limits

from tests.benchmarks import engine_cases as cases
from tfstats.permutation.group_engine import null_of_contrast_flips, null_of_groups
from tfstats.permutation.sign_flip_engine import null_of_sign_flips

THREADS = 2
Call = Callable[[], object]


def timed(call: Call) -> float:
    """One untimed call, then a timed one, after 0.12 s of busy waiting (see README.md)."""
    start = time.perf_counter()
    while time.perf_counter() - start < 0.12:
        pass
    call()
    start = time.perf_counter()
    call()
    return time.perf_counter() - start


def pair_medians(ours: Call, yardstick: Call, pairs: int) -> tuple[float, float, float, float]:
    """Medians of both, the ratio of the medians, and the median of the pairs' ratios."""
    ours()
    own, other = [], []
    for _ in range(pairs):
        other.append(timed(yardstick))
        own.append(timed(ours))
    ratios = np.array(own) / np.array(other)
    return (
        float(np.median(own)),
        float(np.median(other)),
        float(np.median(own) / np.median(other)),
        float(np.median(ratios)),
    )


def line(name: str, value: str, target: str, detail: str) -> None:
    print(f"{name:<44} {value:>9}  target {target:<9} {detail}", flush=True)


def versus_blas(
    name: str, target: str, ours: Call, matrices: list[np.ndarray], data: list[np.ndarray], pairs: int
) -> float:
    """Print the ratio to the BLAS products; returns the median time of ours."""
    with threadpool_limits(THREADS, user_api="blas"):
        own, blas, ratio, by_pair = pair_medians(ours, lambda: cases.products(matrices, data), pairs)
    line(
        f"{name} / BLAS",
        f"{ratio:.3f}",
        f"<= {target}",
        f"{own * 1e3:.1f} ms, BLAS {blas * 1e3:.1f} ms, by pairs {by_pair:.3f}",
    )
    return own


def versus_loop(name: str, target: str, own: float, loop: Call, share: float, pairs: int) -> None:
    """Print how many times the loop takes; it ran a share of the relabellings."""
    taken = float(np.median([timed(loop) for _ in range(pairs)])) / share
    line(f"loop / {name}", f"{taken / own:.0f}", f">= {target}", f"loop {taken:.2f} s")


def cluster(pairs: int) -> None:
    values = cases.smooth_maps(24)
    flips = cases.flips(10_000, 24)
    signs = np.where(flips, -1, 1).astype(np.float32)
    for p, blas_target, loop_target in ((0.05, "0.6", "150"), (0.01, "0.35", "250")):
        critical = cases.critical_t(24, p)

        def ours(threads: int = THREADS, critical: float = critical) -> object:
            return null_of_sign_flips(
                values, flips, summary="mass", tail="two-sided", critical=critical, threads=threads
            )

        own = versus_blas(f"cluster mass p {p}", blas_target, ours, [signs], [values.reshape(24, -1)], pairs)
        versus_loop(
            f"cluster mass p {p}",
            loop_target,
            own,
            lambda c=critical: cases.loop_of_masses(values, signs[:100], c),
            0.01,
            3,
        )
        if p == 0.05:
            two, one, _, _ = pair_medians(ours, lambda: ours(1), pairs)
            line("1 thread / 2 threads", f"{one / two:.2f}", ">= 1.8", f"{one * 1e3:.1f} and {two * 1e3:.1f} ms")


def channels(pairs: int) -> None:
    values = cases.smooth_maps(24, 64, seed=4)
    edges = cases.neighbours()
    flips = cases.flips(500, 24)
    signs = np.where(flips, -1, 1).astype(np.float32)
    critical = cases.critical_t(24, 0.05)

    def ours() -> object:
        return null_of_sign_flips(
            values, flips, summary="mass", tail="two-sided", critical=critical, edges=edges, threads=THREADS
        )

    own = versus_blas("64 channels, 500 flips", "-", ours, [signs], [values.reshape(24, -1)], min(pairs, 5))
    versus_loop("64 channels", "200", own, lambda: cases.loop_of_masses(values, signs[:4], critical, edges), 4 / 500, 1)


def tfce(pairs: int) -> None:
    values = cases.smooth_maps(24)
    flips = cases.flips(2_000, 24)
    signs = np.where(flips, -1, 1).astype(np.float32)

    def ours() -> object:
        return null_of_sign_flips(values, flips, summary="enhanced", tail="two-sided", threads=THREADS)

    own = versus_blas("exact TFCE, 2,000 flips", "10", ours, [signs], [values.reshape(24, -1)], pairs)
    versus_loop("exact TFCE", "60", own, lambda: cases.loop_of_enhancement(values, signs[:8]), 8 / 2000, 3)


def groups(pairs: int) -> None:
    values = cases.smooth_maps(200)
    rows = cases.memberships(2_000, 200, 90)
    matrix = rows.astype(np.float32)
    flat = values.reshape(200, -1)
    for statistic, count in (("welch_score", 2), ("pooled_t", 1)):

        def ours(statistic: str = statistic) -> object:
            return null_of_groups(
                values, rows, statistic=statistic, summary="mass", tail="two-sided", critical=1.97, threads=THREADS
            )

        versus_blas(
            f"200 units, 2,000 rows, {statistic}", "1.5", ours, [matrix] * count, [flat, flat**2][:count], pairs
        )


def conditions(pairs: int) -> None:
    values = np.stack([cases.smooth_maps(24, seed=seed) for seed in (5, 6)], axis=1)
    flips = cases.flips(5_000, 24)
    signs = np.where(flips, -1, 1).astype(np.float32)

    def ours() -> object:
        return null_of_contrast_flips(values, flips, summary="mass", critical=3.2, threads=THREADS)

    data = [np.ascontiguousarray(values[:, k]).reshape(24, -1) for k in (0, 1)]
    versus_blas("F, 3 conditions, 5,000 flips", "1.5", ours, [signs] * 2, data, pairs)


def whole(pairs: int) -> None:
    import tfstats as tfs

    values = cases.smooth_maps(24)
    maps = tfs.ConditionMaps(
        np.stack([values, np.zeros_like(values)], axis=1),
        subjects=[f"S{i:02d}" for i in range(24)],
        conditions=["a", "b"],
        channels=["Cz"],
        frequencies=np.geomspace(2, 100, 64),
        times=np.arange(256) * 0.01,
        unit="decibel",
    )
    for permutations, target in ((10_000, "1.2"), (50_000, "0.7")):
        signs = np.where(cases.flips(permutations, 24), -1, 1).astype(np.float32)

        def ours(permutations: int = permutations) -> object:
            return tfs.permutation_test(
                tfs.paired(maps, "a", "b"), tfs.ClusterMass(forming_p=0.05), permutations=permutations, threads=THREADS
            )

        versus_blas(
            f"whole call, {permutations:,}", target, ours, [signs], [values.reshape(24, -1)], max(3, pairs // 2)
        )


def growth(pairs: int) -> None:
    values = cases.smooth_maps(24)
    critical = cases.critical_t(24, 0.05)

    def run(values: np.ndarray, flips: np.ndarray) -> Call:
        return lambda: null_of_sign_flips(
            values, flips, summary="mass", tail="two-sided", critical=critical, threads=THREADS
        )

    flips = cases.flips(100_000, 24)
    times = [float(np.median([timed(run(values, flips[:n])) for _ in range(pairs)])) for n in (1_000, 10_000, 100_000)]
    ratio = max(b / a / 10 for a, b in zip(times, times[1:], strict=False))
    line(
        "growth with relabellings, per decade", f"{ratio:.2f}", "<= 1.1", ", ".join(f"{t * 1e3:.1f} ms" for t in times)
    )
    times = []
    for count in (1, 10, 100):
        some = cases.smooth_maps(24, count, seed=7)
        times.append(float(np.median([timed(run(some, flips[:1000])) for _ in range(pairs if count < 100 else 3)])))
    ratio = max(b / a / 10 for a, b in zip(times, times[1:], strict=False))
    line("growth with points, per decade", f"{ratio:.2f}", "<= 1.1", ", ".join(f"{t * 1e3:.1f} ms" for t in times))


_MEMORY = """
import sys, resource
import numpy as np
from tests.benchmarks import engine_cases as cases
from tfstats.permutation.sign_flip_engine import null_of_sign_flips
values = cases.smooth_maps(24, 64)
edges = cases.neighbours()
rows = int(sys.argv[1])
make = lambda a, b: np.random.default_rng(a).integers(0, 2, (b - a, 24), dtype=np.uint8)
null_of_sign_flips(values[:, :1], make, number_of_rows=20, summary="mass", tail="two-sided", critical=2.07)
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
null_of_sign_flips(values, make, number_of_rows=rows, summary="mass", tail="two-sided", critical=2.07, edges=edges,
threads=2)
after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
print(after / 1024, values.nbytes / 2**20, (after - before) / 1024)
"""

_FIRST = """
import time, sys
start = time.perf_counter()
import numpy as np
from tests.benchmarks import engine_cases as cases
values = np.random.default_rng(0).standard_normal((24, 1, 64, 256)).astype(np.float32)
flips = cases.flips(1000, 24)
from scipy import stats, sparse, spatial
begun = time.perf_counter()
from tfstats.permutation.sign_flip_engine import null_of_sign_flips, statistic_of_flips
def run():
    null_of_sign_flips(values, flips, summary="mass", tail="two-sided", critical=2.07, threads=2)
    statistic_of_flips(values, flips[0])
run()
first = time.perf_counter() - begun
begun = time.perf_counter()
run()
print(first - (time.perf_counter() - begun))
"""


def _process(script: str, *arguments: str, **environment: str) -> list[float]:
    done = subprocess.run(
        [sys.executable, "-c", script, *arguments],
        capture_output=True,
        text=True,
        check=True,
        env=os.environ | environment,
    )
    return [float(word) for word in done.stdout.split()]


def memory(pairs: int) -> None:
    for rows in (1_000, 10_000, 100_000):
        peak, data, more = _process(_MEMORY, str(rows))
        limit = 2 * data + 300
        line(
            f"peak memory, {rows:,} relabellings",
            f"{peak:.0f} MB",
            f"<= {limit:.0f}",
            f"data {data:.0f} MB, the call adds {more:.0f} MB",
        )


def first_call(pairs: int) -> None:
    with tempfile.TemporaryDirectory() as folder:
        (fresh,) = _process(_FIRST, NUMBA_CACHE_DIR=folder)
        later = [_process(_FIRST, NUMBA_CACHE_DIR=folder)[0] for _ in range(3)]
    line("first call, over computing", f"{fresh:.1f} s", "<= 20 s", "numba compiles")
    line("first call of later processes", f"{np.median(later):.2f} s", "<= 1 s", "numba loads")


ROWS: dict[str, Callable[[int], None]] = {
    "cluster": cluster,
    "channels": channels,
    "tfce": tfce,
    "groups": groups,
    "conditions": conditions,
    "whole": whole,
    "growth": growth,
    "memory": memory,
    "first": first_call,
}


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("rows", nargs="*", help=f"which rows: {', '.join(ROWS)}")
    parser.add_argument("--pairs", type=int, default=9)
    given = parser.parse_args()
    for variable in ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE"):
        if variable in os.environ:
            print(f"warning: {variable} is set, which pins an older BLAS kernel; run with env -u {variable}")
    blas = [library for library in threadpool_info() if library["user_api"] == "blas"]
    print(
        "BLAS:",
        ", ".join(f"{b['internal_api']} {b['version']} {b['architecture']}, {b['num_threads']} threads" for b in blas),
    )
    for name in given.rows or ROWS:
        ROWS[name](given.pairs)


if __name__ == "__main__":
    main()
