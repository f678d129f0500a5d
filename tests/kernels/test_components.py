"""Connected components and summaries of one map, against scipy.ndimage.label and the full graph."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tests.plain_versions import relabelled_maps as plain
from tfstats.kernels.components import label_components, map_workspace, mark_beyond, summarise_map

TAILS = ["two-sided", "greater", "less"]
SUMMARIES = ["maximum", "mass", "extent", "enhanced"]


@st.composite
def maps(draw):
    """A map with ties and gaps, channels joined at random."""
    shape = draw(st.tuples(st.integers(1, 4), st.integers(1, 6), st.integers(1, 9)))
    seed = draw(st.integers(0, 2**32 - 1))
    generator = np.random.default_rng(seed)
    values = generator.standard_normal(shape)
    if draw(st.booleans()):
        values = np.round(values * 2) / 2
    values[generator.random(shape) < draw(st.sampled_from([0.0, 0.1]))] = np.nan
    pairs = [(a, b) for b in range(shape[0]) for a in range(b) if generator.random() < 0.5]
    return values.astype(draw(st.sampled_from([np.float32, np.float64]))), np.array(pairs, np.int64).reshape(-1, 2)


def marked(statistic, critical, tail):
    beyond = np.full(statistic.shape, 7, np.int8)
    mark_beyond(statistic, np.full(statistic.shape, critical), TAILS.index(tail), beyond)
    return beyond


@settings(deadline=None, max_examples=150)
@given(maps(), st.sampled_from([0.0, 0.4, 1.0]), st.sampled_from(TAILS))
def test_labels_are_those_of_the_full_graph(case, critical, tail):
    statistic, edges = case
    beyond = marked(statistic, critical, tail)
    np.testing.assert_array_equal(beyond, plain.beyond_map(statistic, critical, tail))
    labels, number = label_components(statistic, beyond, edges)
    expected, expected_number = plain.components(beyond, edges)
    assert number == expected_number
    np.testing.assert_array_equal(labels, expected)


@pytest.mark.parametrize("shape", [(1, 30, 200), (3, 17, 70), (2, 1, 300), (1, 300, 1)])
def test_channels_that_are_not_joined_have_the_parts_of_image_labelling(shape):
    statistic = np.random.default_rng(3).standard_normal(shape)
    beyond = marked(statistic, 0.3, "two-sided")
    labels, number = label_components(statistic, beyond, np.zeros((0, 2), np.int64))
    parts = {frozenset(np.flatnonzero(labels.ravel() == k + 1).tolist()) for k in range(number)}
    assert parts == {frozenset(part) for part in plain.components_by_image_labelling(beyond)}


def test_a_diagonal_does_not_connect_and_a_joined_channel_does():
    beyond = np.zeros((2, 2, 2), np.int8)
    beyond[0, 0, 0] = beyond[0, 1, 1] = beyond[1, 1, 1] = 1
    none, apart = label_components(beyond.astype(float), beyond, np.zeros((0, 2), np.int64))
    assert apart == 3
    assert none.dtype == np.int32
    joined, number = label_components(beyond.astype(float), beyond, np.array([[0, 1]]))
    assert number == 2
    assert joined[0, 1, 1] == joined[1, 1, 1] == 2


@settings(deadline=None, max_examples=150)
@given(maps(), st.sampled_from(TAILS), st.sampled_from(SUMMARIES))
def test_summary_of_a_map_is_that_of_its_twin(case, tail, summary):
    statistic, edges = case
    critical = np.full(statistic.shape, 0.6)
    critical[np.isnan(statistic)] = np.nan
    space = map_workspace(statistic.shape)
    for array in space[:2]:
        array.fill(-5)
    got = summarise_map(statistic, critical, TAILS.index(tail), SUMMARIES.index(summary), edges, 0.5, 2.0, *space)
    assert got == pytest.approx(
        plain.summary_of_map(statistic.astype(float), summary, tail, critical, edges), rel=1e-9, abs=1e-12
    )


def test_critical_values_by_point_are_strict():
    statistic = np.array([[[2.0, 2.0, 2.0, -2.0]]])
    critical = np.array([[[1.9, 2.0, np.inf, np.nan]]])
    space = map_workspace(statistic.shape)
    assert summarise_map(statistic, critical, 0, 1, np.zeros((0, 2), np.int64), 0.5, 2.0, *space) == 2.0
    assert summarise_map(statistic, np.full((1, 1, 4), 3.0), 0, 1, np.zeros((0, 2), np.int64), 0.5, 2.0, *space) == 0.0
