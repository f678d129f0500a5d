"""A small study that the tests of reporting share."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.reporting import StudyResults

PROVENANCE = {
    "versions": {"tfstats": "0.1.0", "numpy": "2.0"},
    "seed": 0,
    "plan_hash": "5f" * 32,
    "input_hashes": {"power/S1.h5": "ab" * 32},
}

TIMES = tuple(np.round(np.arange(-0.5, 1.0, 0.1), 3))


def simulated_maps(
    conditions=("recalled", "missed"), channels=("Fz", "Cz", "Pz"), *, subjects=None, effect=2.0, seed=0, unit="decibel",
    frequencies=(4.0, 6.0, 8.0, 12.0, 16.0), times=TIMES, gap=False,
):  # fmt: skip
    """Noise, and in the first condition an effect at 6 to 8 Hz, 0.2 to 0.5 s, in the first channel."""
    subjects = list(subjects or (f"S{number:02d}" for number in range(1, 10)))
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(len(subjects), len(conditions), len(channels), len(frequencies), len(times)))
    frequency, time = np.asarray(frequencies), np.asarray(times)
    there = ((frequency >= 6) & (frequency <= 8))[:, None] & ((time >= 0.2) & (time <= 0.5))
    values[:, 0, 0] += effect * there
    if gap:
        values[0, 0, -1, 0, 0] = np.nan
    counts = pd.DataFrame(
        rng.integers(20, 60, size=(len(subjects), len(conditions))), index=subjects, columns=list(conditions)
    )
    return tfs.ConditionMaps(
        values if unit != "ratio" else np.exp(values / 5), subjects=subjects, conditions=list(conditions),
        channels=list(channels), frequencies=frequency, times=time, unit=unit, trial_counts=counts,
    )  # fmt: skip


def joined(channels):
    """All channels next to each other."""
    return pd.DataFrame(~np.eye(len(channels), dtype=bool), index=list(channels), columns=list(channels))


@pytest.fixture(scope="session")
def make_maps():
    return simulated_maps


@pytest.fixture(scope="session")
def make_result():
    def make(correction=None, *, maps=None, contrast=None, **more):
        maps = maps if maps is not None else simulated_maps()
        contrast = contrast if contrast is not None else tfs.paired(maps, *maps.conditions[:2])
        return tfs.permutation_test(
            contrast, correction or tfs.ClusterMass(0.05), adjacency=joined(contrast.channels), threads=1, **more
        )

    return make


@pytest.fixture(scope="session")
def make_study(make_result):
    def make(names=("recalled against missed",), *, maps=None, **more):
        maps = maps if maps is not None else simulated_maps()
        result = make_result(maps=maps)
        bands = tfs.band_table(
            maps, {names[0]: lambda m: tfs.paired(m, *m.conditions[:2])}, {"theta": (4, 8), "alpha": (8, 12)},
            {"early": (0.2, 0.5)},
        )  # fmt: skip
        fields = {
            "contrasts": dict.fromkeys(names, result),
            "bands": bands,
            "provenance": PROVENANCE,
            "name": "lamp sequences",
            "plan_text": '[study]\nname = "lamp sequences"\n',
            "trial_counts": maps.trial_counts,
            "participants": pd.DataFrame({"participant_id": list(maps.subjects), "age": range(20, 20 + len(maps.subjects))}),
            "baseline_window": (-0.5, -0.2),
            "electrodes": pd.DataFrame({"name": list(maps.channels), "x": 0.25, "y": 0.5, "z": 1.0 / 3.0}),
            "cautions": ("Trial counts differ.",),
        }  # fmt: skip
        return StudyResults(**{**fields, **more})

    return make


@pytest.fixture
def axes():
    from tfstats.reporting.plane_axes import add_axes, blank_figure

    return add_axes(blank_figure(85, 60), 12, 10, 55, 40)
