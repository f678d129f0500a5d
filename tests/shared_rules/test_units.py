"""Every unit, reference and order against a plain twin, and the rules that all of them obey."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs
from tests.plain_versions.relative_units import condition_series
from tfstats.foundations.units import UNITS
from tfstats.normalization.baseline_choice import BASELINE_MEANS, ORDERS, REFERENCES

TIMES = np.arange(-6, 6) * 0.1
WINDOW = (-0.5, -0.2)
SAMPLES = [1, 2, 3, 4]
CHANNELS, FREQUENCIES = ["F3", "Pz"], [4.0, 8.0, 16.0]
LINEAR = ("percent_change", "ratio", "z_score")


def combinations():
    for unit, reference, order, within, mean in itertools.product(
        UNITS, REFERENCES, ORDERS, (None, "run"), (None, *BASELINE_MEANS)
    ):
        if unit == "z_score" and (mean == "geometric" or (within and order == "average_first")):
            continue  # refused, see the error texts
        yield tfs.Baseline(
            WINDOW,
            unit,
            reference,
            order,
            reference_condition="rest" if reference == "named" else None,
            within=within,
            baseline_mean=mean,
        )


COMBINATIONS = list(combinations())


def made_power(seed, trials=18, missing=0.0, dtype=np.float64, subject="S1"):
    random = np.random.default_rng(seed)
    values = random.exponential(size=(trials, len(CHANNELS), len(FREQUENCIES), TIMES.size)) + 1e-3
    values[random.random(values.shape) < missing] = np.nan
    labels = ["recalled", "missed", "rest"] * (trials // 3)
    # Six rows repeat: each label is found in each run, three times in all.
    runs = [("1", "1", "1", "2", "2", "2")[row % 6] for row in range(trials)]
    return tfs.TrialPower(
        values.astype(dtype),
        frequencies=FREQUENCIES,
        times=TIMES,
        channels=CHANNELS,
        trials=pd.DataFrame({"memory": labels, "run": runs}),
        subject=subject,
    )


def by_loops(power, baseline, conditions):
    labels = list(power.trials["memory"])
    groups = None if baseline.within is None else list(power.trials["run"])
    exact = np.asarray(power.values, dtype=np.float64)
    made = np.empty((len(conditions), *exact.shape[1:]))
    for place, channel, frequency in np.ndindex(made.shape[:3]):
        made[place, channel, frequency] = condition_series(
            exact[:, channel, frequency].tolist(),
            labels,
            groups,
            conditions[place],
            conditions,
            SAMPLES,
            baseline.unit,
            baseline.reference,
            baseline.order,
            baseline.mean_kind,
            baseline.reference_condition,
        )
    return made


@pytest.mark.parametrize("missing", [0.0, 0.1])
@pytest.mark.parametrize(
    "baseline", COMBINATIONS, ids=lambda b: f"{b.unit}-{b.reference}-{b.order}-{b.within}-{b.mean_kind}"
)
def test_every_combination_equals_its_plain_twin(baseline, missing):
    power = made_power(1, missing=missing)
    conditions = ("recalled", "missed")
    maps = tfs.condition_maps([power], "memory", baseline, conditions=conditions)
    np.testing.assert_allclose(maps.values[0], by_loops(power, baseline, conditions), rtol=1e-9, atol=1e-9)
    assert np.isfinite(maps.values).mean() > 0.9


@pytest.mark.parametrize("baseline", [b for b in COMBINATIONS if b.single_trial], ids=str)
def test_the_mean_of_normalized_trials_is_the_condition_map(baseline):
    power = made_power(2, missing=0.05)
    if baseline.reference == "pooled" and baseline.order == "trial_by_reference":
        conditions = ("recalled", "missed", "rest")  # normalized_trials pools all trials
    else:
        conditions = ("recalled", "missed")
    trials = tfs.normalized_trials(power, baseline, by="memory")
    maps = tfs.condition_maps([power], "memory", baseline, conditions=conditions)
    for place, condition in enumerate(conditions):
        rows = (power.trials["memory"] == condition).to_numpy()
        np.testing.assert_allclose(np.nanmean(trials.values[rows], axis=0), maps.values[0, place], rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("baseline", COMBINATIONS, ids=str)
def test_a_gain_that_differs_between_frequencies_and_channels_changes_nothing(baseline):
    power = made_power(3, missing=0.02)
    gain = np.exp(np.random.default_rng(0).normal(size=(len(CHANNELS), len(FREQUENCIES), 1)))
    louder = tfs.TrialPower(
        power.values * gain,
        frequencies=FREQUENCIES,
        times=TIMES,
        channels=CHANNELS,
        trials=power.trials,
        subject="S1",
    )
    before = tfs.condition_maps([power], "memory", baseline).values
    after = tfs.condition_maps([louder], "memory", baseline).values
    expected = before * gain if baseline.unit == "none" else before
    np.testing.assert_allclose(after, expected, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("baseline", COMBINATIONS, ids=str)
def test_the_order_of_trials_and_of_conditions_changes_nothing(baseline):
    power = made_power(4)
    order = np.random.default_rng(1).permutation(len(power.trials))
    shuffled = tfs.TrialPower(
        np.asarray(power.values)[order],
        frequencies=FREQUENCIES,
        times=TIMES,
        channels=CHANNELS,
        trials=power.trials.iloc[order].reset_index(drop=True),
        subject="S1",
    )
    one = tfs.condition_maps([power], "memory", baseline, conditions=["recalled", "missed"])
    other = tfs.condition_maps([shuffled], "memory", baseline, conditions=["missed", "recalled"])
    np.testing.assert_allclose(one.values, other.values[:, ::-1], rtol=1e-10, atol=1e-10)


@settings(deadline=None, max_examples=40)
@given(
    seed=st.integers(0, 2**32 - 1),
    first=st.integers(0, 10),
    length=st.integers(0, 5),
    order=st.sampled_from(["average_first", "trial_by_reference"]),
    mean=st.sampled_from(["arithmetic", "geometric"]),
)
def test_pooled_decibel_differences_do_not_depend_on_the_window(seed, first, length, order, mean):
    power = made_power(seed)
    window = (TIMES[first], TIMES[min(first + length, TIMES.size - 1)])
    differences = []
    for chosen in (WINDOW, window):
        baseline = tfs.Baseline(chosen, "decibel", "pooled", order, baseline_mean=mean)
        maps = tfs.condition_maps([power], "memory", baseline, conditions=["recalled", "missed"])
        differences.append(maps.values[:, 0] - maps.values[:, 1])
    np.testing.assert_allclose(differences[0], differences[1], rtol=1e-9, atol=1e-9)


def test_own_references_make_differences_depend_on_the_window():
    power = made_power(5)
    differences = []
    for window in (WINDOW, (-0.6, -0.3)):
        maps = tfs.condition_maps([power], "memory", tfs.Baseline(window, "decibel", "own"))
        differences.append(maps.values[:, 0] - maps.values[:, 1])
    assert np.abs(differences[0] - differences[1]).max() > 0.1


@settings(deadline=None, max_examples=30)
@given(seed=st.integers(0, 2**32 - 1), missing=st.sampled_from([0.0, 0.1]), within=st.sampled_from([None, "run"]))
def test_units_are_one_another_rewritten(seed, missing, within):
    """By "average_first": percent = 100 (ratio - 1), decibel = 10 log10 ratio (IEC 60027-3)."""
    power = made_power(seed, missing=missing)
    made = {
        unit: tfs.condition_maps([power], "memory", tfs.Baseline(WINDOW, unit, within=within)).values
        for unit in ("decibel", "percent_change", "ratio")
    }
    np.testing.assert_allclose(made["percent_change"], 100 * (made["ratio"] - 1), rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(made["decibel"], 10 * np.log10(made["ratio"]), rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize("unit", ["percent_change", "ratio"])
@pytest.mark.parametrize("reference", ["pooled", "own"])
def test_linear_units_are_alike_by_average_first_and_by_trial_and_reference(unit, reference):
    power = made_power(6)
    one, other = (
        tfs.condition_maps([power], "memory", tfs.Baseline(WINDOW, unit, reference, order)).values
        for order in ("average_first", "trial_by_reference")
    )
    np.testing.assert_allclose(one, other, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("baseline", COMBINATIONS, ids=str)
def test_float32_power_is_averaged_in_float64(baseline):
    exact = made_power(7)
    rounded = made_power(7, dtype=np.float32)
    assert np.asarray(rounded.values).dtype == np.float32
    maps = tfs.condition_maps([rounded], "memory", baseline)
    assert maps.values.dtype == np.float64
    np.testing.assert_allclose(
        maps.values, tfs.condition_maps([exact], "memory", baseline).values, rtol=1e-5, atol=2e-4
    )
