"""Sentences and methods text: what they say and what they never say."""

import re

import numpy as np
import pytest

import tfstats as tfs
from tfstats.results.apa_numbers import interval_text, p_text

NEVER = re.compile(r"\bno effect\b|\bprove[sdn]?\b|\blasted\b|\bstart(s|ed) at\b|\bonset\b", re.IGNORECASE)


def results(make_maps):
    maps = make_maps()
    planted = tfs.ConditionMaps(
        maps.values + np.array([1.5, 0.0])[None, :, None, None, None], subjects=maps.subjects, conditions=maps.conditions,
        channels=maps.channels, frequencies=maps.frequencies, times=maps.times, unit="decibel",
    )  # fmt: skip
    for source in (maps, planted):
        for correction in (
            tfs.ClusterMass(0.05),
            tfs.ClusterExtent(0.05),
            tfs.MaxStatistic(),
            tfs.FalseDiscoveryRate(),
        ):
            for alternative in ("two-sided", "greater"):
                yield tfs.permutation_test(
                    tfs.paired(source, "recalled", "missed"), correction, alternative=alternative, permutations=300
                )


def test_wording_rules(make_maps):
    for result in results(make_maps):
        text = " ".join([result.sentence(), result.methods(), result.summary(), *result.cautions])
        assert not NEVER.search(text.replace("no test of where the effect begins", "")), text
        if not result.mask.any():
            assert "This does not show that the conditions are equal." in result.sentence()
        for value in re.findall(r"p = (\S+)", text):
            assert re.match(r"^(\.\d+|1\.00)", value), value


def test_a_finding_in_full():
    values = np.random.default_rng(1).normal(size=(10, 2, 1, 2, 3)) * 0.2
    values[:, 0] += 1.0
    maps = tfs.ConditionMaps(
        values, subjects=list("ABCDEFGHIJ"), conditions=["recalled", "missed"], channels=["Fz"], frequencies=[4, 8],
        times=[0.0, 0.1, 0.2], unit="decibel", baseline=tfs.Baseline((-0.5, -0.2)),
    )  # fmt: skip
    result = tfs.permutation_test(tfs.paired(maps, "recalled", "missed"), tfs.ClusterMass(0.01))
    row = result.clusters.iloc[0]
    assert result.sentence() == (
        "recalled - missed: 1 cluster with corrected p <= .05 (cluster mass, two-sided). Positive cluster 1: p = .002, "
        f"mass {row.mass:.0f}, 6 points, observed at 4 to 8 Hz, 0 to 0.2 s, Fz; mean value {row.estimate:.2f} dB, "
        f"95 % CI [{row.estimate_low:.2f}, {row.estimate_high:.2f}], d_z = {row.effect_size:.2f}, "
        f"95 % CI [{row.effect_low:.2f}, {row.effect_high:.2f}] (region chosen on these data)."
    )
    methods = result.methods()
    for said in (
        "flipping the sign of each subject's value; all 512 distinct relabellings were visited, so that p-values are exact",
        "Phipson & Smyth 2010", "Points with |t| > 3.25 (forming p = .01, two-sided)", "Maris & Oostenveld 2007",
        "The test covered 1 channels, 2 frequencies (4 to 8 Hz) and 3 times (0 to 0.2 s), 6 points.",
        f"tfstats {tfs.__version__}",
    ):  # fmt: skip
        assert said in methods, said


@pytest.mark.parametrize(
    ("p", "text"),
    [(0.04217, "p = .042"), (0.0001, "p = .00010"), (1 / 10_000, "p = .00010"), (0.05, "p = .050"), (1.0, "p = 1.00"),
     (0.9999, "p = 1.00"), (0.00052, "p = .00052"), (float("nan"), "p not available")],
)  # fmt: skip
def test_p_as_a_paper_prints_it(p, text):
    assert p_text(p) == text


def test_interval():
    assert interval_text(-0.0001, 2.4598858) == "95 % CI [-0.0001, 2.46]"
