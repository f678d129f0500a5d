"""One suite that every design of the registry must pass: a new design is tested by being listed in `CASES`."""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tests.plain_versions import designs as plain
from tfstats.contrasts import DESIGNS
from tfstats.permutation.schemes import planned_rows

SHAPE = (2, 2, 3)
POINTS = 12


def maps_of(units, conditions, seed, dtype=np.float64, **columns):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(units, len(conditions), *SHAPE)).astype(dtype)
    names = [f"S{number:02d}" for number in range(units)]
    return tfs.ConditionMaps(
        values, subjects=names, conditions=conditions, channels=["Fz", "Pz"], frequencies=[4.0, 8.0],
        times=[0.0, 0.1, 0.2], unit="decibel", participants=pd.DataFrame({"participant_id": names, **columns}),
        baseline=tfs.Baseline((-0.5, -0.2)),
    )  # fmt: skip


def trials_of(units, seed, order="trial_first", **columns):
    rng = np.random.default_rng(seed)
    power = tfs.TrialPower(
        rng.exponential(size=(units, 2, 2, 6)) + 0.1, frequencies=[4.0, 8.0], times=np.arange(-3, 3) / 10,
        channels=["Fz", "Pz"], trials=pd.DataFrame({"number": np.arange(units), **columns}), subject="S01",
    )  # fmt: skip
    return power, tfs.normalized_trials(power, tfs.Baseline((-0.3, -0.1), order=order)).select(times=(0.0, 0.2))


@dataclass(frozen=True)
class Case:
    """One design: how a small contrast is made, and its plain loop over flat values."""

    design: str
    make: Callable[..., tfs.ConditionMaps]
    loop: Callable
    settings: dict


def flat(contrast):
    return np.asarray(contrast.values, dtype=float).reshape(*contrast.values.shape[:-3], -1)


def paired(seed, units=7, dtype=np.float64):
    return tfs.paired(maps_of(units, ["a", "b"], seed, dtype), "a", "b")


def against_zero(seed, units=7, dtype=np.float64):
    return tfs.against_zero(maps_of(units, ["a"], seed, dtype), "a")


def weighted(seed, units=7, dtype=np.float64):
    return tfs.weighted(maps_of(units, ["a", "b", "c"], seed, dtype), {"a": 1, "b": -0.5, "c": -0.5})


def trend(seed, units=7, dtype=np.float64):
    return tfs.trend(maps_of(units, ["2", "4", "6"], seed, dtype), {"2": 2, "4": 4, "6": 6})


def interaction(seed, units=7, dtype=np.float64):
    return tfs.interaction(maps_of(units, ["a", "b", "c", "d"], seed, dtype), ("a", "b"), ("c", "d"))


def groups(equal_variance):
    def make(seed, units=7, dtype=np.float64):
        first = units // 2
        maps = maps_of(units, ["a"], seed, dtype, group=["x"] * first + ["y"] * (units - first))
        return tfs.between_groups(maps, "group", "x", "y", equal_variance=equal_variance)

    return make


def several_groups(seed, units=7, dtype=np.float64):
    return tfs.several_groups(maps_of(units, ["a"], seed, dtype, group=(["x", "y", "z"] * units)[:units]), "group")


def slope(seed, units=6, dtype=np.float64):
    return tfs.slope(maps_of(units, ["a"], seed, dtype, score=np.random.default_rng(1).normal(size=units)), "score")


def repeated(scheme):
    def make(seed, units=5, dtype=np.float64):
        return tfs.repeated_measures(maps_of(units, ["a", "b", "c"], seed, dtype), scheme=scheme)

    return make


def trialwise(labels, equal_variance):
    def make(seed, units=7, dtype=np.float64):
        kind = (["x", "y", "y", "x", "x", "y", "x"] * units)[:units]
        return tfs.trialwise(
            trials_of(units, seed, kind=kind)[1], "kind", "x", "y", labels=labels, equal_variance=equal_variance
        )

    return make


def trialwise_slope(labels):
    def make(seed, units=6, dtype=np.float64):
        speed = np.random.default_rng(2).normal(size=units)
        return tfs.trialwise_slope(trials_of(units, seed, speed=speed)[1], "speed", labels=labels)

    return make


def trialwise_change(seed, units=7, dtype=np.float64):
    contrast = tfs.trialwise_change(trials_of(units, seed)[0], (-0.3, -0.2))
    inside = slice(3, 6)
    return replace(contrast, values=np.ascontiguousarray(contrast.values[..., inside]), times=contrast.times[inside])


SIGNED = {"alternatives": ("two-sided", "greater", "less")}


def flips(contrast, two_sided):
    return plain.one_sample(flat(contrast), two_sided)


def trimmed_flips(contrast, two_sided):
    return plain.trimmed(flat(contrast), two_sided)


def pooled(contrast, two_sided):
    return plain.two_groups(flat(contrast), contrast.labels, True)


def welch(contrast, two_sided):
    return plain.two_groups(flat(contrast), contrast.labels, False)


def one_way(contrast, two_sided):
    return plain.several_groups(flat(contrast), contrast.labels)


def slopes(contrast, two_sided):
    return plain.slope(flat(contrast), contrast.predictor)


def turned(contrast, two_sided):
    return plain.circular_shift(flat(contrast), contrast.labels)


def turned_slopes(contrast, two_sided):
    return plain.circular_slope(flat(contrast), contrast.predictor)


def flipped(contrast, two_sided):
    return plain.flipped_conditions(flat(contrast))


def relabelled(contrast, two_sided):
    return plain.shuffled_conditions(flat(contrast))


CASES = {
    "paired": Case("paired", paired, flips, SIGNED),
    "against_zero": Case("against_zero", against_zero, flips, SIGNED),
    "weighted": Case("weighted", weighted, flips, SIGNED),
    "trend": Case("trend", trend, flips, SIGNED),
    "interaction": Case("interaction", interaction, flips, SIGNED),
    "trialwise_change": Case("trialwise_change", trialwise_change, flips, SIGNED),
    "paired, trimmed": Case("paired", paired, trimmed_flips, {**SIGNED, "robust": "trimmed"}),
    "between_groups, pooled": Case("between_groups", groups(True), pooled, SIGNED),
    "between_groups, Welch": Case("between_groups", groups(False), welch, SIGNED),
    "several_groups": Case("several_groups", several_groups, one_way, {}),
    "slope": Case("slope", slope, slopes, SIGNED),
    "repeated_measures, signs": Case("repeated_measures", repeated("signs"), flipped, {}),
    "repeated_measures, labels": Case("repeated_measures", repeated("labels"), relabelled, {}),
    "trialwise, assigned": Case("trialwise", trialwise("assigned", True), pooled, SIGNED),
    "trialwise, behaviour": Case("trialwise", trialwise("behaviour", False), turned, SIGNED),
    "trialwise_slope, assigned": Case("trialwise_slope", trialwise_slope("assigned"), slopes, SIGNED),
    "trialwise_slope, behaviour": Case("trialwise_slope", trialwise_slope("behaviour"), turned_slopes, SIGNED),
}
# An order of units is one number of all of them; a flip is a number of each.
FLIPPING = {name: case for name, case in CASES.items() if case.make(0).relabelling.kind == "sign_flips"}
# A one-sample value is no difference of units: a constant added to it is the effect itself.
COMPARING_UNITS = {
    name: case for name, case in CASES.items() if case.make(0).statistic not in ("one_sample_t", "trimmed_t")
}

every_case = pytest.mark.parametrize("case", CASES.values(), ids=list(CASES))


def run(case, contrast, correction=None, **more):
    settings = {key: value for key, value in case.settings.items() if key != "alternatives"}
    return tfs.permutation_test(
        contrast, correction or tfs.MaxStatistic(), **{"permutations": 20_000, "alpha": 0.6, **settings, **more}
    )


def test_every_design_is_here():
    assert {case.design for case in CASES.values()} == set(DESIGNS)


@every_case
@pytest.mark.parametrize("seed", [0, 1])
def test_enumerated_p_equals_a_plain_loop(case, seed):
    contrast = case.make(seed)
    for alternative in case.settings.get("alternatives", ("two-sided",)):
        rows = np.array(list(case.loop(contrast, alternative == "two-sided")))
        signed = {"two-sided": np.abs(rows), "greater": rows, "less": -rows}[alternative]
        result = run(case, contrast, alternative=alternative)
        assert result.enumerated and result.null.size == len(rows)
        assert result.statistic.ravel() == pytest.approx(rows[0], rel=1e-6)
        expected = (signed >= signed[0] - 1e-9 * np.abs(signed[0])).mean(axis=0)
        assert result.point_p_values.ravel() == pytest.approx(expected)
        largest = signed.max(axis=1)
        assert np.sort(result.null) == pytest.approx(np.sort(largest), rel=1e-6, abs=1e-9)
        corrected = (largest[:, None] >= signed[0] - 1e-7 * np.abs(signed[0])).mean(axis=0)
        assert result.p_values.ravel() == pytest.approx(corrected)


@every_case
def test_points_that_are_missing_stay_out(case):
    contrast = case.make(3)
    values = contrast.values.copy()
    values[1, ..., 0, 1, 2] = np.nan
    gaps = replace(contrast, values=values)
    whole, some = run(case, contrast), run(case, gaps)
    assert not some.tested[0, 1, 2] and some.tested.sum() == POINTS - 1
    assert (
        np.isnan(some.statistic[0, 1, 2])
        and np.isnan(some.p_values[0, 1, 2])
        and np.isnan(some.point_p_values[0, 1, 2])
    )
    assert some.statistic[some.tested] == pytest.approx(whole.statistic[some.tested])
    assert some.point_p_values[some.tested] == pytest.approx(whole.point_p_values[some.tested])


@every_case
def test_threads_and_seeds(case):
    contrast = case.make(4, units=11)
    settings = {"permutations": 150, "seed": 5}
    one, two, other = (
        run(case, contrast, tfs.ClusterMass(0.3), **{**settings, **change})
        for change in ({"threads": 1}, {"threads": 2}, {"threads": 1, "seed": 6})
    )
    assert one.null.tobytes() == two.null.tobytes()
    assert one.point_p_values.tobytes() == two.point_p_values.tobytes()
    if not one.enumerated:
        assert one.null[0] == other.null[0] and not np.array_equal(one.null, other.null)


@pytest.mark.parametrize("case", COMPARING_UNITS.values(), ids=list(COMPARING_UNITS))
def test_a_constant_added_to_everything_changes_no_difference(case):
    contrast = case.make(6)
    shifted = replace(contrast, values=contrast.values + 16.0)
    one, other = run(case, contrast), run(case, shifted)
    assert one.statistic == pytest.approx(other.statistic, rel=1e-6)
    assert one.p_values == pytest.approx(other.p_values)


@pytest.mark.parametrize("case", FLIPPING.values(), ids=list(FLIPPING))
def test_leaving_out_a_unit_leaves_the_words_of_the_others(case):
    contrast = case.make(7, units=24)
    fewer = replace(
        contrast, values=np.delete(contrast.values, 9, axis=0),
        unit_names=contrast.unit_names[:9] + contrast.unit_names[10:],
    )  # fmt: skip
    whole, rest = (planned_rows(one, "two-sided", 300, 2)(0, 300) for one in (contrast, fewer))
    assert np.array_equal(np.delete(whole, 9, axis=1), rest)


@every_case
def test_saved_and_loaded(case, tmp_path):
    result = run(case, case.make(8), tfs.ClusterMass(0.3))
    result.save(tmp_path)
    again = tfs.ContrastResult.load(tmp_path)
    assert again.methods() == result.methods() and again.summary() == result.summary()
    assert again.df == result.df if np.ndim(result.df) < 3 else np.array_equal(again.df, result.df, equal_nan=True)
    assert np.array_equal(again.null, result.null)
    for text in (result.methods(), result.sentence(), result.summary()):
        assert "None" not in text and "nan" not in text


def test_freedman_lane_as_full_least_squares():
    # Freedman & Lane 1983, J. Bus. Econ. Stat. 1:292: permuted residuals plus the nuisance fit, refitted in full.
    rng = np.random.default_rng(9)
    score, age = rng.normal(size=6), rng.normal(size=6)
    contrast = tfs.slope(maps_of(6, ["a"], 9, score=score, age=age), "score", nuisance=["age"])
    rows = planned_rows(contrast, "two-sided", 1000, 0)
    orders = rows(0, rows.count)
    expected = np.array(list(plain.freedman_lane(flat(contrast), score, age, orders)))
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=1000)
    assert rows.count == 720 and result.enumerated and not result.exact
    assert result.null == pytest.approx(np.abs(expected).max(axis=1))
