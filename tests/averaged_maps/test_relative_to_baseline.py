"""Averaged power made relative equals averaging the trials and dividing, to rounding."""

from __future__ import annotations

import itertools

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

TIMES = np.arange(-6, 6) * 0.1
WINDOW = (-0.5, -0.2)


def power_of(subject, counts, seed, gaps=False):
    random = np.random.default_rng(seed)
    labels = [name for name, number in counts.items() for _ in range(number)]
    values = random.exponential(size=(len(labels), 2, 3, TIMES.size))
    if gaps:
        values[:, :, 0, :3] = np.nan  # as wavelets leave the ends of a trial empty, alike in all trials
        values[:, 1, 1, :5] = np.nan
    return tfs.TrialPower(
        values,
        frequencies=[4.0, 8.0, 16.0],
        times=TIMES,
        channels=["Fz", "Pz"],
        trials=pd.DataFrame({"memory": labels}),
        subject=subject,
        scaling="density",
    )


def study(gaps=False):
    return [
        power_of("S1", {"recalled": 9, "missed": 4, "rest": 6}, 1, gaps),
        power_of("S2", {"recalled": 5, "missed": 8, "rest": 7}, 2, gaps),
    ]


@pytest.mark.parametrize("gaps", [False, True])
@pytest.mark.parametrize("mean", ["arithmetic", "geometric"])
@pytest.mark.parametrize(
    "unit, reference",
    list(itertools.product(["decibel", "percent_change", "ratio", "z_score"], ["pooled", "own", "named"])),
)
def test_the_same_as_from_the_trials(unit, reference, mean, gaps):
    if unit == "z_score" and (mean == "geometric" or reference == "own"):
        return  # refused, see the error texts
    named = "rest" if reference == "named" else None
    baseline = tfs.Baseline(WINDOW, unit, reference, reference_condition=named, baseline_mean=mean)
    averaged = tfs.condition_maps(study(gaps), "memory", tfs.Baseline(unit="none"))
    made = tfs.relative_maps(averaged, baseline)
    expected = tfs.condition_maps(study(gaps), "memory", baseline)
    np.testing.assert_allclose(made.values, expected.values, rtol=1e-12, atol=1e-12)
    assert np.isnan(made.values).any() == gaps
    assert (
        made.conditions == expected.conditions == (("missed", "recalled") if named else ("missed", "recalled", "rest"))
    )
    assert made.history[0] == expected.history[0] and made.cautions == expected.cautions
    assert (made.unit, made.baseline, made.scaling) == (unit, baseline, "density")
    assert made.trial_counts.equals(expected.trial_counts)


@pytest.mark.parametrize("conditions", [["recalled", "missed"], ["rest"], ["missed", "rest", "recalled"]])
def test_conditions_in_the_order_asked_for_pool_only_themselves(conditions):
    averaged = tfs.condition_maps(study(), "memory", tfs.Baseline(unit="none"))
    made = tfs.relative_maps(averaged, tfs.Baseline(WINDOW), conditions=conditions)
    expected = tfs.condition_maps(study(), "memory", tfs.Baseline(WINDOW), conditions=conditions)
    assert made.conditions == tuple(conditions)
    np.testing.assert_allclose(made.values, expected.values, rtol=1e-12, atol=1e-12)


def test_a_named_reference_may_be_listed():
    averaged = tfs.condition_maps(study(), "memory", tfs.Baseline(unit="none"))
    baseline = tfs.Baseline(WINDOW, reference="named", reference_condition="rest")
    made = tfs.relative_maps(averaged, baseline, conditions=["rest", "missed"])
    expected = tfs.condition_maps(study(), "memory", baseline, conditions=["rest", "missed"])
    np.testing.assert_allclose(made.values, expected.values, rtol=1e-12, atol=1e-12)


def test_trial_counts_weigh_the_pooled_reference():
    power = np.ones((1, 2, 1, 1, 3))
    power[0, 0] = 4.0
    maps = tfs.ConditionMaps(
        power, subjects=["S1"], conditions=["a", "b"], channels=["Fz"], frequencies=[6], times=[-0.2, -0.1, 0.0],
        unit="power", trial_counts=[[30, 10]],
    )  # fmt: skip
    made = tfs.relative_maps(maps, tfs.Baseline((-0.2, -0.1), "ratio"))
    assert made.values[0, :, 0, 0, 2].tolist() == pytest.approx([4 / 3.25, 1 / 3.25], rel=1e-15)
    assert made.history == (tfs.Baseline((-0.2, -0.1), "ratio").describe(),)


def test_own_references_need_no_counts_and_float32_is_computed_in_float64():
    values = np.random.default_rng(0).exponential(size=(2, 2, 1, 2, 4)).astype(np.float32)
    maps = tfs.ConditionMaps(
        values, subjects=["S1", "S2"], conditions=["a", "b"], channels=["Fz"], frequencies=[4, 8],
        times=[-0.2, -0.1, 0.0, 0.1], unit="power",
    )  # fmt: skip
    made = tfs.relative_maps(maps, tfs.Baseline((-0.2, -0.1), reference="own"))
    exact = values.astype(np.float64)
    np.testing.assert_allclose(
        made.values, 10 * np.log10(exact / exact[..., :2].mean(axis=-1, keepdims=True)), rtol=1e-13
    )
    assert made.values.dtype == np.float64 and made.trial_counts is None and made.cautions == ()
