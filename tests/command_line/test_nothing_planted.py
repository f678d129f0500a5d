"""Where nothing was planted, nothing is found: the demo's study without its effects."""

import tfstats as tfs
from tfstats.simulated_power import lamp_sequences, simulate_study


def test_nothing_is_found():
    """At this seed; about one seed in twenty would be a false alarm."""
    maps = tfs.condition_maps(
        simulate_study(lamp_sequences(effects=False)), "memory", tfs.Baseline((-0.5, -0.2)),
        conditions=["recalled", "missed"],
    ).select(times=(0.0, 1.5))  # fmt: skip
    result = tfs.permutation_test(
        tfs.paired(maps, "recalled", "missed"), tfs.ClusterMass(0.01), permutations=2_000, threads=2
    )
    assert not result.mask.any()
    assert result.clusters.p.min() > 0.05
