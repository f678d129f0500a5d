"""The cluster table against what a reader would work out by hand."""

import numpy as np
import pytest
from scipy import ndimage

import tfstats as tfs
from tfstats.findings.cluster_tables import CLUSTER_COLUMNS, cell_sizes


@pytest.fixture
def planted():
    """Two blobs: a large positive one over two channels, a small negative one."""
    rng = np.random.default_rng(5)
    values = rng.normal(size=(12, 1, 3, 6, 8))
    values[:, 0, 0:2, 1:4, 2:6] += 3.0
    values[:, 0, 2, 4, 6:8] -= 3.0
    maps = tfs.ConditionMaps(
        values, subjects=[f"S{i}" for i in range(12)], conditions=["a"], channels=["F3", "Fz", "Pz"],
        frequencies=2.0 ** np.arange(1, 7), times=0.05 * np.arange(8), unit="percent_change",
    )  # fmt: skip
    import pandas as pd

    joined = pd.DataFrame([[0, 1, 0], [1, 0, 0], [0, 0, 0]], index=maps.channels, columns=maps.channels).astype(bool)
    return tfs.permutation_test(
        tfs.against_zero(maps, "a"), tfs.ClusterMass(0.001), adjacency=joined, permutations=5000
    )


def test_columns_and_order(planted):
    table = planted.clusters
    assert tuple(table.columns) == CLUSTER_COLUMNS
    assert table["cluster"].tolist() == list(range(1, len(table) + 1))
    assert (np.diff(table["mass"]) <= 0).all() and (table["mass"] > 0).all()
    assert sorted(np.unique(planted.cluster_labels)) == list(range(len(table) + 1))


def test_first_cluster_by_hand(planted):
    row = planted.clusters.iloc[0]
    region = planted.cluster_labels == 1
    t = planted.statistic
    assert (row.sign, row.points) == (1, region.sum())
    assert row.mass == pytest.approx(np.abs(t[region]).sum())
    assert row.channels == "F3;Fz"
    c, f, k = np.nonzero(region)
    assert (row.frequency_low, row.frequency_high) == (2.0 ** (1 + f.min()), 2.0 ** (1 + f.max()))
    assert (row.time_start, row.time_stop) == pytest.approx((0.05 * k.min(), 0.05 * k.max()))
    peak = np.unravel_index(np.argmax(np.where(region, np.abs(t), 0)), t.shape)
    assert row.peak_statistic == t[peak] and row.peak_channel == planted.channels[peak[0]]
    assert (row.peak_frequency, row.peak_time) == (planted.frequencies[peak[1]], planted.times[peak[2]])
    # Each frequency-time cell once across channels; octaves apart by one, times by 0.05 s.
    assert row.octave_seconds == pytest.approx(0.05 * np.any(region, axis=0).sum())
    by_subject = planted.subject_values[:, region].mean(axis=1)
    assert row.estimate == pytest.approx(by_subject.mean())
    assert row.effect_size == pytest.approx(by_subject.mean() / by_subject.std(ddof=1))
    assert row.p == (1 + np.sum(planted.null[1:] >= row.mass * (1 - 1e-9))) / planted.null.size
    assert planted.null[0] == pytest.approx(row.mass)


def test_negative_cluster_and_its_sign(planted):
    negative = planted.clusters[planted.clusters["sign"] == -1].iloc[0]
    assert negative.channels == "Pz" and negative.peak_statistic < 0 < negative.mass
    assert negative.estimate < 0


def test_labels_are_connected_regions(planted):
    # Per channel, scipy.ndimage.label as the oracle for parts; channels are joined in the engine's own tests.
    for sign in (1, -1):
        beyond = sign * planted.statistic[2] > planted.record.threshold
        labels, number = ndimage.label(beyond)
        mine = planted.cluster_labels[2] * beyond
        assert len(np.unique(mine[mine > 0])) == number
        for label in range(1, number + 1):
            assert len(np.unique(mine[labels == label])) == 1


def test_cells_in_octave_seconds():
    sizes = cell_sizes(np.array([2.0, 4.0, 16.0]), np.array([0.0, 0.1, 0.3]))
    # Geometric midpoints at 2^1.5 and 2^3: widths 1, 1.5 and 2 octaves with mirrored ends; times 0.1, 0.15, 0.2 s.
    assert sizes == pytest.approx(np.outer([1.0, 1.5, 2.0], [0.1, 0.15, 0.2]))
    assert np.isnan(cell_sizes(np.array([6.0]), np.array([0.0, 0.1]))).all()


def test_other_corrections_list_the_parts_of_the_mask(planted):
    result = tfs.permutation_test(planted.contrast, tfs.MaxStatistic(), permutations=5000)
    assert (result.clusters["p"] <= 0.05).all()
    assert result.clusters["points"].sum() == result.mask.sum()
    for row in result.clusters.itertuples():
        assert row.p == result.p_values[result.cluster_labels == row.cluster].min()


def test_no_cluster_at_all():
    values = (
        np.tile(np.array([1.0, -1.0])[:, None, None, None, None], (4, 1, 1, 2, 2))
        * np.linspace(1, 1.1, 8)[:, None, None, None, None]
    )
    maps = tfs.ConditionMaps(
        values, subjects=list("ABCDEFGH"), conditions=["a"], channels=["Fz"], frequencies=[4, 8], times=[0.0, 0.1],
        unit="percent_change",
    )  # fmt: skip
    result = tfs.permutation_test(tfs.against_zero(maps, "a"), tfs.ClusterMass(0.01))
    assert len(result.clusters) == 0 and tuple(result.clusters.columns) == CLUSTER_COLUMNS
    assert not result.mask.any() and result.null[0] == 0
    assert "no point exceeded the forming threshold" in result.sentence()
