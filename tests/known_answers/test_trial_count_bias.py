"""The bias that few trials give decibels of a mean, and what the two remedies leave of it.

Gaussian signals: single-trial power is exponential (chi-square with 2 df), the logarithm of a mean over n of them has the
expectation digamma(n) - ln n (Abramowitz & Stegun 1964, 26.4).  Jackknife: Quenouille 1956, Biometrika 43:353.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from scipy.special import digamma

import tfstats as tfs
from tests.plain_versions.trial_averages import jackknife_decibel

POINTS, FEW, MANY = 4000, 10, 40
WINDOW = (-0.2, -0.1)
NEPER = 10 / np.log(10)


def study(few=FEW, many=MANY, seed=0, points=POINTS, gain=1.0, spread=0.0, subject="S1"):
    """Exponential power without any effect: points as channels, a baseline without noise, so that only activity is biased."""
    random = np.random.default_rng(seed)
    values = random.exponential(size=(few + many, points, 1, 3))
    values[..., :2] = 1.0
    values *= np.exp(spread * random.normal(size=(few + many, points, 1, 1)) - spread**2 / 2)
    values[..., :2] = 1.0
    return tfs.TrialPower(
        gain * values,
        frequencies=[10.0],
        times=[-0.2, -0.1, 0.0],
        channels=[f"C{number}" for number in range(points)],
        trials=pd.DataFrame({"memory": ["few"] * few + ["many"] * many}),
        subject=subject,
    )


def activity(power, **remedy):
    maps = tfs.condition_maps([power], "memory", tfs.Baseline(WINDOW), **remedy)
    return maps.values[0, :, :, 0, 2]


def bias(trials):
    return NEPER * (digamma(trials) - np.log(trials))


def test_as_recorded_the_bias_is_that_of_the_digamma_function():
    few, many = activity(study())
    # -0.2207628 and -0.0545130 dB.
    assert few.mean() == pytest.approx(bias(FEW), abs=4 * few.std() / np.sqrt(POINTS))
    assert many.mean() == pytest.approx(bias(MANY), abs=4 * many.std() / np.sqrt(POINTS))
    assert few.mean() < many.mean() - 0.1


@pytest.mark.parametrize("few", [4, 10])
def test_the_jackknife_leaves_what_its_formula_leaves(few):
    """n b(n) - (n - 1) b(n - 1) with b the digamma bias: +0.004 dB at 10 trials."""
    values = activity(study(few=few), trial_counts="jackknife")[0]
    left = few * bias(few) - (few - 1) * bias(few - 1)
    assert abs(left) < 0.04
    assert values.mean() == pytest.approx(left, abs=4 * values.std() / np.sqrt(POINTS))


def test_the_jackknife_removes_most_of_the_bias_of_trials_that_vary_in_overall_power():
    """Lognormal SD 0.8: the digamma formula no longer holds, the jackknife does not need it."""
    plain = activity(study(spread=0.8, seed=2))
    remedied = activity(study(spread=0.8, seed=2), trial_counts="jackknife")
    assert plain[0].mean() - plain[1].mean() < -0.3
    assert abs(remedied[0].mean() - remedied[1].mean()) < 0.12


@pytest.mark.parametrize("subsamples", [1, 5])
def test_equal_counts_have_equal_bias(subsamples):
    few, many = activity(study(), trial_counts="equal", subsamples=subsamples)
    error = 4 * np.sqrt((few.var() + many.var()) / POINTS)
    assert few.mean() - many.mean() == pytest.approx(0.0, abs=error)
    assert many.mean() == pytest.approx(bias(FEW), abs=4 * many.std() / np.sqrt(POINTS))
    if subsamples == 1:
        assert few.std() == pytest.approx(many.std(), rel=0.1)
    else:
        # The variance of the condition with more trials stays the smaller one: that is what averaging gives up.
        assert many.std() < 0.8 * few.std()


@pytest.mark.parametrize("reference", ["pooled", "own"])
@pytest.mark.parametrize("missing", [0.0, 0.1])
def test_the_jackknife_equals_its_plain_twin(reference, missing):
    random = np.random.default_rng(3)
    times = np.arange(-5, 4) * 0.1
    values = random.exponential(size=(13, 2, 2, times.size))
    values[..., 5:][random.random(values[..., 5:].shape) < missing] = np.nan
    labels = ["a"] * 5 + ["b"] * 8
    power = tfs.TrialPower(
        values,
        frequencies=[4, 8],
        times=times,
        channels=["Fz", "Pz"],
        trials=pd.DataFrame({"memory": labels}),
        subject="S1",
    )
    maps = tfs.condition_maps([power], "memory", tfs.Baseline(reference=reference), trial_counts="jackknife")
    for number, rows in enumerate((slice(0, 5), slice(5, 13))):
        for channel, frequency, time in np.ndindex(2, 2, times.size):
            whose = slice(None) if reference == "pooled" else rows
            levels = values[whose, channel, frequency, :4].mean(axis=-1)
            expected = jackknife_decibel(values[rows, channel, frequency, time].tolist()) - jackknife_decibel(
                levels.tolist()
            )
            assert maps.values[0, number, channel, frequency, time] == pytest.approx(expected, abs=1e-10)


def test_the_jackknife_within_runs_takes_the_baselines_as_they_are():
    random = np.random.default_rng(4)
    times = np.arange(-5, 4) * 0.1
    values = random.exponential(size=(12, 1, 1, times.size))
    trials = pd.DataFrame({"memory": ["a", "b"] * 6, "run": ["1"] * 6 + ["2"] * 6})
    power = tfs.TrialPower(values, frequencies=[4], times=times, channels=["Fz"], trials=trials, subject="S1")
    maps = tfs.condition_maps([power], "memory", tfs.Baseline(within="run"), trial_counts="jackknife")
    level = np.repeat([values[:6, 0, 0, :4].mean(), values[6:, 0, 0, :4].mean()], 6)
    for number, label in enumerate("ab"):
        mine = np.flatnonzero(trials["memory"] == label)
        expected = jackknife_decibel((values[mine, 0, 0, 7] / level[mine]).tolist())
        assert maps.values[0, number, 0, 0, 7] == pytest.approx(expected, abs=1e-10)
    assert "of the conditions, were corrected" in maps.history[-1]
