"""Threshold-free enhancement through the public test, for t, Welch scores and F."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tests.plain_versions import whole_test


def enhanced(t, tail, E, H, edges):
    """The integral over heights by flooding at each of them (Smith & Nichols 2009, NeuroImage 44:83)."""
    out = np.zeros(t.shape)
    for sign in {"two-sided": (1, -1), "greater": (1,), "less": (-1,)}[tail]:
        lifted = np.nan_to_num(sign * t, nan=0.0)
        # Between two heights at which the components change the extent is constant: exact from the sorted heights.
        heights = np.concatenate([[0.0], np.unique(lifted[lifted > 0])])
        for low, high in zip(heights, heights[1:]):
            labels, number = whole_test.components(lifted >= high, edges)
            for label in range(1, number + 1):
                inside = labels == label
                out[inside] += inside.sum() ** E * (high ** (H + 1) - low ** (H + 1)) / (H + 1)
    return out


@pytest.mark.parametrize("tail", ["two-sided", "greater", "less"])
def test_every_relabelling_as_a_plain_loop(tail):
    rng = np.random.default_rng(4)
    values = rng.normal(size=(7, 1, 2, 3, 4)) + 0.4
    values[2, 0, 0, 1, 1] = np.nan
    maps = tfs.ConditionMaps(
        values, subjects=list("ABCDEFG"), conditions=["a"], channels=["Fz", "Cz"], frequencies=[4, 6, 8],
        times=[0, 0.1, 0.2, 0.3], unit="percent_change",
    )  # fmt: skip
    joined = pd.DataFrame([[False, True], [True, False]], index=maps.channels, columns=maps.channels)
    result = tfs.permutation_test(
        tfs.against_zero(maps, "a"), tfs.ThresholdFree(), alternative=tail, adjacency=joined, alpha=0.3
    )
    rows = [
        enhanced(whole_test.t_map(values[:, 0] * signs[:, None, None, None]), tail, 0.5, 2.0, [(0, 1)])
        for signs in whole_test.all_flips(7, tail == "two-sided")
    ]
    largest = np.array([row.max() for row in rows])
    assert np.sort(result.null) == pytest.approx(np.sort(largest), rel=1e-9)
    expected = (largest[:, None] >= rows[0].ravel() * (1 - 1e-9)).mean(axis=0).reshape(2, 3, 4)
    tested = result.tested
    assert tested.sum() == 23
    assert result.p_values[tested] == pytest.approx(expected[tested])
    assert "E = 0.5, H = 2" in result.methods()


def test_f_uses_its_own_exponent():
    maps = tfs.ConditionMaps(
        np.random.default_rng(1).normal(size=(8, 3, 1, 3, 4)), subjects=list("ABCDEFGH"), conditions=["2", "4", "6"],
        channels=["Fz"], frequencies=[4, 6, 8], times=[0, 0.1, 0.2, 0.3], unit="decibel",
    )  # fmt: skip
    result = tfs.permutation_test(tfs.repeated_measures(maps), tfs.ThresholdFree())
    assert result.null[0] == pytest.approx(enhanced(result.statistic, "greater", 0.5, 1.0, []).max())
    assert "H = 1" in result.methods()


def test_refusals():
    with pytest.raises(
        tfs.InputError,
        match=r"^ThresholdFree, E: expected a number above 0, got -1; 0\.5 and 2 are the usual exponents\.$",
    ):
        tfs.ThresholdFree(E=-1)
