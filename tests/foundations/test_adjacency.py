"""channel_adjacency: neighbours on a sphere, by distance, by pairs."""

import numpy as np
import pandas as pd
import pytest
from scipy.spatial import ConvexHull

import tfstats as tfs


def electrodes(positions, names=None):
    positions = np.asarray(positions, dtype=float)
    names = names or [f"E{number:02d}" for number in range(len(positions))]
    return pd.DataFrame({"name": names, "x": positions[:, 0], "y": positions[:, 1], "z": positions[:, 2]})


def cap(count, lowest=-0.3, seed=0):
    """Positions spread over the upper part of a unit sphere."""
    rng = np.random.default_rng(seed)
    height = rng.uniform(lowest, 1.0, count)
    angle = rng.uniform(0, 2 * np.pi, count)
    across = np.sqrt(1 - height**2)
    return np.column_stack([across * np.cos(angle), across * np.sin(angle), height])


def hull_edges(positions):
    """Neighbours on the whole sphere: the convex hull of points on a sphere is their Delaunay triangulation."""
    joined = np.zeros((len(positions),) * 2, dtype=bool)
    for triangle in ConvexHull(positions).simplices:
        for one, other in zip(triangle, np.roll(triangle, 1)):
            joined[one, other] = joined[other, one] = True
    return joined


def test_a_ring_around_the_top():
    # Cz and four around it; neighbours on the ring, not across it.
    table = electrodes(
        [[0, 0, 1], [0, 0.6, 0.8], [0, -0.6, 0.8], [-0.6, 0, 0.8], [0.6, 0, 0.8]], ["Cz", "Fz", "Pz", "C3", "C4"]
    )
    joined = tfs.channel_adjacency(table)
    assert list(joined.index) == list(joined.columns) == ["Cz", "Fz", "Pz", "C3", "C4"]
    assert joined.loc["Cz"].tolist() == [False, True, True, True, True]
    assert not joined.loc["Fz", "Pz"] and not joined.loc["C3", "C4"]
    assert joined.loc["Fz", "C3"] and joined.loc["Pz", "C4"]


@pytest.mark.parametrize("seed", range(5))
def test_triangles_are_those_on_the_sphere(seed):
    positions = cap(40, seed=seed)
    joined = tfs.channel_adjacency(electrodes(positions)).to_numpy()
    np.testing.assert_array_equal(joined, joined.T)
    assert not joined.diagonal().any() and joined.dtype == bool
    whole = hull_edges(positions)
    # All edges are edges of the hull, except where the stereographic plane closes around the rim.
    top = positions.mean(axis=0) / np.linalg.norm(positions.mean(axis=0))
    inner = positions @ top > np.quantile(positions @ top, 0.3)
    both = np.outer(inner, inner)
    np.testing.assert_array_equal(joined & both, whole & both)


@pytest.mark.parametrize("scale", [1.0, 0.085, 85.0])
def test_unit_place_and_turn_do_not_matter(scale):
    positions = cap(32, seed=7)
    turn = np.linalg.qr(np.random.default_rng(8).normal(size=(3, 3)))[0]
    expected = tfs.channel_adjacency(electrodes(positions))
    moved = tfs.channel_adjacency(electrodes(scale * (positions @ turn.T + [0.3, -2.0, 0.1])))
    pd.testing.assert_frame_equal(expected, moved)


def test_heads_are_not_round():
    positions = cap(60, seed=9) * [0.92, 1.1, 0.98] + np.random.default_rng(10).normal(scale=0.02, size=(60, 3))
    joined = tfs.channel_adjacency(electrodes(positions)).to_numpy()
    assert 3 <= joined.sum(axis=0).mean() <= 6


def test_farthest_leaves_out_long_edges():
    positions = cap(40, seed=11)
    everything = tfs.channel_adjacency(electrodes(positions)).to_numpy()
    short = tfs.channel_adjacency(electrodes(positions), farthest=0.6).to_numpy()
    apart = np.linalg.norm(positions[:, None] - positions[None], axis=2)
    np.testing.assert_array_equal(short, everything & (apart <= 0.6))
    assert short.sum() < everything.sum()


def test_distance():
    table = electrodes([[0, 0, 0], [0, 0, 3], [0, 0, 6], [9, 0, 0]], ["A", "B", "C", "D"])
    joined = tfs.channel_adjacency(table, rule="distance", farthest=3)
    assert joined.loc["A"].tolist() == [False, True, False, False] and joined.loc["B"].tolist() == [
        True,
        False,
        True,
        False,
    ]
    assert not joined.loc["D"].any()


def test_pairs():
    table = pd.DataFrame({"first": ["F3", "Fz", "F4"], "second": ["Fz", "F4", "Fz"]})
    joined = tfs.channel_adjacency(table, rule="pairs")
    assert list(joined.index) == ["F3", "Fz", "F4"]
    assert joined.to_numpy().tolist() == [[False, True, False], [True, False, True], [False, True, False]]


@pytest.mark.parametrize("inside", [True, False])
def test_positions_inside_the_head_or_on_paper_are_refused(inside):
    rng = np.random.default_rng(12)
    if inside:
        positions = rng.uniform(-1, 1, size=(30, 3))
        text = "positions within 20% of a sphere"
    else:
        positions = np.column_stack([rng.uniform(-1, 1, size=(30, 2)), np.zeros(30)])
        text = "got positions in a plane"
    with pytest.raises(tfs.InputError, match=text):
        tfs.channel_adjacency(electrodes(positions))
