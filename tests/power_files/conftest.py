"""Small power that several tests write, read and spoil."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs


@pytest.fixture
def make_power():
    def make(trials=5, channels=2, frequencies=3, times=4, seed=0, dtype=np.float64, subject="S1", table=None, **more):
        rng = np.random.default_rng(seed)
        values = rng.exponential(size=(trials, channels, frequencies, times)).astype(dtype) + np.finfo(dtype).tiny
        if table is None:
            table = pd.DataFrame(
                {"memory": (["recalled", "missed"] * trials)[:trials], "load": np.arange(trials) % 3 + 1}
            )
        return tfs.TrialPower(
            values, frequencies=2.0 ** np.arange(1, frequencies + 1), times=np.arange(times) / 10 - 0.1,
            channels=[f"C{number}" for number in range(channels)], trials=table, subject=subject, **more,
        )  # fmt: skip

    return make
