"""Threshold-free enhancement against closed forms (Smith & Nichols 2009, NeuroImage 44:83) and the plain integral."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.kernels.test_components import TAILS, maps
from tests.plain_versions import relabelled_maps as plain
from tfstats.kernels.enhancement import enhanced_map, enhancement_workspace, largest_enhanced

NO_EDGES = np.zeros((0, 2), np.int64)


def enhanced(statistic, tail="two-sided", extent_power=0.5, height_power=2.0, edges=NO_EDGES):
    space = enhancement_workspace(statistic.shape)
    return enhanced_map(statistic, TAILS.index(tail), extent_power, height_power, edges, space)


@pytest.mark.parametrize(("height", "extent", "value"), [(2.0, 12, 9.2376043), (3.0, 7, 23.8117618)])
def test_a_box(height, extent, value):
    statistic = np.zeros((1, 3, 20))
    statistic[0, 1, 2 : 2 + extent] = -height
    result = enhanced(statistic)
    np.testing.assert_allclose(result[0, 1, 2 : 2 + extent], -value, rtol=1e-8)
    assert np.count_nonzero(result) == extent


def test_a_stair():
    statistic = np.zeros((1, 1, 9))
    statistic[0, 0, 2:7] = 1.0
    statistic[0, 0, 3:5] = 3.0
    low = 5**0.5 / 3
    high = low + 2**0.5 * (27 - 1) / 3
    np.testing.assert_allclose(enhanced(statistic)[0, 0], [0, 0, low, high, high, low, low, 0, 0], rtol=1e-12)


def test_two_peaks_that_meet_share_what_lies_below_the_saddle():
    # By hand, E = 1, H = 1: heights 2 and 3 over a saddle of 1, extent 1 each above it and 3 below.
    statistic = np.array([[[2.0, 1.0, 3.0]]])
    below = 3 * 0.5
    expected = [below + 0.5 * (4 - 1), below, below + 0.5 * (9 - 1)]
    np.testing.assert_allclose(enhanced(statistic, extent_power=1.0, height_power=1.0)[0, 0], expected, rtol=1e-13)


@settings(deadline=None, max_examples=150)
@given(maps(), st.sampled_from(TAILS), st.sampled_from([(0.5, 2.0), (1.0, 1.0), (0.7, 1.5)]))
def test_maps_and_maxima_are_those_of_the_plain_integral(case, tail, powers):
    statistic, edges = case
    got = enhanced(statistic, tail, *powers, edges)
    expected = plain.enhanced(statistic.astype(np.float64), tail, *powers, edges)
    largest = np.nanmax(np.abs(expected), initial=0.0)
    np.testing.assert_allclose(got, expected, rtol=1e-9, atol=1e-12 * max(1.0, largest))
    most = largest_enhanced(statistic, TAILS.index(tail), *powers, edges, enhancement_workspace(statistic.shape))
    assert most == pytest.approx(largest, rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("scale", [1e-7, 1.0, 1e6])
def test_values_of_any_size_and_a_huge_one_among_them(scale):
    statistic = np.random.default_rng(5).standard_normal((1, 8, 40)) * scale
    statistic[0, 4, 20] = 1e6
    expected = plain.enhanced(statistic, "two-sided", 0.5, 2.0, NO_EDGES)
    np.testing.assert_allclose(enhanced(statistic), expected, rtol=1e-7, atol=1e-14 * np.abs(expected).max())


def test_working_space_of_another_map_leaves_no_trace():
    generator = np.random.default_rng(8)
    first, second = generator.standard_normal((2, 2, 5, 11))
    edges = np.array([[0, 1]])
    space = enhancement_workspace(first.shape)
    alone = largest_enhanced(second, 0, 0.5, 2.0, edges, space)
    largest_enhanced(first, 0, 0.5, 2.0, edges, space)
    assert largest_enhanced(second, 0, 0.5, 2.0, edges, space) == alone


def test_nothing_to_enhance():
    for fill in (0.0, np.nan):
        statistic = np.full((1, 2, 3), fill)
        assert largest_enhanced(statistic, 0, 0.5, 2.0, NO_EDGES, enhancement_workspace(statistic.shape)) == 0.0
