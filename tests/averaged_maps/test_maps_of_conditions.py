import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs

NAMES = {
    "subjects": ["S1", "S2", "S3"],
    "conditions": ["recalled", "missed"],
    "channels": ["F3", "Fz", "Pz", "P4"],
    "frequencies": [4.0, 6.0, 8.0, 12.0, 16.0],
    "times": np.arange(6) * 0.1,
}


def made_maps(seed=0, values=None, **more):
    values = np.random.default_rng(seed).normal(size=(3, 2, 4, 5, 6)) if values is None else values
    return tfs.ConditionMaps(values, unit=more.pop("unit", "decibel"), **{**NAMES, **more})


def test_values_are_not_copied_and_float32_stays():
    values = np.zeros((3, 2, 4, 5, 6), dtype=np.float32)
    assert made_maps(values=values).values is values
    assert made_maps(values=values.astype(int)).values.dtype == np.float64


def test_power_without_a_baseline_has_the_unit_power():
    assert made_maps(unit="none").unit == "power"


def test_select_takes_labels_in_order_and_closed_windows():
    counts = np.arange(6).reshape(3, 2)
    people = pd.DataFrame({"participant_id": ["S3", "S1", "S2"], "age": [3, 1, 2]})
    maps = made_maps(trial_counts=counts, participants=people, wavelet_cycles=[3, 4, 5, 6, 7])
    part = maps.select(
        subjects=["S3", "S1"], conditions="missed", channels=["Pz", "F3"], frequencies=(6, 12), times=(0.1, 0.3)
    )
    expected = maps.values[[2, 0]][:, [1]][:, :, [2, 0], 1:4, 1:4]
    assert np.array_equal(part.values, expected)
    assert part.trial_counts.to_numpy().tolist() == [[5], [1]]
    assert part.participants["age"].tolist() == [3, 1]
    assert part.wavelet_cycles.tolist() == [4, 5, 6]


def test_means_over_groups_bands_and_windows():
    maps = made_maps()
    frontal = maps.mean_across("channels", {"frontal": ["F3", "Fz"], "posterior": ["Pz", "P4"]})
    assert frontal.channels == ("frontal", "posterior")
    np.testing.assert_allclose(frontal.values[:, :, 1], maps.values[:, :, 2:].mean(axis=2))
    bands = maps.mean_across("frequencies", {"theta": (4, 8), "beta": (12, 16)})
    assert bands.frequencies.tolist() == [6.0, 14.0]
    np.testing.assert_allclose(bands.values[:, :, :, 0], maps.values[:, :, :, :3].mean(axis=3))
    early = maps.mean_across("times", {"early": (0.1, 0.3)})
    np.testing.assert_allclose(early.times, [0.2])
    assert maps.mean_across("channels").channels == ("mean of 4 channels",)


def test_what_was_averaged_is_remembered_in_words():
    maps = made_maps().mean_across("channels", {"frontal": ["F3", "Fz"]}).mean_across("times", of="ratios")
    assert maps.averaged_by == (("channels", "units"), ("times", "ratios"))
    assert maps.history == (
        "Decibels were averaged over channels (frontal: F3, Fz), each point weighing the same.",
        "Ratios (turned back into decibels afterwards) were averaged over times (0 to 0.5 s), each point weighing the same.",
    )


def test_ratios_are_the_decibel_of_the_mean_ratio_and_alike_for_linear_units():
    maps = made_maps()
    expected = 10 * np.log10((10 ** (maps.values / 10)).mean(axis=3))
    np.testing.assert_allclose(maps.mean_across("frequencies", of="ratios").values[:, :, :, 0], expected)
    linear = made_maps(unit="percent_change")
    np.testing.assert_array_equal(
        linear.mean_across("times", of="ratios").values, linear.mean_across("times", of="units").values
    )


def test_ratios_against_a_geometric_baseline_mean_are_cautioned_once():
    maps = made_maps(baseline=tfs.Baseline(order="trial_first"))
    averaged = maps.mean_across("times", of="ratios").mean_across("channels", of="ratios")
    assert averaged.cautions == (
        "Decibels against a geometric baseline mean were averaged as ratios: under no change such a mean lies above zero, "
        'the mean of decibels (of="units") does not.',
    )
    assert maps.mean_across("times").cautions == ()
    assert made_maps(baseline=tfs.Baseline()).mean_across("times", of="ratios").cautions == ()


def test_points_missing_in_one_map_are_left_out_of_all_and_counted():
    values = np.random.default_rng(0).normal(size=(3, 2, 4, 5, 6))
    values[1, 0, 2, 0, 3] = np.nan
    mean = made_maps(values=values).mean_across("frequencies")
    np.testing.assert_allclose(mean.values[0, 1, 2, 0, 3], values[0, 1, 2, 1:, 3].mean())
    np.testing.assert_allclose(mean.values[0, 1, 2, 0, 2], values[0, 1, 2, :, 2].mean())
    assert mean.history[-1] == "In that mean 1 points that were missing in a map were left out of every map alike."


def test_a_map_without_any_point_of_the_group_stays_missing_alone():
    values = np.random.default_rng(0).normal(size=(3, 2, 4, 5, 6))
    values[2, :, 0] = np.nan
    mean = made_maps(values=values).mean_across("frequencies")
    assert np.isnan(mean.values[2, :, 0]).all()
    np.testing.assert_allclose(mean.values[:2, :, 0, 0], values[:2, :, 0].mean(axis=2))


@settings(deadline=None, max_examples=30)
@given(seed=st.integers(0, 1000), axis=st.sampled_from(["channels", "frequencies", "times"]))
def test_means_lie_between_their_points_and_ratios_above_units(seed, axis):
    maps = made_maps(seed)
    number = {"channels": 2, "frequencies": 3, "times": 4}[axis]
    units = maps.mean_across(axis).values
    ratios = maps.mean_across(axis, of="ratios").values
    low = maps.values.min(axis=number, keepdims=True) - 1e-12
    high = maps.values.max(axis=number, keepdims=True) + 1e-12
    assert np.all((low <= units) & (units <= ratios + 1e-12) & (ratios <= high))


def test_saved_maps_come_back_whole(tmp_path):
    people = pd.DataFrame(
        {
            "participant_id": ["S1", "S2", "S3"],
            "age": [31.5, np.nan, 40.0],
            "site": ["North", None, "Süd"],
            "visits": [1, 2, 3],
            "left_handed": [True, False, True],
        }
    )
    values = np.random.default_rng(0).normal(size=(3, 2, 4, 5, 6)).astype(np.float32)
    values[0, 0, 0] = np.nan
    maps = made_maps(
        values=values,
        trial_counts=np.full((3, 2), 40),
        participants=people,
        baseline=tfs.Baseline((-1, -0.5), "decibel", "named", reference_condition="rest", within="run"),
        history=["One."],
        cautions=["Two."],
        wavelet_cycles=[3, 4, 5, 6, 7],
        scaling="density",
        averaged_by=[("channels", "units")],
    )
    maps.save(tmp_path / "maps.npz")
    loaded = tfs.ConditionMaps.load(tmp_path / "maps.npz")
    assert loaded.values.dtype == np.float32
    np.testing.assert_array_equal(loaded.values, maps.values)
    for name in (
        "subjects",
        "conditions",
        "channels",
        "unit",
        "baseline",
        "history",
        "cautions",
        "scaling",
        "averaged_by",
    ):
        assert getattr(loaded, name) == getattr(maps, name), name
    for name in ("frequencies", "times", "wavelet_cycles"):
        np.testing.assert_array_equal(getattr(loaded, name), getattr(maps, name))
    pd.testing.assert_frame_equal(loaded.trial_counts, maps.trial_counts)
    assert loaded.participants["age"].tolist()[::2] == [31.5, 40.0] and np.isnan(loaded.participants["age"][1])
    assert loaded.participants["site"].tolist() == ["North", None, "Süd"]
    assert loaded.participants["visits"].dtype == np.int64 and loaded.participants["left_handed"].dtype == bool
    assert [path.name for path in tmp_path.iterdir()] == ["maps.npz"]


@pytest.mark.parametrize("optional", [{}, {"wavelet_cycles": 5}])
def test_maps_with_little_known_are_saved_too(tmp_path, optional):
    maps = made_maps(**optional)
    maps.save(tmp_path / "maps.npz")
    loaded = tfs.ConditionMaps.load(tmp_path / "maps.npz")
    assert loaded.trial_counts is None and loaded.participants is None and loaded.baseline is None
