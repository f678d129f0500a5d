"""Contrasts that the review calls independent of the baseline window do not change with it, and the others do."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs
from tfstats.baseline_review import window_dependence

TIMES = np.arange(-8, 8) * 0.1
GROUPS = pd.DataFrame(
    {"participant_id": [f"S{n}" for n in range(6)], "group": list("aabbab"), "score": np.arange(6.0) ** 2}
)

DESIGNS = {
    "paired": (lambda maps: tfs.paired(maps, "recalled", "missed"), {}),
    "trend": (lambda maps: tfs.trend(maps, {"missed": 1, "recalled": 2, "unsure": 4}), {}),
    "interaction": (
        lambda maps: tfs.interaction(maps, ("recalled", "missed"), ("unsure", "missed")),
        {},
    ),
    "repeated_measures": (tfs.repeated_measures, {}),
    "weighted": (
        lambda maps: tfs.weighted(maps, {"recalled": 1, "missed": -0.5, "unsure": -0.5}),
        {"weights": {"recalled": 1, "missed": -0.5, "unsure": -0.5}},
    ),
    "between_groups": (
        lambda maps: tfs.between_groups(maps, "group", "a", "b", combine={"recalled": 1, "missed": -1}),
        {"combine": {"recalled": 1, "missed": -1}},
    ),
    "slope": (
        lambda maps: tfs.slope(maps, "score", combine={"recalled": 1, "missed": -1}),
        {"combine": {"recalled": 1, "missed": -1}},
    ),
}


def study(seed):
    random = np.random.default_rng(seed)
    powers = []
    for subject in GROUPS["participant_id"]:
        labels = ["recalled"] * 5 + ["missed"] * 4 + ["unsure"] * 3
        powers.append(
            tfs.TrialPower(
                random.exponential(size=(12, 1, 2, TIMES.size)) + 1e-3,
                frequencies=[4.0, 8.0],
                times=TIMES,
                channels=["Fz"],
                trials=pd.DataFrame({"memory": labels}),
                subject=subject,
            )
        )
    return powers


def compared(powers, design, window, **how):
    remedy = {name: how.pop(name) for name in ("trial_counts", "subsamples") if name in how}
    maps = tfs.condition_maps(powers, "memory", tfs.Baseline(window, **how), participants=GROUPS, **remedy)
    contrast = DESIGNS[design][0](maps)
    values = contrast.values
    # F compares the conditions with each other: what all of them share plays no part.
    return values - values.mean(axis=1, keepdims=True) if design == "repeated_measures" else values


@settings(deadline=None, max_examples=25)
@given(
    seed=st.integers(0, 2**32 - 1),
    first=st.integers(0, 12),
    length=st.integers(0, 3),
    design=st.sampled_from(sorted(DESIGNS)),
    how=st.sampled_from(
        [
            {},
            {"baseline_mean": "geometric"},
            {"order": "trial_by_reference"},
            {"reference": "named", "reference_condition": "unsure", "order": "trial_by_reference"},
            {"trial_counts": "jackknife"},
            {"trial_counts": "equal", "subsamples": 2},
            {"trial_counts": "equal", "subsamples": 2, "order": "trial_by_reference"},
        ]
    ),
)
def test_the_window_plays_no_part(seed, first, length, design, how):
    if "reference_condition" in how and design not in ("paired", "between_groups", "slope"):
        how = {"order": "trial_by_reference"}
    baseline = {name: value for name, value in how.items() if name not in ("trial_counts", "subsamples")}
    assert window_dependence(tfs.Baseline(**baseline), design, DESIGNS[design][1]) is None
    powers = study(seed)
    other = (TIMES[first], TIMES[first + length])
    np.testing.assert_allclose(
        compared(powers, design, (-0.5, -0.2), **how), compared(powers, design, other, **how), rtol=0, atol=1e-9
    )


@pytest.mark.parametrize("design", sorted(DESIGNS))
@pytest.mark.parametrize(
    "how",
    [
        {"unit": "percent_change"},
        {"reference": "own"},
        {"order": "trial_first"},
        {"reference": "own", "trial_counts": "jackknife"},
    ],
    ids=str,
)
def test_the_window_plays_a_part_where_the_review_says_so(design, how):
    baseline = {name: value for name, value in how.items() if name != "trial_counts"}
    assert window_dependence(tfs.Baseline(**baseline), design, DESIGNS[design][1]) is not None
    powers = study(1)
    changes = compared(powers, design, (-0.5, -0.2), **how) - compared(powers, design, (-0.8, -0.6), **how)
    assert np.abs(changes).max() > 1e-3


@pytest.mark.parametrize("condition", ["recalled", "missed"])
def test_one_condition_against_the_baseline_hangs_on_the_window(condition):
    powers = study(2)
    assert window_dependence(tfs.Baseline(), "against_zero", {"condition": condition}) is not None
    made = [
        tfs.against_zero(tfs.condition_maps(powers, "memory", tfs.Baseline(window)), condition).values
        for window in ((-0.5, -0.2), (-0.8, -0.6))
    ]
    assert np.abs(made[0] - made[1]).max() > 0.1
