"""The cases of the table for pytest-benchmark (`--benchmark-enable`); by default each runs once and is compared, not
timed."""

import numpy as np
import pytest

from tests.benchmarks import engine_cases as cases
from tfstats.permutation.sign_flip_engine import null_of_sign_flips

pytest.importorskip("pytest_benchmark")


@pytest.fixture(scope="module")
def study():
    values = cases.smooth_maps(24, 1, 32, 128)
    flips = cases.flips(400, 24)
    return values, flips, np.where(flips, -1, 1).astype(np.float32)


def test_cluster_mass(benchmark, study):
    values, flips, signs = study
    critical = cases.critical_t(24, 0.05)
    null = benchmark(null_of_sign_flips, values, flips, summary="mass", tail="two-sided", critical=critical, threads=2)
    np.testing.assert_allclose(null[:60], cases.loop_of_masses(values, signs[:60], critical), rtol=2e-4)


def test_cluster_mass_over_channels(benchmark):
    values = cases.smooth_maps(24, 12, 16, 64)
    flips = cases.flips(60, 24)
    edges = cases.neighbours(12)
    critical = cases.critical_t(24, 0.05)
    null = benchmark(
        null_of_sign_flips, values, flips, summary="mass", tail="two-sided", critical=critical, edges=edges, threads=2
    )
    signs = np.where(flips, -1, 1).astype(np.float32)
    np.testing.assert_allclose(null[:30], cases.loop_of_masses(values, signs[:30], critical, edges), rtol=2e-4)


def test_exact_enhancement(benchmark, study):
    values, flips, signs = study
    null = benchmark(null_of_sign_flips, values, flips, summary="enhanced", tail="two-sided", threads=2)
    # The sum over heights is coarse: its 100 steps are within a few percent of the integral.
    np.testing.assert_allclose(null[:5], cases.loop_of_enhancement(values, signs[:5]), rtol=0.06)


def test_bare_product(benchmark, study):
    values, _flips, signs = study
    benchmark(cases.products, [signs], [values.reshape(24, -1)])
