"""What each within-subject design compares."""

import numpy as np
import pytest

import tfstats as tfs
from tfstats.contrasts import DESIGNS


@pytest.fixture
def maps():
    values = np.random.default_rng(3).normal(size=(7, 4, 2, 3, 5))
    return tfs.ConditionMaps(
        values, subjects=list("ABCDEFG"), conditions=["2", "4", "6", "8"], channels=["Fz", "Pz"],
        frequencies=[4, 8, 16], times=np.arange(5) / 10, unit="decibel",
        baseline=tfs.Baseline(window=(-0.5, -0.2)),
    )  # fmt: skip


def test_paired_is_the_difference(maps):
    contrast = tfs.paired(maps, "4", "2")
    assert np.array_equal(contrast.values, maps.values[:, 1] - maps.values[:, 0])
    assert list(contrast.condition_means) == ["4", "2"]
    assert contrast.condition_means["4"] == pytest.approx(maps.values[:, 1].mean(axis=0))


def test_labels_may_be_numbers_as_read_from_a_table(maps):
    assert tfs.paired(maps, 4.0, 2).difference == "4 - 2"


def test_trend_is_the_least_squares_slope(maps):
    levels = {"2": 2, "4": 4, "6": 6, "8": 9}
    contrast = tfs.trend(maps, levels)
    expected = np.polyfit(list(levels.values()), maps.values[0, :, 1, 2, 3], 1)[0]
    assert contrast.values[0, 1, 2, 3] == pytest.approx(expected)


def test_interaction_and_weights_agree(maps):
    by_pairs = tfs.interaction(maps, ("8", "6"), ("4", "2"))
    by_weights = tfs.weighted(maps, {"8": 1, "6": -1, "4": -1, "2": 1})
    assert by_pairs.values == pytest.approx(by_weights.values)


def test_interaction_that_shares_a_condition(maps):
    contrast = tfs.interaction(maps, ("8", "4"), ("4", "2"))
    assert contrast.values == pytest.approx(maps.values[:, 3] - 2 * maps.values[:, 1] + maps.values[:, 0])


def test_ratio_is_compared_with_one(maps):
    ratios = tfs.ConditionMaps(
        np.full((7, 1, 1, 1, 1), 1.25) + np.arange(7).reshape(7, 1, 1, 1, 1) / 100, subjects=list("ABCDEFG"),
        conditions=["a"], channels=["Fz"], frequencies=[6], times=[0.0], unit="ratio",
        baseline=tfs.Baseline(window=(-0.5, -0.2), unit="ratio"),
    )  # fmt: skip
    assert tfs.against_zero(ratios, "a").values.mean() == pytest.approx(0.28)


def test_input_is_not_changed(maps):
    before = maps.values.copy()
    tfs.paired(maps, "4", "2")
    tfs.weighted(maps, {"8": 2.0, "2": -2.0})
    assert np.array_equal(before, maps.values)


def test_every_design_of_the_registry_is_public():
    for name, entry in DESIGNS.items():
        assert getattr(tfs, name) is entry.function
