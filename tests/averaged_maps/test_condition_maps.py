import h5py
import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

TIMES = np.arange(-8, 12) * 0.1
BASELINES = [
    tfs.Baseline(),
    tfs.Baseline(baseline_mean="geometric"),
    tfs.Baseline(unit="z_score"),
    tfs.Baseline(unit="percent_change", order="trial_first"),
    tfs.Baseline(order="trial_first"),
    tfs.Baseline(unit="z_score", order="trial_first"),
    tfs.Baseline(order="trial_by_reference", reference="own", within="run"),
    tfs.Baseline(unit="z_score", order="trial_by_reference"),
    tfs.Baseline(unit="ratio", reference="named", reference_condition="rest"),
    tfs.Baseline(unit="none"),
]


def made_values(seed, trials=12, channels=2, missing=0.0):
    random = np.random.default_rng(seed)
    values = random.exponential(size=(trials, channels, 3, TIMES.size)).astype(np.float32)
    values[random.random(values.shape) < missing] = np.nan
    return values


def subject(name, seed=0, trials=12, channels=("Fz", "Pz"), values=None, missing=0.0, **columns):
    return tfs.TrialPower(
        made_values(seed, trials, len(channels), missing) if values is None else values,
        frequencies=[4.0, 8.0, 16.0],
        times=TIMES,
        channels=channels,
        trials=pd.DataFrame(
            columns or {"memory": ["recalled", "missed", "rest"] * (trials // 3), "run": ["1", "2"] * (trials // 2)}
        ),
        subject=name,
        wavelet_cycles=5,
        scaling="density",
    )


def test_maps_carry_what_is_known():
    baseline = tfs.Baseline()
    people = pd.DataFrame({"participant_id": ["S2", "S1"], "age": [30, 40]})
    maps = tfs.condition_maps([subject("S1"), subject("S2", 1)], "memory", baseline, participants=people)
    assert maps.values.shape == (2, 3, 2, 3, 20) and maps.values.dtype == np.float64
    assert maps.subjects == ("S1", "S2") and maps.conditions == ("missed", "recalled", "rest")
    assert maps.trial_counts.loc["S1"].tolist() == [4, 4, 4]
    assert maps.participants["age"].tolist() == [40, 30]
    assert (maps.unit, maps.baseline, maps.scaling) == ("decibel", baseline, "density")
    assert maps.wavelet_cycles.tolist() == [5.0] * 3
    assert maps.history == (
        baseline.describe(),
        "Conditions, from the trial column memory, with the trials a subject had in each: missed (4), recalled (4), rest (4).",
    )
    assert maps.cautions == ()


def test_conditions_of_several_columns_are_joined_and_numbers_are_text():
    power = subject("S1", trials=4, load=[2.0, 2.0, 4.0, 4.0], memory=[True, False, True, False])
    maps = tfs.condition_maps([power], ["load", "memory"], tfs.Baseline())
    assert maps.conditions == ("2/0", "2/1", "4/0", "4/1")


def test_conditions_come_in_the_order_asked_for_and_pool_only_what_is_kept():
    power = subject("S1")
    maps = tfs.condition_maps([power], "memory", tfs.Baseline(unit="ratio"), conditions=["recalled", "missed"])
    assert maps.conditions == ("recalled", "missed")
    kept = np.asarray(power.values, dtype=float)[np.arange(12) % 3 != 2]
    level = kept[..., 3:7].mean(axis=(0, 3))
    expected = kept[::2].mean(axis=0) / level[..., None]
    np.testing.assert_allclose(maps.values[0, 0], expected, rtol=1e-6)


def test_a_named_reference_is_in_the_maps_only_when_listed():
    baseline = tfs.Baseline(reference="named", reference_condition="rest")
    assert tfs.condition_maps([subject("S1")], "memory", baseline).conditions == ("missed", "recalled")
    listed = tfs.condition_maps([subject("S1")], "memory", baseline, conditions=["rest", "missed"])
    assert listed.conditions == ("rest", "missed")
    rest = tfs.condition_maps([subject("S1")], "memory", tfs.Baseline(reference="own"))
    np.testing.assert_allclose(listed.values[:, 0], rest.values[:, 2], rtol=1e-12)


@pytest.mark.parametrize("layout", ["trials first", "trials last", "times first", "frequencies first"])
@pytest.mark.parametrize("missing", [0.0, 0.05])
@pytest.mark.parametrize("baseline", BASELINES, ids=str)
def test_power_in_a_file_gives_the_maps_of_power_in_memory(tmp_path, monkeypatch, baseline, layout, missing):
    from tfstats.power_files import stored_values

    values = made_values(3, missing=missing)
    order = {
        "trials first": (0, 1, 2, 3),
        "trials last": (3, 2, 1, 0),
        "times first": (3, 0, 1, 2),
        "frequencies first": (2, 0, 1, 3),
    }[layout]
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 2000)  # several blocks
    with h5py.File(tmp_path / "power.h5", "w") as file:
        stored = file.create_dataset("power", data=values.transpose(order))
        axes = tuple(int(place) for place in np.argsort(order))
        lazy = subject("S1", values=stored_values.StoredValues(stored, axes))
        assert len(list(lazy.blocks())) > 1
        from_file = tfs.condition_maps([lazy], "memory", baseline, conditions=["recalled", "missed"])
        trials = tfs.normalized_trials(lazy, baseline, by="memory") if baseline.single_trial else None
    in_memory = subject("S1", values=values)
    expected = tfs.condition_maps([in_memory], "memory", baseline, conditions=["recalled", "missed"])
    np.testing.assert_allclose(from_file.values, expected.values, rtol=1e-12, atol=1e-12)
    assert from_file.cautions == expected.cautions
    if trials is not None:
        np.testing.assert_array_equal(trials.values, tfs.normalized_trials(in_memory, baseline, by="memory").values)


def test_a_missing_value_of_a_trial_is_left_out_and_counted():
    values = made_values(4)
    values[0, 0, 0, 15] = np.nan
    maps = tfs.condition_maps([subject("S1", values=values)], "memory", tfs.Baseline(unit="none"))
    expected = np.asarray(values, dtype=float)[[3, 6, 9], 0, 0, 15].mean()
    assert maps.values[0, 1, 0, 0, 15] == pytest.approx(expected, rel=1e-7)
    assert maps.cautions == ("Missing values of single trials were left out of the mean at their point: S1 1 of 1440.",)


def test_a_point_that_no_trial_has_is_missing_and_not_counted():
    values = made_values(5)
    values[..., -3:] = np.nan
    maps = tfs.condition_maps([subject("S1", values=values)], "memory", tfs.Baseline())
    assert np.isnan(maps.values[..., -3:]).all() and np.isfinite(maps.values[..., :-3]).all()
    assert maps.cautions == ()


@pytest.mark.parametrize("order", ["average_first", "trial_first", "trial_by_reference"])
def test_a_frequency_without_a_baseline_is_missing_and_named(order):
    values = made_values(6)
    values[:, :, 0, 3:7] = np.nan
    values[:, 1, 1, 3:7] = np.nan
    maps = tfs.condition_maps([subject("S1", values=values)], "memory", tfs.Baseline(order=order))
    assert np.isnan(maps.values[:, :, :, 0]).all() and np.isnan(maps.values[:, :, 1, 1]).all()
    assert np.isfinite(maps.values[:, :, 0, 1:]).all()
    named = [text for text in maps.cautions if "no usable baseline sample" in text]
    assert named == [
        "Subject S1 has no usable baseline sample at 4 Hz: these frequencies are missing in the subject's maps.",
        "Subject S1 has no usable baseline sample at 1 other pairs of channel and frequency, which are missing in the "
        "subject's maps.",
    ]


def test_the_baseline_of_trials_with_different_gaps_goes_over_samples_then_trials():
    values = np.ones((2, 1, 3, TIMES.size), dtype=np.float32)
    values[0, ..., 3:7] = [1, 2, 3, np.nan]  # mean 2
    values[1, ..., 3:7] = [10, np.nan, np.nan, np.nan]  # mean 10, so 6 over trials
    power = subject("S1", values=values, channels=("Fz",), memory=["recalled", "recalled"])
    maps = tfs.condition_maps([power], "memory", tfs.Baseline(unit="ratio"))
    np.testing.assert_allclose(maps.values[0, 0, 0, :, 10], 1 / 6, rtol=1e-6)


def test_keep_common_keeps_the_channels_that_all_have_in_the_order_of_the_first():
    powers = [subject("S1", channels=("Fz", "Pz", "Cz")), subject("S2", channels=("Cz", "Fz")), subject("S3")]
    maps = tfs.condition_maps(powers, "memory", tfs.Baseline(), missing_channels="keep_common")
    assert maps.channels == ("Fz",)
    assert maps.history[-1] == (
        "Channels that some subjects lack were left out in all: Pz (missing in S2); Cz (missing in S3)."
    )
    alone = tfs.condition_maps([powers[1]], "memory", tfs.Baseline()).select(channels=["Fz"])
    assert np.array_equal(maps.values[1], alone.values[0])


def test_channels_in_another_order_are_matched_by_name():
    one, other = subject("S1"), subject("S2", seed=0, channels=("Pz", "Fz"))
    maps = tfs.condition_maps([one, other], "memory", tfs.Baseline())
    assert np.array_equal(maps.values[0, :, 0], maps.values[1, :, 1])


def test_unequal_counts_are_cautioned_with_their_bias():
    labels = ["recalled"] * 8 + ["missed"] * 4
    maps = tfs.condition_maps([subject("S1", memory=labels)], "memory", tfs.Baseline())
    assert maps.cautions == (
        "Conditions differ in their numbers of trials (4 to 8). The decibel of a mean over few trials lies too low, for "
        "Gaussian trials by 0.565 dB at 4 and 0.277 dB at 8, more where trials vary in overall power; within a subject this "
        "alone makes conditions differ by up to 0.288 dB.",
    )
    assert tfs.condition_maps([subject("S1", memory=labels)], "memory", tfs.Baseline(unit="ratio")).cautions == ()


def test_trials_without_a_label_are_left_out_and_counted():
    labels = ["recalled", "missed", None] * 4
    maps = tfs.condition_maps([subject("S1", memory=labels)], "memory", tfs.Baseline())
    assert maps.conditions == ("missed", "recalled")
    assert maps.cautions == ("Trials without a condition label were left out: S1 4.",)
    without = subject("S1").select(trials=np.arange(12) % 3 != 2)
    assert np.array_equal(maps.values, tfs.condition_maps([without], "memory", tfs.Baseline()).values)


def test_progress_and_a_generator_of_powers():
    seen = []
    powers = (subject(name) for name in ("S1", "S2"))
    tfs.condition_maps(powers, "memory", tfs.Baseline(), progress=lambda *step: seen.append(step))
    assert seen == [("S1", 1, None), ("S2", 2, None)]
    tfs.condition_maps([subject("S1")], "memory", tfs.Baseline(), progress=lambda *step: seen.append(step))
    assert seen[-1] == ("S1", 1, 1)


def test_settings_that_differ_between_subjects_are_not_passed_on():
    other = subject("S2")
    other.scaling = "amplitude"
    maps = tfs.condition_maps([subject("S1"), other], "memory", tfs.Baseline())
    assert maps.scaling is None and maps.wavelet_cycles.tolist() == [5.0] * 3
    assert maps.cautions == ("Subjects differ in scaling.",)
