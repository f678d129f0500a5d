"""Equal trial counts by seeded draws, the jackknife in words, and bytes that do not depend on how power is read."""

from __future__ import annotations

import h5py
import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.averaged_maps.equal_counts import labels_of_a_draw
from tfstats.foundations.random_streams import raw_words

TIMES = np.arange(-6, 6) * 0.1


def power_of(counts, subject="S1", seed=0, missing=0.0, dtype=np.float64):
    random = np.random.default_rng(seed)
    labels = [name for name, number in counts.items() for _ in range(number)]
    values = random.exponential(size=(len(labels), 2, 3, TIMES.size))
    values[random.random(values.shape) < missing] = np.nan
    return tfs.TrialPower(
        values.astype(dtype),
        frequencies=[4.0, 8.0, 16.0],
        times=TIMES,
        channels=["Fz", "Pz"],
        trials=pd.DataFrame({"memory": labels}),
        subject=subject,
    )


COUNTS = {"recalled": 9, "missed": 5, "unsure": 5}
BASELINES = [
    tfs.Baseline(),
    tfs.Baseline(order="trial_first"),
    tfs.Baseline(unit="z_score", reference="own"),
    tfs.Baseline(unit="percent_change", reference="named", reference_condition="unsure", order="trial_by_reference"),
    tfs.Baseline(unit="none"),
]


def test_a_draw_belongs_to_seed_subject_condition_and_number():
    labels = ["recalled"] * 9 + ["missed"] * 5
    kept = labels_of_a_draw(labels, ("recalled", "missed"), "S1", 3, 2)
    words = raw_words(3, "equal trial counts/S1/recalled", 18, 27)
    expected = sorted(np.argsort(words, kind="stable")[:5].tolist())
    assert [row for row, label in enumerate(kept) if label == "recalled"] == expected
    assert kept[9:] == ["missed"] * 5
    # Another condition of that size or more changes nothing.
    more = labels_of_a_draw([*labels, *["unsure"] * 5], ("recalled", "missed", "unsure"), "S1", 3, 2)
    assert more[:14] == kept
    others = [
        labels_of_a_draw(labels, ("recalled", "missed"), *which) for which in (("S2", 3, 2), ("S1", 4, 2), ("S1", 3, 1))
    ]
    assert all(other != kept for other in others)


@pytest.mark.parametrize("baseline", BASELINES, ids=lambda baseline: f"{baseline.unit}-{baseline.order}")
@pytest.mark.parametrize("subsamples", [1, 3])
def test_equal_counts_are_the_mean_of_the_maps_of_the_chosen_trials(baseline, subsamples):
    power = power_of(COUNTS)
    conditions = ["recalled", "missed"]
    maps = tfs.condition_maps(
        [power], "memory", baseline, conditions=conditions, trial_counts="equal", seed=7, subsamples=subsamples
    )
    expected = []
    for draw in range(subsamples):
        kept = labels_of_a_draw(list(power.trials["memory"]), conditions, "S1", 7, draw)
        chosen = power.select(trials=np.array([label is not None for label in kept]))
        expected.append(tfs.condition_maps([chosen], "memory", baseline, conditions=conditions).values)
    np.testing.assert_allclose(maps.values, np.mean(expected, axis=0), rtol=1e-12, atol=1e-12)
    assert maps.trial_counts.to_numpy().tolist() == [[5, 5]]


def test_equal_counts_say_what_they_did():
    powers = [power_of(COUNTS), power_of({"recalled": 4, "missed": 4, "unsure": 6}, "S2")]
    maps = tfs.condition_maps(powers, "memory", tfs.Baseline(), conditions=["recalled", "missed"], trial_counts="equal")
    assert maps.trial_counts.to_numpy().tolist() == [[5, 5], [4, 4]]
    assert maps.history[1:] == (
        "Conditions, from the trial column memory, with the trials a subject had in each: recalled (4 to 9), missed (4 to 5).",
        "Within each subject as many trials of each condition as the condition with fewest had were drawn at random without "
        "replacement (seed 0); maps were averaged over 20 such draws.",
    )
    assert maps.cautions == (
        "Averaging over 20 draws removes the bias of the mean that unequal trial counts cause, not the larger variance of the "
        "condition with fewer trials; a single draw (subsamples=1) removes both, at the price of trials thrown away.",
    )
    single = tfs.condition_maps(
        powers, "memory", tfs.Baseline(), conditions=["recalled", "missed"], trial_counts="equal", seed=4, subsamples=1
    )
    assert single.cautions == () and single.history[-1].endswith("(seed 4); one such draw was used.")


def test_the_jackknife_says_what_it_did():
    maps = tfs.condition_maps([power_of(COUNTS)], "memory", tfs.Baseline(), trial_counts="jackknife")
    assert maps.history[-1] == (
        "The decibels of means over trials, of the conditions and of the baseline, were corrected for the bias of few trials "
        "by the jackknife over trials (n T - (n - 1) times the mean of T without each trial)."
    )
    assert maps.cautions == (
        "The jackknife removes the bias of the mean that unequal trial counts cause, not the larger variance of the condition "
        "with fewer trials.",
    )
    assert maps.trial_counts.to_numpy().tolist() == [[5, 9, 5]]


def test_counts_that_are_equal_already_stay_as_they_are():
    power = power_of({"recalled": 6, "missed": 6})
    one = tfs.condition_maps([power], "memory", tfs.Baseline())
    other = tfs.condition_maps([power], "memory", tfs.Baseline(), trial_counts="equal")
    assert np.array_equal(one.values, other.values) and other.cautions == ()


def test_points_with_a_single_trial_have_no_jackknife():
    power = power_of({"recalled": 3, "missed": 3})
    values = np.array(power.values)
    values[:2, 0, 0, 10] = np.nan
    power = tfs.TrialPower(
        values, frequencies=power.frequencies, times=TIMES, channels=power.channels, trials=power.trials, subject="S1"
    )
    maps = tfs.condition_maps(
        [power], "memory", tfs.Baseline(), conditions=["recalled", "missed"], trial_counts="jackknife"
    )
    assert np.isnan(maps.values[0, 0, 0, 0, 10]) and np.isnan(maps.values).sum() == 1


@pytest.mark.parametrize("missing", [0.0, 0.03])
@pytest.mark.parametrize("trial_counts", ["as_recorded", "jackknife", "equal"])
@pytest.mark.parametrize("baseline", BASELINES, ids=lambda baseline: f"{baseline.unit}-{baseline.order}")
def test_maps_have_the_same_bytes_however_power_is_read(tmp_path, monkeypatch, baseline, trial_counts, missing):
    from tfstats.power_files import stored_values

    if trial_counts == "jackknife" and baseline != tfs.Baseline():
        return  # refused, see the error texts
    if baseline.unit == "z_score" and trial_counts != "equal":
        baseline = tfs.Baseline(unit="z_score")
    power = power_of(COUNTS, missing=missing, dtype=np.float32)
    arguments = {"conditions": ["recalled", "missed"], "trial_counts": trial_counts}
    expected = tfs.condition_maps([power], "memory", baseline, **arguments).values
    for order in ((0, 1, 2, 3), (3, 2, 1, 0), (1, 0, 2, 3)):
        for size in (700, 4000, 10**6):
            monkeypatch.setattr(stored_values, "BLOCK_BYTES", size)
            with h5py.File(tmp_path / "power.h5", "w") as file:
                stored = file.create_dataset("power", data=np.asarray(power.values).transpose(order))
                lazy = tfs.TrialPower(
                    stored_values.StoredValues(stored, tuple(int(place) for place in np.argsort(order))),
                    frequencies=power.frequencies, times=TIMES, channels=power.channels, trials=power.trials, subject="S1",
                )  # fmt: skip
                made = tfs.condition_maps([lazy], "memory", baseline, **arguments).values
            assert np.array_equal(made, expected, equal_nan=True), (order, size)
