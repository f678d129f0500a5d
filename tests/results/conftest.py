"""Small maps that several tests of results share."""

import numpy as np
import pytest

import tfstats as tfs


@pytest.fixture
def make_maps():
    def make(
        subjects=9, conditions=("recalled", "missed"), channels=2, frequencies=4, times=5, seed=0, dtype=float, **more
    ):
        rng = np.random.default_rng(seed)
        values = rng.normal(size=(subjects, len(conditions), channels, frequencies, times)).astype(dtype)
        return tfs.ConditionMaps(
            values, subjects=[f"S{i:02d}" for i in range(subjects)], conditions=list(conditions),
            channels=[f"C{i}" for i in range(channels)], frequencies=2.0 ** np.arange(1, frequencies + 1),
            times=np.arange(times) / 10, unit="decibel", **more,
        )  # fmt: skip

    return make
