"""The exact text of each refusal by designs, schemes, corrections and permutation_test."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs


def maps_of(subjects=8, unit="decibel", values=None, **more):
    if values is None:
        values = np.random.default_rng(0).normal(size=(subjects, 2, 2, 2, 3))
    return tfs.ConditionMaps(
        values, subjects=[f"S{i}" for i in range(len(values))], conditions=["recalled", "missed"], channels=["Fz", "Pz"],
        frequencies=[4, 8], times=[0.0, 0.1, 0.2], unit=unit, **more,
    )  # fmt: skip


def refused(text):
    import re

    return pytest.raises(tfs.InputError, match=f"^{re.escape(text)}$")


def test_designs():
    maps = maps_of()
    with refused(
        'paired: expected two different conditions, got "missed" twice; name the condition it is compared with.'
    ):
        tfs.paired(maps, "missed", "missed")
    with refused(
        'paired: expected conditions among "missed", "recalled", got "Recalled"; use the spelling of the data.'
    ):
        tfs.paired(maps, "Recalled", "missed")
    with refused("paired: expected ConditionMaps, got dict; make them with condition_maps."):
        tfs.paired({}, "recalled", "missed")
    with refused("weighted: expected at least one weight other than zero, got zeros only; give the weights."):
        tfs.weighted(maps, {"recalled": 0})
    with refused('weighted: expected a mapping of condition to number, got []; write {"recalled": 1, "missed": -1}.'):
        tfs.weighted(maps, [])
    with refused(
        "weighted, condition \"recalled\": expected a number, got 'much'; write its weight.\n"
        'weighted, condition "missed": expected a finite number, got inf; write its weight.'
    ):
        tfs.weighted(maps, {"recalled": "much", "missed": float("inf")})
    with refused("trend: expected at least two different levels, got [1.0, 1.0]; give each condition its level."):
        tfs.trend(maps, {"recalled": 1, "missed": 1})
    with refused(
        'interaction, first pair: expected two different conditions, got \'recalled\'; write ("first", "second").\n'
        'interaction, second pair: expected two different conditions, got ("a",); write ("first", "second").'.replace(
            '("a",)', "('a',)"
        )
    ):
        tfs.interaction(maps, "recalled", ("a",))
    with refused(
        "interaction: expected two different differences, got the same pair twice; name the pair it is compared with."
    ):
        tfs.interaction(maps, ("recalled", "missed"), ("recalled", "missed"))
    with refused(
        "paired: expected at least two subjects, got 1; for one subject compare trials with trialwise or trialwise_change."
    ):
        tfs.paired(maps_of(1), "recalled", "missed")


def test_tests_against_the_baseline():
    with refused(
        'against_zero: expected relative power, got unit "power"; give a Baseline with a unit, power itself is never zero.'
    ):
        tfs.against_zero(maps_of(unit="none"), "recalled")
    averaged = maps_of().mean_across("frequencies", of="units")
    with refused(
        'against_zero: expected decibels averaged as the decibel of the mean ratio (of="ratios"), got decibels averaged over '
        'points as decibels (of="units"), whose bias does not shrink by averaging; average with mean_across(..., of="ratios").'
    ):
        tfs.against_zero(averaged, "recalled")
    assert tfs.against_zero(maps_of(), "recalled").cautions == (
        "The maps carry no record of their baseline: whether their mean is zero under no change could not be checked.",
    )
    with pytest.raises(tfs.InputError, match="mean"):
        tfs.weighted(averaged, {"recalled": 1.0})


def test_settings_all_at_once():
    contrast = tfs.paired(maps_of(), "recalled", "missed")
    with refused(
        "permutation_test, correction: expected ClusterExtent, ClusterMass, FalseDiscoveryRate, MaxStatistic or ThresholdFree, "
        "got 'mass'; write ClusterMass(forming_p=0.01).\n"
        "permutations: expected a whole number of at least 2, got 0; 10000 gives p-values to about a tenth of .05.\n"
        'alternative: expected one of "greater", "less", "two-sided", got \'larger\'; one-sided tests are fixed before seeing '
        "the data.\n"
        "alpha: expected a number between 0 and 1, got 5; write 0.05 for five percent.\n"
        "seed: expected a whole number of at least 0, got -1; give a whole number."
    ):
        tfs.permutation_test(contrast, "mass", permutations=0, alternative="larger", alpha=5, seed=-1)
    with refused("ClusterMass, forming_p: expected a number between 0 and 1, got 1.2; write 0.05 for five percent."):
        tfs.ClusterMass(forming_p=1.2)
    with refused(
        'FalseDiscoveryRate, method: expected one of "benjamini_hochberg", "benjamini_yekutieli", got \'bh\'; choose one of them.'
    ):
        tfs.FalseDiscoveryRate(method="bh")
    with refused(
        "threads: expected a whole number of at least 1, got 0; give the number of threads, or leave it out for all CPUs."
    ):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), threads=0)


@pytest.mark.parametrize(
    ("subjects", "alternative", "smallest", "needed"), [(5, "two-sided", "0.0625", 6), (4, "less", "0.0625", 5)]
)
def test_too_few_subjects(subjects, alternative, smallest, needed):
    # 2^-n one-sided, 2^-(n - 1) two-sided (arithmetic): five subjects cannot reach .05 two-sided.
    contrast = tfs.paired(maps_of(subjects), "recalled", "missed")
    with refused(
        f"paired, recalled - missed: expected enough subjects for a p of 0.05, got {subjects}, whose smallest p is {smallest} "
        f"({alternative}); at least {needed} subjects are needed."
    ):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), alternative=alternative)
    enough = tfs.paired(maps_of(needed), "recalled", "missed")
    assert tfs.permutation_test(enough, tfs.MaxStatistic(), alternative=alternative).record.smallest_p <= 0.05


def test_too_few_relabellings():
    contrast = tfs.paired(maps_of(16), "recalled", "missed")
    with refused(
        "permutations: expected enough relabellings for a p of 0.05, got 10, whose smallest p is 0.1; "
        "ask for at least 20, better 10000."
    ):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=10)


def test_constant_and_missing_data():
    same = np.zeros((8, 2, 2, 2, 3))
    with refused(
        "paired, recalled - missed: expected compared values that vary, got the same value in every subject at every point; "
        "check that the conditions are not the same data."
    ):
        tfs.permutation_test(tfs.paired(maps_of(values=same), "recalled", "missed"), tfs.MaxStatistic())
    gaps = np.random.default_rng(0).normal(size=(8, 2, 2, 2, 3))
    gaps[0, 0, :, 0] = np.nan
    gaps[1, 1, :, 1] = np.nan
    with refused(
        "paired, recalled - missed: expected at least one point that is finite in all subjects, got none; choose frequencies "
        "and times that all of them have, or leave out those without data."
    ):
        tfs.permutation_test(tfs.paired(maps_of(values=gaps), "recalled", "missed"), tfs.MaxStatistic())


def test_adjacency():
    contrast = tfs.paired(maps_of(), "recalled", "missed")
    table = pd.DataFrame([[False, True], [True, False]], index=["Fz", "Cz"], columns=["Fz", "Cz"])
    with refused('adjacency: expected every channel of the data, got none of "Pz"; add them to the electrode table.'):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), adjacency=table)
    with refused("adjacency: expected a table of channel names x channel names, got ndarray; use channel_adjacency."):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), adjacency=table.to_numpy())
    one_sided = pd.DataFrame([[False, True], [False, False]], index=["Fz", "Pz"], columns=["Fz", "Pz"])
    with refused("adjacency: expected a symmetric table, got one-sided neighbours; make both directions true."):
        tfs.permutation_test(contrast, tfs.MaxStatistic(), adjacency=one_sided)


def test_band_table_all_at_once():
    tests = {"memory": lambda maps: tfs.paired(maps, "recalled", "missed")}
    with refused(
        'band "alpha": expected a window that holds at least one point of the axis 4 to 8 Hz, got 9 to 13 Hz; '
        "choose a window inside the data.\n"
        'band "theta - alpha": expected two bands among "theta", got "alpha", "theta"; name two bands that have edges.'
    ):
        tfs.band_table(
            maps_of(), tests, {"theta": (4, 8), "alpha": (9, 13), "theta - alpha": ("theta", "alpha")}, {"w": (0, 1)}
        )
    with refused(
        'window "late": expected a window that holds at least one point of the axis 0 to 0.2 s, got 1 to 2 s; '
        "choose a window inside the data."
    ):
        tfs.band_table(maps_of(), tests, {"theta": (4, 8)}, {"late": (1, 2)})


def test_loading_what_is_not_there(tmp_path):
    with refused(f"{tmp_path / 'result.npz'}: expected a saved result, got nothing; give the folder that save wrote."):
        tfs.ContrastResult.load(tmp_path)
