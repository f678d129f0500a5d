"""Averages of decibels held against the baseline: which one has mean zero under no change depends on the baseline mean."""

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs


def no_change(seed, subjects=12, trials=20):
    """Exponential power, as of a Gaussian signal, without any change after the baseline."""
    import pandas as pd

    rng = np.random.default_rng(seed)
    for number in range(subjects):
        yield tfs.TrialPower(
            rng.exponential(size=(trials, 1, 1, 24)), frequencies=[6.0], times=np.arange(-10, 14) / 20, channels=["Fz"],
            trials=pd.DataFrame({"kind": ["a"] * trials}), subject=f"S{number}",
        )  # fmt: skip


@pytest.mark.parametrize(
    ("baseline", "valid"),
    [
        (tfs.Baseline((-0.5, -0.1)), "ratios"),
        (tfs.Baseline((-0.5, -0.1), order="trial_first"), "units"),
        (tfs.Baseline((-0.5, -0.1), order="trial_by_reference"), "units"),
    ],
    ids=lambda value: getattr(value, "order", value),
)
def test_the_band_table_averages_validly_and_the_other_way_is_refused(baseline, valid):
    other = {"ratios": "units", "units": "ratios"}[valid]
    rejected = 0
    for seed in range(60):
        maps = tfs.condition_maps(no_change(seed), "kind", baseline)
        if seed == 0:
            with pytest.raises(tfs.InputError, match=f'of="{valid}"'):
                tfs.against_zero(maps.mean_across("times", of=other), "a")
        table = tfs.band_table(
            maps, {"chance": lambda m: tfs.against_zero(m, "a")}, {"b": (6, 6)}, {"w": (0.0, 0.6)}, permutations=500
        )
        rejected += table["p"].item() <= 0.05
    # Nominal 3 of 60; the invalid average rejects about 10 of 60 and more.
    assert rejected <= stats.binom.isf(1e-3, 60, 0.05)
