"""Certified one-way F of the NIST Statistical Reference Datasets (https://www.itl.nist.gov/div898/strd/), at the
kernel.

The files ship inside scipy (scipy/stats/tests/data/nist_anova): 60 header lines, then group and value.  SmLs07 to 09
carry 13 constant
digits, of which float64 keeps three digits of the spread; their error is stated, and is that of the data as float64
holds them.
"""

from pathlib import Path

import numpy as np
import pytest
import scipy.stats

from tfstats.permutation.group_engine import counts_at_least_of_labels, null_of_labels, statistic_of_labels

FOLDER = Path(scipy.stats.__file__).parent / "tests" / "data" / "nist_anova"
CERTIFIED = {
    "AtmWtAg": (15.9467335677930, 1e-9),
    "SiRstv": (1.18046237440255, 1e-12),
    "SmLs01": (21.0, 1e-12),
    "SmLs02": (201.0, 1e-12),
    "SmLs03": (2001.0, 1e-11),
    "SmLs04": (21.0, 1e-8),
    "SmLs05": (201.0, 1e-8),
    "SmLs06": (2001.0, 1e-8),
    "SmLs07": (21.0, 2e-2),
    "SmLs08": (201.0, 2e-2),
    "SmLs09": (2001.0, 2e-2),
}


def dataset(name):
    if not FOLDER.is_dir():
        pytest.skip("this scipy was installed without its tests, which hold the NIST files")
    group, value = np.loadtxt(FOLDER / f"{name}.dat", skiprows=60, unpack=True)
    return value.reshape(-1, 1, 1, 1), (group - 1).astype(np.uint8)


@pytest.mark.parametrize("name", sorted(CERTIFIED))
def test_certified_f(name):
    certified, error = CERTIFIED[name]
    values, labels = dataset(name)
    got = statistic_of_labels(values, labels)[0, 0, 0]
    assert got == pytest.approx(certified, rel=error)


@pytest.mark.parametrize("name", ["SmLs07", "SmLs08", "SmLs09"])
def test_constant_digits_are_not_worse_than_exact_arithmetic_on_the_same_float64(name):
    """What is off in the last three sets is the rounding of their values to float64: integer arithmetic on these
    gives the same F."""
    values, labels = dataset(name)
    # All values are multiples of 2^-12 or so: exact as Python integers.
    whole = [int(v * 2**14) for v in values.ravel()]
    assert all(w / 2**14 == v for w, v in zip(whole, values.ravel().tolist(), strict=True))
    n, k = len(whole), int(labels.max()) + 1
    sums, sizes = [0] * k, [0] * k
    for w, g in zip(whole, labels.tolist(), strict=True):
        sums[g] += w
        sizes[g] += 1
    total = sum(sums)
    assert len(set(sizes)) == 1
    size = sizes[0]
    # n * between and size * within, exactly.
    between = sum(s * s for s in sums) * n - total * total * size
    within = sum(w * w for w in whole) * size - sum(s * s for s in sums)
    exact = (between / (n * size) / (k - 1)) / (within / size / (n - k))
    assert statistic_of_labels(values, labels)[0, 0, 0] == pytest.approx(exact, rel=1e-8)


def test_the_null_and_the_counts_hold_the_same_f():
    values, labels = dataset("AtmWtAg")
    rows = np.array([labels, np.random.default_rng(0).permutation(labels)])
    null = null_of_labels(values, rows, summary="maximum")
    assert null[0] == pytest.approx(15.9467335677930, rel=1e-9)
    assert counts_at_least_of_labels(values, rows, tolerance=1e-9)[0, 0, 0] == 1 + (null[1] >= null[0] * (1 - 1e-9))
