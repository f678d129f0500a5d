import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.normalization.power_sums import CellSums

TIMES = np.arange(-5, 10) * 0.1


def power_of(values, subject="S1", **columns):
    return tfs.TrialPower(
        values,
        frequencies=[4.0, 8.0],
        times=TIMES,
        channels=["Fz", "Pz"],
        trials=pd.DataFrame(columns or {"memory": ["recalled", "missed"] * (len(values) // 2)}),
        subject=subject,
        wavelet_cycles=5,
        scaling="density",
        notes=["Turned back from decibels."],
    )


@pytest.fixture
def power():
    return power_of(np.random.default_rng(0).exponential(size=(12, 2, 2, TIMES.size)).astype(np.float32))


def test_trials_keep_what_is_known_of_them(power):
    baseline = tfs.Baseline(order="trial_first")
    trials = tfs.normalized_trials(power, baseline)
    assert trials.values.dtype == np.float32 and trials.values.shape == power.values.shape
    assert (trials.unit, trials.baseline, trials.subject, trials.scaling) == ("decibel", baseline, "S1", "density")
    assert trials.channels == ("Fz", "Pz") and list(trials.trials["memory"][:2]) == ["recalled", "missed"]
    assert trials.history == ("Turned back from decibels.", baseline.describe(averaged=False))
    assert len(trials.cautions) == 1 and "Grandchamp & Delorme 2011" in trials.cautions[0]
    assert repr(trials) == "<RelativeTrials subject S1: 12 trials x 2 channels x 2 frequencies x 15 times, dB>"


def test_a_trial_without_baseline_samples_is_missing_and_the_others_are_not(power):
    values = np.array(power.values)
    values[3, :, :, :4] = np.nan
    trials = tfs.normalized_trials(power_of(values), tfs.Baseline((-0.5, -0.2), order="trial_first"))
    assert np.isnan(trials.values[3]).all() and np.isfinite(np.delete(trials.values, 3, axis=0)).all()
    held = tfs.normalized_trials(power_of(values), tfs.Baseline((-0.5, -0.2), order="trial_by_reference"))
    assert np.isfinite(held.values[3, :, :, 4:]).all()


def test_a_part_of_the_trials(power):
    trials = tfs.normalized_trials(power, tfs.Baseline(order="trial_first"))
    part = trials.select(trials={"memory": "missed"}, channels=["Pz"], frequencies=(5, 9), times=(0, 0.4))
    assert np.array_equal(part.values, trials.values[1::2, 1:, 1:, 5:10])
    assert part.channels == ("Pz",) and part.frequencies.tolist() == [8.0] and len(part.trials) == 6
    assert part.wavelet_cycles.tolist() == [5.0] and part.history == trials.history
    mask = np.arange(12) < 2
    assert np.array_equal(trials.select(trials=mask).values, trials.select(trials=[0, 1]).values)


def test_unit_none_gives_the_power_itself(power):
    trials = tfs.normalized_trials(power, tfs.Baseline(unit="none", order="trial_first"))
    assert np.array_equal(trials.values, power.values) and trials.unit == "power" and trials.cautions == ()


def test_one_reference_for_each_run(power):
    runs = ["1"] * 6 + ["2"] * 6
    values = np.array(power.values)
    values[6:] *= 100  # a run recorded with another gain
    louder = power_of(values, memory=list(power.trials["memory"]), run=runs)
    quiet = power_of(np.array(power.values), memory=list(power.trials["memory"]), run=runs)
    baseline = tfs.Baseline(order="trial_by_reference", within="run")
    np.testing.assert_allclose(
        tfs.normalized_trials(louder, baseline).values, tfs.normalized_trials(quiet, baseline).values, atol=2e-5
    )


@pytest.mark.parametrize("layout", ["trials first", "trials last", "strided", "float64"])
def test_sums_over_any_memory_layout_with_and_without_gaps(layout):
    random = np.random.default_rng(1)
    values = random.exponential(size=(30, 3, 7, 401))
    if layout == "trials last":
        values = np.ascontiguousarray(values.transpose(3, 2, 1, 0)).transpose(3, 2, 1, 0)
    if layout == "strided":
        values = np.ascontiguousarray(np.repeat(values, 2, axis=3))[..., ::2]
    if layout != "float64":
        values = values.astype(np.float32, order="K")
    cells = random.integers(-1, 3, 30)
    place = tuple(slice(0, size) for size in values.shape)
    for missing in (0.0, 0.01):
        gaps = random.random(values.shape) < missing
        holed = np.where(gaps, np.nan, values) if missing else values
        sums = CellSums(cells, 3, values.shape[1:])
        sums.add(holed, place)
        for cell in range(3):
            chosen = np.asarray(holed[cells == cell], dtype=np.float64)
            np.testing.assert_allclose(sums.total[cell], np.nansum(chosen, axis=0), rtol=1e-12)
            expected = np.count_nonzero(~np.isnan(chosen), axis=0)
            assert np.array_equal(np.broadcast_to(sums.finite, sums.total.shape)[cell], expected)
        assert (sums.missing is None) == (missing == 0.0)


def test_gaps_in_trials_that_are_not_used_leave_the_sums_alone():
    values = np.ones((4, 1, 1, 5))
    values[3] = np.nan
    sums = CellSums(np.array([0, 0, 1, -1]), 2, (1, 1, 5))
    sums.add(values, tuple(slice(0, size) for size in values.shape))
    assert np.array_equal(sums.total[:, 0, 0], [[2.0] * 5, [1.0] * 5])
    assert np.all(sums.finite[:, 0, 0, 0] == [2, 1])
