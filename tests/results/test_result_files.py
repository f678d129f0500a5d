"""A result written to files and read again is the same result."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

CORRECTIONS = [
    tfs.ClusterMass(0.2),
    tfs.ClusterExtent(0.2),
    tfs.MaxStatistic(),
    tfs.FalseDiscoveryRate("benjamini_yekutieli"),
]


@pytest.mark.parametrize("correction", CORRECTIONS, ids=lambda c: c.kind)
def test_round_trip(make_maps, tmp_path, correction):
    result = tfs.permutation_test(tfs.paired(make_maps(), "recalled", "missed"), correction, alpha=0.3)
    result.save(tmp_path / "one")
    again = tfs.ContrastResult.load(tmp_path / "one")
    for name in ("statistic", "p_values", "point_p_values", "estimate", "effect_size", "mask", "null", "cluster_labels",
                 "subject_values", "subjects_at_point", "frequencies", "times"):  # fmt: skip
        assert np.array_equal(getattr(result, name), getattr(again, name), equal_nan=True), name
    pd.testing.assert_frame_equal(result.clusters, again.clusters, check_dtype=False)
    pd.testing.assert_frame_equal(result.region_table, again.region_table, check_dtype=False)
    for name in ("df", "statistic_name", "effect_name", "estimate_unit", "enumerated", "exact", "cautions", "record"):
        assert getattr(result, name) == getattr(again, name), name
    assert (result.sentence(), result.methods(), result.summary()) == (
        again.sentence(),
        again.methods(),
        again.summary(),
    )
    assert list(again.contrast.condition_means) == ["recalled", "missed"]


def test_files_for_other_programs(make_maps, tmp_path):
    result = tfs.permutation_test(tfs.paired(make_maps(), "recalled", "missed"), tfs.ClusterMass(0.2))
    result.save(tmp_path)
    assert sorted(path.name for path in tmp_path.iterdir()) == [
        "clusters.csv",
        "maps.npz",
        "result.npz",
        "subject_values.csv",
    ]
    with np.load(tmp_path / "maps.npz", allow_pickle=False) as maps:
        assert sorted(maps.files) == sorted(
            ["channels", "frequencies", "times", "statistic", "p_values", "point_p_values", "estimate", "effect_size", "mask",
             "cluster_labels"]
        )  # fmt: skip
        assert np.array_equal(maps["statistic"], result.statistic, equal_nan=True)
    table = pd.read_csv(tmp_path / "clusters.csv")
    assert table["mass"].to_numpy() == pytest.approx(result.clusters["mass"].to_numpy())
    values = pd.read_csv(tmp_path / "subject_values.csv")
    assert list(values.columns) == ["subject", "condition", "region", "value", "unit"]
    one = values[(values["region"] == "cluster 1") & (values["condition"] == "recalled - missed")]
    region = result.cluster_labels == 1
    assert one["value"].to_numpy() == pytest.approx(result.subject_values[:, region].mean(axis=1))


def test_a_damaged_file_is_refused(make_maps, tmp_path):
    result = tfs.permutation_test(tfs.paired(make_maps(), "recalled", "missed"), tfs.ClusterMass(0.2))
    result.save(tmp_path)
    path = tmp_path / "result.npz"
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    with pytest.raises(tfs.InputError, match="expected a result that tfstats saved"):
        tfs.ContrastResult.load(tmp_path)
