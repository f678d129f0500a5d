"""The review of the baseline finds what is planted, and what it calls invariant is."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs
from tfstats.baseline_review import PlannedContrast, window_dependence
from tfstats.baseline_review.trial_findings import robust_z
from tfstats.baseline_review.window_and_event import energy_across

TIMES = np.arange(-10, 11) / 20
WINDOW = (-0.45, -0.15)


def study(seed=0, subjects=10, trials=24, change=None, columns=None, **more):
    """Exponential power at two channels and three frequencies; `change(values, table, number)` plants something."""
    powers = []
    for number in range(subjects):
        rng = np.random.default_rng([seed, number])
        table = pd.DataFrame(
            {"memory": np.resize(["recalled", "missed"], trials), "run": np.repeat([1, 2], trials // 2)}
        )
        values = rng.gamma(6.0, size=(trials, 2, 3, TIMES.size))
        if change is not None:
            change(values, table, number)
        powers.append(
            tfs.TrialPower(
                values,
                frequencies=[4.0, 8.0, 16.0],
                times=TIMES,
                channels=["Fz", "Pz"],
                trials=table,
                subject=f"S{number}",
                **more,
            )  # fmt: skip
        )
    return powers


def found(review, topic):
    return [one for one in review.findings if one.topic == topic]


CONTRASTS = {
    "difference": PlannedContrast("paired", {"first": "recalled", "second": "missed"}),
    "chance": PlannedContrast("against_zero", {"condition": "recalled"}),
}


def test_share_of_energy_across_the_event():
    # Energy follows the squared envelope: at 2 sigma_t from the event 0.23 % lies across it, at the event one half.
    assert float(energy_across(2.0, np.array(1.0))) == pytest.approx(0.0023, abs=5e-5)
    assert float(energy_across(0.0, np.array(0.3))) == 0.5


def test_a_quiet_study_has_no_headline():
    review = tfs.review_baseline(
        study(wavelet_cycles=2.0), "memory", tfs.Baseline(WINDOW), contrasts={"difference": CONTRASTS["difference"]}
    )
    assert all(one.severity != "headline" for one in review.findings if one.topic != "window and event")
    assert {"window", "contrasts", "conditions", "counts", "drift", "trials", "edges", "agreement"} <= set(
        review.tables
    )
    assert review.text().count("\n") == len(review.findings) - 1 == len(review.table()) - 1


def test_conditions_that_differ_in_the_baseline():
    def lift(values, table, number):
        values[table["memory"] == "recalled", 0, 1, :8] *= 1.6

    pooled = tfs.review_baseline(study(change=lift), "memory", tfs.Baseline(WINDOW))
    own = tfs.review_baseline(study(change=lift), "memory", tfs.Baseline(WINDOW, reference="own"))
    (mild,), (serious,) = found(pooled, "baseline by condition"), found(own, "baseline by condition")
    assert (mild.severity, serious.severity) == ("mind", "headline")
    assert "at Fz, 8 Hz" in serious.words
    row = own.tables["conditions"].iloc[0]
    assert row.largest_difference_db == pytest.approx(10 * np.log10(1.6), abs=0.5) and row.p <= 0.05


def test_groups_that_differ_in_the_baseline():
    def lift(values, table, number):
        values[..., 2, :8] *= 2.0 if number < 5 else 1.0

    people = pd.DataFrame({"participant_id": [f"S{i}" for i in range(10)], "group": ["a"] * 5 + ["b"] * 5})
    review = tfs.review_baseline(
        study(change=lift), "memory", tfs.Baseline(WINDOW), participants=people,
        contrasts={
            "groups": PlannedContrast(
                "between_groups", {"column": "group", "first": "a", "second": "b", "condition": "recalled"}
            )
        },
    )  # fmt: skip
    (one,) = found(review, "baseline by group")
    assert one.severity == "headline" and "16 Hz" in one.words
    assert found(review, "window dependence")[0].severity == "headline"


def test_outliers_drift_runs_and_trend():
    def plant(values, table, number):
        values[5] *= 100.0 if number == 3 else 1.0
        values[:, :, 0, :10] *= 10 ** (np.linspace(-0.4, 0.4, 10) / 10 * 5)
        values[table["run"] == 2] *= 2.0

    review = tfs.review_baseline(study(change=plant), "memory", tfs.Baseline(WINDOW))
    (outliers,) = found(review, "outlying trials")
    assert outliers.severity == "mind" and "subject S3 trial 5" in outliers.words
    assert found(review, "between runs")[0].severity == "mind"
    (trend,) = found(review, "trend in the window")
    assert trend.severity == "mind" and "most at 4 Hz" in trend.words
    assert review.tables["drift"]["session_drift_db"].median() > 2.0


def test_single_trial_baselines_near_zero():
    def plant(values, table, number):
        values[:8, :, 1, :10] *= 1e-4

    review = tfs.review_baseline(study(change=plant), "memory", tfs.Baseline(WINDOW, order="trial_first"))
    (one,) = found(review, "single-trial baselines")
    assert one.severity == "headline" and "80 of 240 trials" in one.words


def test_missing_points():
    def plant(values, table, number):
        values[:, :, 0, :2] = np.nan
        if number == 4:
            values[:, 1, 2, -1] = np.nan

    review = tfs.review_baseline(study(change=plant), "memory", tfs.Baseline(WINDOW), contrasts=CONTRASTS)
    (one,) = found(review, "edges")
    assert one.severity == "mind" and "not the same in all subjects" in one.words


def test_trial_counts_and_their_bias():
    def fewer(values, table, number):
        table.loc[8:, "memory"] = "missed"

    review = tfs.review_baseline(
        study(change=fewer, trials=40),
        "memory",
        tfs.Baseline(WINDOW),
        contrasts={"difference": CONTRASTS["difference"]},
    )
    (one,) = found(review, "trial counts")
    # 4 against 36 trials: 10/ln 10 (digamma(n) - ln n) is -0.566 and -0.061 dB (by formula).
    assert one.severity == "mind" and "0.5 dB" in one.words
    remedied = tfs.review_baseline(
        study(change=fewer, trials=40), "memory", tfs.Baseline(WINDOW), trial_counts="jackknife"
    )
    (one,) = found(remedied, "trial counts")
    assert one.severity == "note" and not one.remedy


def test_robust_z():
    assert robust_z(np.array([1.0, 2, 3, 4, 100]))[-1] == pytest.approx(97 / 1.4826)
    assert not robust_z(np.ones(4)).any()


BASELINES = [
    {"unit": unit, "reference": reference, "order": order}
    for unit in ("decibel", "percent_change", "ratio")
    for reference in ("pooled", "own")
    for order in ("average_first", "trial_first", "trial_by_reference")
]


@pytest.mark.parametrize("choice", BASELINES, ids=lambda choice: "-".join(choice.values()))
@settings(max_examples=4, deadline=None)
@given(start=st.integers(0, 4), length=st.integers(2, 5))
def test_what_is_called_invariant_is_and_the_rest_is_not(choice, start, length):
    window = (float(TIMES[start]), float(TIMES[start + length]))
    powers = study(seed=3, subjects=3, trials=12)
    for design, arguments in (
        ("paired", {"first": "recalled", "second": "missed"}),
        ("weighted", {"weights": {"recalled": 2.0, "missed": -2.0}}),
        ("weighted", {"weights": {"recalled": 1.0, "missed": 1.0}}),
    ):
        one = PlannedContrast(design, arguments)
        here, there = tfs.Baseline(window, **choice), tfs.Baseline((-0.1, -0.05), **choice)
        # Any test against the baseline that is refused has no contrast to compare.
        if design == "weighted" and sum(arguments["weights"].values()) and choice["order"] != "average_first":
            continue
        first, second = (one(tfs.condition_maps(powers, "memory", baseline)).values for baseline in (here, there))
        same = np.allclose(first, second, atol=1e-9)
        assert same == (window_dependence(here, design, arguments) is None)
