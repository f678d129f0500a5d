import dataclasses
import itertools

import numpy as np
import pytest

import tfstats as tfs
from tfstats.foundations.units import UNITS
from tfstats.normalization import averaging_for_chance, chance_problem
from tfstats.normalization.baseline_choice import ORDERS


def test_defaults_of_the_contract():
    baseline = tfs.Baseline()
    assert baseline.window == (-0.5, -0.2)
    assert (baseline.unit, baseline.reference, baseline.order) == ("decibel", "pooled", "average_first")
    assert (baseline.reference_condition, baseline.within, baseline.baseline_mean) == (None, None, None)


def test_it_is_frozen_hashable_and_takes_a_list_as_window():
    baseline = tfs.Baseline([-1, np.float32(-0.5)])
    assert baseline.window == (-1.0, -0.5) and baseline == tfs.Baseline((-1.0, -0.5))
    assert hash(baseline) == hash(tfs.Baseline((-1.0, -0.5)))
    with pytest.raises(dataclasses.FrozenInstanceError):
        baseline.unit = "ratio"


def test_the_mean_is_geometric_by_default_only_for_single_trial_decibels():
    for unit, order in itertools.product(UNITS, ORDERS):
        expected = "geometric" if unit == "decibel" and order != "average_first" else "arithmetic"
        assert tfs.Baseline(unit=unit, order=order).mean_kind == expected
    assert tfs.Baseline(order="trial_first", baseline_mean="arithmetic").mean_kind == "arithmetic"


def test_a_reference_condition_is_text():
    assert tfs.Baseline(reference="named", reference_condition=2.0).reference_condition == "2"


# Which choices have a mean of no change under no change: derived in tests/false_alarms/test_chance_by_unit.py.
ACCEPTED = {
    ("decibel", "average_first", "arithmetic"),
    ("decibel", "average_first", "geometric"),
    ("decibel", "trial_first", "geometric"),
    ("decibel", "trial_by_reference", "geometric"),
    ("percent_change", "average_first", "arithmetic"),
    ("percent_change", "trial_by_reference", "arithmetic"),
    ("ratio", "average_first", "arithmetic"),
    ("ratio", "trial_by_reference", "arithmetic"),
    ("z_score", "average_first", "arithmetic"),
    ("z_score", "trial_by_reference", "arithmetic"),
}


@pytest.mark.parametrize("unit", UNITS)
@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("mean", ["arithmetic", "geometric"])
@pytest.mark.parametrize("reference", ["pooled", "own", "named"])
def test_what_may_be_held_against_chance(unit, order, mean, reference):
    if unit == "z_score" and mean == "geometric":
        return  # refused by Baseline itself
    named = "rest" if reference == "named" else None
    baseline = tfs.Baseline(unit=unit, reference=reference, order=order, baseline_mean=mean, reference_condition=named)
    assert (chance_problem(baseline) is None) == ((unit, order, mean) in ACCEPTED)


def test_decibels_are_averaged_as_ratios_against_a_linear_mean_only():
    assert averaging_for_chance(None) == "ratios"
    assert averaging_for_chance(tfs.Baseline()) == "ratios"
    assert averaging_for_chance(tfs.Baseline(baseline_mean="geometric")) == "units"
    assert averaging_for_chance(tfs.Baseline(order="trial_by_reference")) == "units"
    assert averaging_for_chance(tfs.Baseline(unit="percent_change", baseline_mean="geometric")) == "ratios"


@pytest.mark.parametrize(
    "baseline, text",
    [
        (
            tfs.Baseline(),
            "Power was averaged over the trials of each condition, then expressed as decibels, 10 log10 of activity over "
            "baseline power. The baseline was the arithmetic mean of power from -0.5 to -0.2 s over all trials of the "
            "conditions kept, each trial weighing the same.",
        ),
        (
            tfs.Baseline(order="trial_first"),
            "Each trial was expressed as decibels, 10 log10 of activity over baseline power, then averaged over the trials "
            "of each condition. The baseline was the geometric mean of power from -0.5 to -0.2 s over the samples of the "
            "same trial.",
        ),
        (
            tfs.Baseline((-1, 0), "z_score", "named", "trial_by_reference", reference_condition="rest", within="run"),
            "Each trial was expressed as baseline standard deviations, then averaged over the trials of each condition. "
            "The baseline was the arithmetic mean of power from -1 to 0 s over the trials of condition rest, separately "
            "for each value of run; the standard deviation was taken over trials and samples.",
        ),
        (
            tfs.Baseline(unit="percent_change", within="run"),
            "Power of each trial was divided by a baseline, the ratios were averaged over the trials of each condition, "
            "then expressed as percent change from baseline power. The baseline was the arithmetic mean of power from "
            "-0.5 to -0.2 s over all trials of the conditions kept, each trial weighing the same, separately for each "
            "value of run.",
        ),
        (tfs.Baseline(unit="none"), "Power was averaged over the trials of each condition, without a baseline."),
    ],
)
def test_words_for_a_methods_paragraph(baseline, text):
    assert baseline.describe() == text
