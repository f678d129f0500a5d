"""Sign-flip tests against results published before there were computers, through the public functions.

Fisher 1935, The Design of Experiments, ch. III (Darwin's maize); Student 1908, Biometrika 6:1 (sleep data).
Derived values were computed again with numpy and scipy.
"""

import numpy as np
import pytest

import tfstats as tfs

MAIZE = np.array([49, -67, 8, 16, 6, 23, 28, 41, 14, 29, 56, 24, 75, 60, -48], dtype=float)
SLEEP_FIRST = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0])
SLEEP_SECOND = np.array([1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4])


def single_point(*conditions):
    values = np.stack(conditions, axis=1)[:, :, None, None, None]
    return tfs.ConditionMaps(
        values,
        subjects=[f"S{number:02d}" for number in range(len(values))],
        conditions=["first", "second"][: len(conditions)],
        channels=["Fz"],
        frequencies=[6.0],
        times=[0.0],
        unit="percent_change",
    )


@pytest.mark.parametrize(("alternative", "count", "of"), [("greater", 863, 2**15), ("two-sided", 863, 2**14)])
@pytest.mark.parametrize("correction", [tfs.MaxStatistic(), tfs.ClusterMass(forming_p=0.2), tfs.FalseDiscoveryRate()])
def test_maize(alternative, count, of, correction):
    contrast = tfs.against_zero(single_point(MAIZE), "first")
    result = tfs.permutation_test(contrast, correction, permutations=2**15, alternative=alternative)
    assert result.enumerated and result.exact and result.null.size == of
    assert result.statistic[0, 0, 0] == pytest.approx(2.147987, abs=5e-7)
    assert result.p_values[0, 0, 0] == count / of
    assert result.point_p_values[0, 0, 0] == count / of
    assert result.estimate[0, 0, 0] == pytest.approx(314 / 15)


def test_maize_less_is_the_other_tail():
    # 863 patterns have a sum of at least 314, 28 of them equal to it: 2^15 - 835 are at most 314.
    contrast = tfs.against_zero(single_point(MAIZE), "first")
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2**15, alternative="less")
    assert result.p_values[0, 0, 0] == (2**15 - 835) / 2**15


def test_maize_planted_in_a_map_that_cannot_exceed_it():
    # A point where one unit alone differs from zero has t = 1 or -1 under every flip.
    values = np.zeros((15, 1, 2, 5, 7))
    values[3] = 0.7
    values[:, 0, 1, 2] = 0.0
    values[:, 0, 0, 0, 0] = MAIZE
    maps = tfs.ConditionMaps(
        values, subjects=[f"S{i}" for i in range(15)], conditions=["first"], channels=["Fz", "Cz"],
        frequencies=[2, 4, 6, 8, 10], times=np.arange(7) / 10, unit="percent_change",
    )  # fmt: skip
    result = tfs.permutation_test(tfs.against_zero(maps, "first"), tfs.MaxStatistic(), permutations=2**15)
    assert result.p_values[0, 0, 0] == 1726 / 32768
    assert np.nanmin(result.p_values) == result.p_values[0, 0, 0]
    assert result.p_values[0, 1, 1] == 1.0
    assert np.isnan(result.p_values[1, 2]).all() and result.tested.sum() == 63
    assert any("7 of 70 points" in caution for caution in result.cautions)


def test_sleep():
    contrast = tfs.paired(single_point(SLEEP_FIRST, SLEEP_SECOND), "second", "first")
    result = tfs.permutation_test(contrast, tfs.ClusterMass(forming_p=0.05), permutations=2000)
    assert result.null.size == 512 and result.exact
    assert result.p_values[0, 0, 0] == 2 / 512
    assert result.statistic[0, 0, 0] == pytest.approx(4.0621277, abs=5e-8)
    row = result.clusters.iloc[0]
    assert row.p == row.p_low == row.p_high == 2 / 512
    assert row.estimate == pytest.approx(1.58)
    assert (row.estimate_low, row.estimate_high) == pytest.approx((0.7001142, 2.4598858), abs=5e-8)
    assert row.effect_size == pytest.approx(1.2845576, abs=5e-8)
    assert row.effect_hedges == pytest.approx(1.1739249, abs=5e-8)
    assert (row.effect_low, row.effect_high) == pytest.approx((0.4146278, 2.1180165), abs=5e-7)


def test_sleep_one_sided_counts_all_patterns():
    # One difference is zero: flipping it changes nothing, and the patterns are still 1,024.
    contrast = tfs.paired(single_point(SLEEP_FIRST, SLEEP_SECOND), "second", "first")
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2000, alternative="greater")
    assert result.null.size == 1024
    assert result.p_values[0, 0, 0] == 2 / 1024


def test_sleep_band_table():
    maps = single_point(SLEEP_FIRST, SLEEP_SECOND)
    table = tfs.band_table(
        maps,
        {"drugs": lambda m: tfs.paired(m, "second", "first")},
        {"only": (6, 6)},
        {"only": (0, 0)},
        permutations=2000,
    )
    row = table.iloc[0]
    assert (row.p, row.p_corrected, row.df) == (2 / 512, 2 / 512, 9)
    assert (row.low, row.high) == pytest.approx((0.7001142, 2.4598858), abs=5e-8)
    assert row.effect_size == pytest.approx(1.2845576, abs=5e-8)
