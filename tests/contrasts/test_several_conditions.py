"""F over conditions and factors against AnovaRM (statsmodels) and sums of squares."""

import itertools

import numpy as np
import pandas as pd
import pytest
from statsmodels.stats.anova import AnovaRM

import tfstats as tfs
from tfstats.contrasts.several_conditions import orthonormal_contrasts

SHAPE = (2, 2, 2)
FACTORS = {"load": ["2", "4", "6"], "memory": ["recalled", "missed"], "side": ["left", "right"]}
CELLS = ["/".join(cell) for cell in itertools.product(*FACTORS.values())]


def maps_of(values, conditions):
    values = np.asarray(values)
    return tfs.ConditionMaps(
        values, subjects=[f"S{number}" for number in range(len(values))], conditions=conditions, channels=["Fz", "Pz"],
        frequencies=[4.0, 8.0], times=[0.0, 0.1], unit="decibel", baseline=tfs.Baseline((-0.5, -0.2)),
    )  # fmt: skip


@pytest.fixture(scope="module")
def crossed():
    rng = np.random.default_rng(1)
    values = rng.normal(size=(8, 12, *SHAPE)) + rng.normal(size=(8, 1, *SHAPE)) + np.arange(12)[:, None, None, None] / 6
    return maps_of(values, CELLS)


EFFECTS = ["load", "memory", "side", "load:memory", "load:side", "memory:side", "load:memory:side"]


@pytest.fixture(scope="module")
def tables(crossed):
    """AnovaRM at two points."""
    found = {}
    for point in ((0, 0, 0), (1, 1, 1)):
        rows = [
            {"y": crossed.values[(unit, place, *point)], "participant": unit, **dict(zip(FACTORS, cell.split("/")))}
            for unit in range(8)
            for place, cell in enumerate(CELLS)
        ]
        found[point] = AnovaRM(pd.DataFrame(rows), "y", "participant", within=list(FACTORS)).fit().anova_table
    return found


@pytest.mark.parametrize("effect", EFFECTS)
def test_three_factors(crossed, tables, effect):
    contrast = tfs.repeated_measures(crossed, factors=FACTORS, effect=effect)
    result = tfs.permutation_test(contrast, tfs.FalseDiscoveryRate(p_values="parametric"), permutations=128)
    for point, table in tables.items():
        row = table.loc[effect]
        assert result.statistic[point] == pytest.approx(row["F Value"])
        assert result.df == (row["Num DF"], row["Den DF"])
        assert result.point_p_values[point] == pytest.approx(row["Pr > F"])
        # Partial eta squared, F df1 / (F df1 + df2) (Cohen 1973, Educ. Psychol. Meas. 33:107).
        f1 = row["F Value"] * row["Num DF"]
        assert result.effect_size[point] == pytest.approx(f1 / (f1 + row["Den DF"]))
    assert result.enumerated and result.exact and result.null.size == 2**7


def test_parts_of_an_effect_may_stand_in_any_order(crossed):
    one, other = (
        tfs.permutation_test(tfs.repeated_measures(crossed, factors=FACTORS, effect=effect), tfs.MaxStatistic())
        for effect in ("load:side", "side : load")
    )
    assert np.array_equal(one.statistic, other.statistic)


@pytest.mark.parametrize("effect", ["load", "memory"])
def test_labels_of_a_factor_are_shuffled_over_its_levels(crossed, effect):
    signs, labels = (
        tfs.permutation_test(
            tfs.repeated_measures(crossed, factors=FACTORS, effect=effect, scheme=scheme), tfs.MaxStatistic(),
            permutations=300,
        )
        for scheme in ("signs", "labels")
    )  # fmt: skip
    assert labels.statistic == pytest.approx(signs.statistic) and labels.df == signs.df
    assert labels.contrast.conditions == tuple(FACTORS[effect])
    place = [cell.split("/")[list(FACTORS).index(effect)] for cell in CELLS]
    for level in FACTORS[effect]:
        inside = [number for number, name in enumerate(place) if name == level]
        assert labels.contrast.condition_means[level] == pytest.approx(crossed.values[:, inside].mean(axis=(0, 1)))
    assert any("identical distributions" in text for text in labels.cautions)
    assert labels.estimate == pytest.approx(signs.estimate)


def test_the_estimate_is_the_range_of_the_cells_averaged_over_the_other_factors(crossed):
    result = tfs.permutation_test(tfs.repeated_measures(crossed, factors=FACTORS, effect="load"), tfs.MaxStatistic())
    levels = crossed.values.mean(axis=0).reshape(3, 4, *SHAPE).mean(axis=1)
    assert result.estimate == pytest.approx(np.ptp(levels, axis=0))


def test_two_conditions_are_the_paired_test():
    rng = np.random.default_rng(2)
    maps = maps_of(rng.normal(size=(9, 2, *SHAPE)), ["a", "b"])
    t = tfs.permutation_test(tfs.paired(maps, "a", "b"), tfs.MaxStatistic())
    signs = tfs.permutation_test(tfs.repeated_measures(maps), tfs.MaxStatistic())
    labels = tfs.permutation_test(tfs.repeated_measures(maps, scheme="labels"), tfs.MaxStatistic())
    for result in (signs, labels):
        assert result.statistic == pytest.approx(t.statistic**2)
        assert result.p_values == pytest.approx(t.p_values) and result.null.size == 256
        assert result.estimate == pytest.approx(np.abs(t.estimate))


def test_a_two_by_two_interaction_is_the_difference_of_differences():
    rng = np.random.default_rng(3)
    maps = maps_of(rng.normal(size=(8, 4, *SHAPE)), ["x/1", "x/2", "y/1", "y/2"])
    factors = {"kind": ["x", "y"], "half": ["1", "2"]}
    f = tfs.permutation_test(tfs.repeated_measures(maps, factors=factors, effect="kind:half"), tfs.MaxStatistic())
    t = tfs.permutation_test(tfs.interaction(maps, ("x/1", "x/2"), ("y/1", "y/2")), tfs.MaxStatistic())
    assert f.statistic == pytest.approx(t.statistic**2) and f.p_values == pytest.approx(t.p_values)


@pytest.mark.parametrize("levels", [2, 3, 7])
def test_contrasts_are_orthonormal_and_sum_to_zero(levels):
    rows = orthonormal_contrasts(levels)
    assert rows @ rows.T == pytest.approx(np.eye(levels - 1))
    assert rows.sum(axis=1) == pytest.approx(np.zeros(levels - 1))


def test_the_order_of_conditions_and_a_choice_of_them():
    rng = np.random.default_rng(4)
    maps = maps_of(rng.normal(size=(7, 4, *SHAPE)), ["a", "b", "c", "d"])
    one, other = (
        tfs.permutation_test(tfs.repeated_measures(maps, chosen), tfs.MaxStatistic())
        for chosen in (["a", "c", "d"], ["d", "a", "c"])
    )
    assert one.statistic == pytest.approx(other.statistic) and one.p_values == pytest.approx(other.p_values)
    assert one.subject_values.shape == (7, 3, *SHAPE)
    assert one.contrast.condition_values["c"] == pytest.approx(maps.values[:, 2])


def test_a_value_missing_at_a_point_leaves_that_point_out():
    rng = np.random.default_rng(5)
    values = rng.normal(size=(7, 3, *SHAPE))
    values[2, 1, 0, 1, 1] = np.nan
    result = tfs.permutation_test(tfs.repeated_measures(maps_of(values, ["a", "b", "c"])), tfs.MaxStatistic())
    assert not result.tested[0, 1, 1] and result.tested.sum() == 7
    assert result.subjects_at_point[0, 1, 1] == 6


def test_words():
    rng = np.random.default_rng(6)
    maps = maps_of(rng.normal(size=(7, 12, *SHAPE)), CELLS)
    contrast = tfs.repeated_measures(maps, factors=FACTORS, effect="load:memory")
    assert contrast.null_hypothesis == (
        "The subjects' contrasts of load (2, 4, 6) x memory (recalled, missed) are symmetric about zero."
    )
    assert contrast.difference == "load:memory (F)"
    assert contrast.history[-1].endswith("were compared within 7 subjects for the effect load:memory.")
    result = tfs.permutation_test(contrast, tfs.MaxStatistic())
    assert result.statistic_name == "F" and result.effect_name == "partial eta squared"
