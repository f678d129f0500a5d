"""`permutation_test` against a plain loop over every relabelling, and its invariances."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

import tfstats as tfs
from tests.plain_versions import whole_test

CORRECTIONS = {
    "mass": tfs.ClusterMass(forming_p=0.2),
    "extent": tfs.ClusterExtent(forming_p=0.2),
    "maximum": tfs.MaxStatistic(),
}


def adjacency_of(channels, pairs):
    matrix = np.zeros((len(channels), len(channels)), bool)
    for a, b in pairs:
        matrix[a, b] = matrix[b, a] = True
    return pd.DataFrame(matrix, index=channels, columns=channels)


@settings(deadline=None, max_examples=40)
@given(
    seed=st.integers(0, 10_000),
    units=st.integers(6, 8),
    channels=st.integers(1, 4),
    weigh=st.sampled_from(sorted(CORRECTIONS)),
    tail=st.sampled_from(["two-sided", "greater", "less"]),
    whole_numbers=st.booleans(),
    gaps=st.booleans(),
)
def test_every_relabelling_as_a_plain_loop(seed, units, channels, weigh, tail, whole_numbers, gaps):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(units, channels, 3, 4))
    if whole_numbers:  # heavy ties
        values = np.round(values)
        values[0] += 0.5
    if gaps:
        values[rng.integers(units), :, rng.integers(3), rng.integers(4)] = np.nan
    edges = [pair for pair in ((0, 1), (1, 2), (0, 3)) if max(pair) < channels and rng.random() < 0.7]
    names = [f"C{i}" for i in range(channels)]
    maps = tfs.ConditionMaps(
        values[:, None], subjects=[f"S{i}" for i in range(units)], conditions=["a"], channels=names,
        frequencies=[4.0, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="percent_change",
    )  # fmt: skip
    contrast = tfs.against_zero(maps, "a")
    result = tfs.permutation_test(
        contrast, CORRECTIONS[weigh], alternative=tail, alpha=0.4, adjacency=adjacency_of(names, edges)
    )
    threshold = whole_test.t_quantile(0.1 if tail == "two-sided" else 0.2, units - 1)
    null = whole_test.sign_flip_null(values, threshold, tail, weigh, edges)
    assert result.null[0] == pytest.approx(null[0], rel=1e-9)
    assert np.sort(result.null) == pytest.approx(np.sort(null), rel=1e-9, abs=1e-12)
    tested = ~np.isnan(values).any(axis=0)
    assert np.array_equal(result.tested, tested)
    assert result.point_p_values[tested] == pytest.approx(whole_test.point_p(values, tail)[tested])
    assert np.isnan(result.point_p_values[~tested]).all()
    assert np.array_equal(result.mask, np.nan_to_num(result.p_values, nan=1.0) <= 0.4)


def test_swapping_the_conditions_swaps_the_tails(make_maps):
    maps = make_maps()
    forward, backward = tfs.paired(maps, "recalled", "missed"), tfs.paired(maps, "missed", "recalled")
    for correction in CORRECTIONS.values():
        greater = tfs.permutation_test(forward, correction, alternative="greater")
        less = tfs.permutation_test(backward, correction, alternative="less")
        assert np.array_equal(greater.null, less.null)
        assert np.array_equal(greater.p_values, less.p_values)
        assert greater.clusters["mass"].tolist() == less.clusters["mass"].tolist()


def test_the_order_of_subjects_is_irrelevant(make_maps):
    maps = make_maps(subjects=16)
    order = np.random.default_rng(1).permutation(16)
    turned = tfs.ConditionMaps(
        maps.values[order], subjects=[maps.subjects[i] for i in order], conditions=maps.conditions,
        channels=maps.channels, frequencies=maps.frequencies, times=maps.times, unit=maps.unit,
    )  # fmt: skip
    one, other = (
        tfs.permutation_test(tfs.paired(m, "recalled", "missed"), tfs.ClusterMass(0.1), permutations=500, alpha=0.5)
        for m in (maps, turned)
    )
    assert one.null == pytest.approx(other.null, rel=1e-9)
    assert np.array_equal(one.p_values, other.p_values)


def test_a_constant_added_to_both_conditions_changes_nothing(make_maps):
    maps = make_maps()
    shifted = tfs.ConditionMaps(
        maps.values + 8.0, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit=maps.unit,
    )  # fmt: skip
    one, other = (
        tfs.permutation_test(tfs.paired(m, "recalled", "missed"), tfs.ClusterMass(0.2)) for m in (maps, shifted)
    )
    assert one.null == pytest.approx(other.null, rel=1e-6)
    assert np.array_equal(one.mask, other.mask)


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_any_number_of_threads_gives_the_same_bytes(make_maps, dtype):
    contrast = tfs.paired(make_maps(subjects=18, dtype=dtype), "recalled", "missed")
    nulls = [
        tfs.permutation_test(contrast, tfs.ClusterMass(0.1), permutations=777, seed=4, threads=threads).null.tobytes()
        for threads in (1, 2, 3)
    ]
    assert len(set(nulls)) == 1


def test_seeds_differ_and_repeat(make_maps):
    contrast = tfs.paired(make_maps(subjects=18), "recalled", "missed")
    one, same, other = (
        tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=300, seed=seed).null for seed in (1, 1, 2)
    )
    assert np.array_equal(one, same) and not np.array_equal(one, other)
    assert one[0] == other[0]


def test_more_permutations_extend_the_same_null(make_maps):
    contrast = tfs.paired(make_maps(subjects=18), "recalled", "missed")
    short, long = (tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=n).null for n in (200, 900))
    assert np.array_equal(short, long[:200])


def test_single_point_agrees_with_a_general_purpose_library(make_maps):
    maps = make_maps(subjects=8, channels=1, frequencies=1, times=1)
    contrast = tfs.paired(maps, "recalled", "missed")
    x = contrast.values.ravel()
    for tail in ("two-sided", "greater", "less"):
        result = tfs.permutation_test(contrast, tfs.MaxStatistic(), alternative=tail)
        expected = stats.permutation_test(
            (x,), lambda v, axis: v.mean(axis=axis) / v.std(axis=axis, ddof=1), permutation_type="samples",
            alternative=tail, n_resamples=np.inf,
        )  # fmt: skip
        assert result.p_values.item() == pytest.approx(expected.pvalue)
    assert result.statistic.item() == pytest.approx(stats.ttest_1samp(x, 0).statistic)


def test_false_discovery_agrees_with_a_general_purpose_library(make_maps):
    contrast = tfs.paired(make_maps(), "recalled", "missed")
    parametric = tfs.permutation_test(contrast, tfs.FalseDiscoveryRate(p_values="parametric"))
    p = stats.ttest_1samp(contrast.values, 0).pvalue
    assert parametric.point_p_values == pytest.approx(p)
    assert parametric.p_values.ravel() == pytest.approx(stats.false_discovery_control(p.ravel()))
    counted = tfs.permutation_test(contrast, tfs.FalseDiscoveryRate("benjamini_yekutieli"))
    expected = stats.false_discovery_control(whole_test.point_p(contrast.values, "two-sided").ravel(), method="by")
    assert counted.p_values.ravel() == pytest.approx(expected)
    assert counted.null[0] == pytest.approx(np.abs(counted.statistic).max())


def test_constant_points_stay_out(make_maps):
    maps = make_maps()
    values = maps.values.copy()
    values[:, :, 0, 0, 0] = 3.0
    values[2, 0, 1, 1, 1] = np.nan
    some = tfs.ConditionMaps(
        values, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit=maps.unit,
    )  # fmt: skip
    result = tfs.permutation_test(tfs.paired(some, "recalled", "missed"), tfs.MaxStatistic())
    assert not result.tested[0, 0, 0] and not result.tested[1, 1, 1]
    assert np.isnan(result.statistic[0, 0, 0]) and result.estimate[0, 0, 0] == 0.0
    assert result.subjects_at_point[1, 1, 1] == 8
    assert any(caution.startswith("2 of 40 points (5.0 %) were not tested") for caution in result.cautions)
