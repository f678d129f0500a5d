"""Decibels, percent, and the bias of logarithms: values from outside, through the public functions."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.foundations.units import decibels
from tfstats.normalization import decibel_bias_of_mean, decibel_bias_of_single_trials

TIMES = np.array([-0.2, -0.1, 0.0])
WINDOW = (-0.2, -0.1)


def power_of(values, labels=None, times=TIMES):
    values = np.asarray(values, dtype=float)
    return tfs.TrialPower(
        values.reshape(len(values), -1, 1, len(times)),
        frequencies=[10.0],
        times=times,
        channels=[f"C{channel}" for channel in range(values.size // len(values) // len(times))],
        trials=pd.DataFrame({"memory": labels or ["recalled"] * len(values)}),
        subject="S1",
    )


# Definition of the decibel for power ratios (IEC 60027-3): 10 log10.
@pytest.mark.parametrize("ratio, expected", [(2.0, 3.0102999566), (10.0, 10.0), (0.5, -3.0102999566), (1.0, 0.0)])
def test_power_ratios_in_decibels_and_percent(ratio, expected):
    power = power_of([[5.0, 5.0, 5.0 * ratio]])
    for order in ("average_first", "trial_first", "trial_by_reference"):
        made = tfs.condition_maps([power], "memory", tfs.Baseline(WINDOW, "decibel", order=order))
        assert made.values[0, 0, 0, 0, 2] == pytest.approx(expected, abs=1e-10)
        made = tfs.condition_maps([power], "memory", tfs.Baseline(WINDOW, "percent_change", order=order))
        assert made.values[0, 0, 0, 0, 2] == pytest.approx(100 * (ratio - 1), abs=1e-9)
    assert decibels(ratio) == pytest.approx(expected, abs=1e-10)


def test_logarithm_of_a_mean_and_mean_of_logarithms_by_hand():
    """Two trials, 4 and 16 against a baseline of 1: 10 log10(10) = 10, and (6.0206 + 12.0412)/2 = 9.0309."""
    power = power_of([[1.0, 1.0, 4.0], [1.0, 1.0, 16.0]])
    average, trial = (
        tfs.condition_maps([power], "memory", tfs.Baseline(WINDOW, order=order)).values[0, 0, 0, 0, 2]
        for order in ("average_first", "trial_first")
    )
    assert average == pytest.approx(10.0, abs=1e-12)
    assert trial == pytest.approx(10 * np.log10(8.0), abs=1e-12)


def test_z_score_by_hand():
    """Baseline 2 and 4: mean 3, SD sqrt(2) with ddof 1; activity 7 lies 4/sqrt(2) above."""
    made = tfs.condition_maps([power_of([[2.0, 4.0, 7.0]])], "memory", tfs.Baseline(WINDOW, "z_score"))
    assert made.values[0, 0, 0, 0, 2] == pytest.approx(4 / np.sqrt(2), abs=1e-12)


def gaussian_power(trials, baseline_samples, channels=1, seed=3):
    """Independent chi-square(2)/2 at every sample: power of a Gaussian signal at one time and frequency."""
    random = np.random.default_rng(seed)
    times = np.arange(-baseline_samples, 1) * 0.1
    return power_of(random.exponential(size=(trials, channels, times.size)), times=times), (times[0], times[-2])


def test_single_trial_decibels_lie_two_and_a_half_below_with_an_sd_of_five_and_a_half():
    """Logarithm of chi-square(2)/2: mean -10 gamma/ln 10 = -2.5068158 dB, SD 10 pi/(sqrt(6) ln 10) = 5.5700431 dB."""
    power, window = gaussian_power(trials=400_000, baseline_samples=1)
    # A constant baseline leaves the decibels of the trial itself.
    values = np.asarray(power.values).copy()
    values[..., 0] = 1.0
    flat = power_of(values[:, 0, 0], times=power.times)
    made = tfs.normalized_trials(flat, tfs.Baseline(window, order="trial_by_reference")).values[:, 0, 0, 1]
    error = made.std() / np.sqrt(made.size)
    assert made.mean() == pytest.approx(-2.5068158, abs=4 * error)
    assert made.std(ddof=1) == pytest.approx(5.5700431, abs=0.03)
    assert decibel_bias_of_mean(1) == pytest.approx(-2.5068158, abs=1e-7)


# 10/ln 10 (digamma(n) - ln n): by formula, and by simulation through condition_maps.
@pytest.mark.parametrize("trials, expected", [(10, -0.2207628), (40, -0.0545130)])
def test_the_decibel_of_a_mean_over_trials(trials, expected):
    assert decibel_bias_of_mean(trials) == pytest.approx(expected, abs=1e-7)
    random = np.random.default_rng(trials)
    values = random.exponential(size=(trials, 400, 101))
    values[..., 0] = 1.0
    power = power_of(values, times=np.arange(-1, 100) * 0.01)
    made = tfs.condition_maps([power], "memory", tfs.Baseline((-0.01, -0.01))).values[0, 0, :, 0, 1:]
    assert made.mean() == pytest.approx(expected, abs=4 * made.std() / np.sqrt(made.size))


# 10/ln 10 (psi(1) - psi(k) + ln k), rounded to two places as printed.
@pytest.mark.parametrize("samples, expected", [(3, -1.74), (5, -2.06), (10, -2.29)])
def test_single_trials_against_a_linear_baseline_mean(samples, expected):
    assert decibel_bias_of_single_trials(samples) == pytest.approx(expected, abs=0.005)
    power, window = gaussian_power(trials=150_000, baseline_samples=samples, seed=samples)
    linear, geometric = (
        tfs.normalized_trials(power, tfs.Baseline(window, order="trial_first", baseline_mean=mean)).values[:, 0, 0, -1]
        for mean in ("arithmetic", "geometric")
    )
    exact = decibel_bias_of_single_trials(samples)
    assert linear.mean() == pytest.approx(exact, abs=4 * linear.std() / np.sqrt(linear.size))
    assert geometric.mean() == pytest.approx(0.0, abs=4 * geometric.std() / np.sqrt(geometric.size))


@pytest.mark.parametrize("samples", [3, 5, 10])
def test_single_trial_percent_change_is_positive_without_any_change(samples):
    """Mean of 1/B for B the mean of k exponentials is k/(k - 1): +100/(k - 1) percent."""
    power, window = gaussian_power(trials=400_000, baseline_samples=samples, seed=20 + samples)
    made = tfs.normalized_trials(power, tfs.Baseline(window, "percent_change", order="trial_first")).values[:, 0, 0, -1]
    assert made.mean() == pytest.approx(100 / (samples - 1), abs=5 * made.std() / np.sqrt(made.size))
