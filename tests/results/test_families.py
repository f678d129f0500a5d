"""Families of tests: the step-down minimum p over shared relabellings, as a plain loop."""

import re

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tests.plain_versions import whole_test


def nulls_of(seed, subjects=8, effect=0.0, permutations=10_000):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(subjects, 4, 1, 2, 3))
    values[:, 1] += effect
    maps = tfs.ConditionMaps(
        values, subjects=[f"S{i:02d}" for i in range(subjects)], conditions=["a", "b", "c", "d"], channels=["Fz"],
        frequencies=[4, 8], times=[0.0, 0.1, 0.2], unit="decibel",
    )  # fmt: skip
    return {
        name: tfs.permutation_test(
            tfs.paired(maps, name, "a"), tfs.ClusterMass(0.2), permutations=permutations, alpha=0.5
        )
        for name in ("b", "c", "d")
    }


@pytest.mark.parametrize("seed", range(4))
def test_step_down_minimum_by_its_definition(seed):
    # Westfall & Young 1993, Resampling-Based Multiple Testing, algorithm 2.8, over the stored nulls.
    results = nulls_of(seed, effect=1.0)
    table = tfs.family_of_tests(results)
    nulls = [result.null for result in results.values()]
    p = np.array([[np.mean(null >= value - 1e-9 * abs(value)) for value in null] for null in nulls])
    assert table["p"].to_numpy() == pytest.approx(p[:, 0])
    order, before, expected = np.argsort(p[:, 0]), 0.0, {}
    for place, member in enumerate(order):
        smallest = p[order[place:]].min(axis=0)
        before = max(before, float(np.mean(smallest <= p[member, 0] + 1e-12)))
        expected[list(results)[member]] = before
    assert table.set_index("contrast")["p_family"].to_dict() == pytest.approx(expected)
    assert (table["p_family"] >= table["p"] - 1e-12).all()


@pytest.mark.parametrize("seed", range(2))
def test_every_relabelling_as_a_plain_loop(seed):
    """From the data alone: every sign pattern of seven subjects, p by counting, the minimum over both contrasts."""
    rng = np.random.default_rng(seed)
    values = np.round(rng.normal(size=(7, 3, 1, 2, 3)), 1)  # ties
    values[:, 1] += 0.7
    maps = tfs.ConditionMaps(
        values, subjects=list("ABCDEFG"), conditions=["a", "b", "c"], channels=["Fz"], frequencies=[4, 8],
        times=[0.0, 0.1, 0.2], unit="decibel",
    )  # fmt: skip
    correction = tfs.ClusterMass(0.2)
    table = tfs.family_of_tests(
        {name: tfs.permutation_test(tfs.paired(maps, name, "a"), correction, alpha=0.5) for name in ("b", "c")}
    )
    threshold = whole_test.t_quantile(0.1, 6)
    nulls = [
        whole_test.sign_flip_null(values[:, place] - values[:, 0], threshold, "two-sided", "mass", [])
        for place in (1, 2)
    ]
    p = np.array([[np.mean([other >= one - 1e-9 * abs(one) for other in null]) for one in null] for null in nulls])
    first, second = np.argsort(p[:, 0], kind="stable")
    smallest = np.mean([min(row) <= p[first, 0] + 1e-12 for row in p.T])
    expected = {first: smallest, second: max(smallest, p[second, 0])}
    assert table["p"].to_numpy() == pytest.approx(p[:, 0])
    assert table["p_family"].to_numpy() == pytest.approx([expected[0], expected[1]])


def test_a_true_effect_does_not_break_the_others():
    """Strong control: one contrast of three holds an effect, and the other two are rejected no more often than alpha."""
    rejected = found = 0
    for seed in range(100):
        rng = np.random.default_rng(seed)
        values = rng.normal(size=(8, 3, 1, 1, 2))
        values[:, 0] += 3.0
        maps = tfs.ConditionMaps(
            values, subjects=list("ABCDEFGH"), conditions=["a", "b", "c"], channels=["Fz"], frequencies=[4],
            times=[0.0, 0.1], unit="percent_change",
        )  # fmt: skip
        table = tfs.family_of_tests(
            {
                name: tfs.permutation_test(tfs.against_zero(maps, name), tfs.MaxStatistic(), permutations=128)
                for name in "abc"
            }
        ).set_index("contrast")
        found += table["p_family"]["a"] <= 0.1
        rejected += table["p_family"][["b", "c"]].min() <= 0.1
    assert found == 100
    assert stats.binomtest(rejected, 100, 0.1, alternative="greater").pvalue > 1e-3
    # Step-down: once the effect is named, the other two share alpha, so that it is also spent.
    assert rejected >= 3


def test_family_wise_error_is_held():
    rejected = sum(tfs.family_of_tests(nulls_of(seed, permutations=200))["p_family"].min() <= 0.1 for seed in range(60))
    assert stats.binomtest(rejected, 60, 0.1, alternative="greater").pvalue > 1e-3


def test_relabellings_that_differ_are_refused():
    results = nulls_of(0)
    other = nulls_of(0, subjects=9)["b"]
    text = (
        'family_of_tests, "x": expected the subjects of "b" (8: S00, S01, S02, S03 ...), got 9: S00, S01, S02, S03 ...; '
        "test them with the same subjects and settings."
    )
    with pytest.raises(tfs.InputError, match=re.escape(text)):
        tfs.family_of_tests({**results, "x": other})
    with pytest.raises(tfs.InputError, match="at least two results"):
        tfs.family_of_tests({"b": results["b"]})
    drawn = nulls_of(0, subjects=16, permutations=50)
    with pytest.raises(tfs.InputError, match=r'the seed of "b" \(0\), got 1'):
        tfs.family_of_tests({"b": drawn["b"], "y": seeded()})


def seeded():
    rng = np.random.default_rng(0)
    maps = tfs.ConditionMaps(
        rng.normal(size=(16, 2, 1, 2, 3)), subjects=[f"S{i:02d}" for i in range(16)], conditions=["a", "b"], channels=["Fz"],
        frequencies=[4, 8], times=[0.0, 0.1, 0.2], unit="decibel",
    )  # fmt: skip
    return tfs.permutation_test(tfs.paired(maps, "b", "a"), tfs.ClusterMass(0.2), permutations=50, alpha=0.5, seed=1)
