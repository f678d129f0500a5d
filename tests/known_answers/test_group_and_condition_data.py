"""Groups, covariates and several conditions against published data, certified values and general-purpose libraries."""

import re
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import scipy
import statsmodels
import statsmodels.api as sm
from scipy import stats

import tfstats as tfs

TREATED = [94, 197, 16, 38, 99, 141, 23]
CONTROL = [52, 104, 146, 10, 51, 30, 40, 27, 46]
SLEEP_FIRST = [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0]
SLEEP_SECOND = [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4]


def people(values, **columns):
    """Maps of one point, one subject a value, with a participants table."""
    names = [f"S{number:03d}" for number in range(len(values))]
    return tfs.ConditionMaps(
        np.asarray(values, dtype=float).reshape(len(values), 1, 1, 1, 1), subjects=names, conditions=["power"],
        channels=["Fz"], frequencies=[6.0], times=[0.0], unit="percent_change",
        participants=pd.DataFrame({"participant_id": names, **columns}),
    )  # fmt: skip


def conditions(table, labels):
    values = np.asarray(table, dtype=float)
    return tfs.ConditionMaps(
        values[:, :, None, None, None], subjects=[f"S{i:02d}" for i in range(len(values))], conditions=labels,
        channels=["Fz"], frequencies=[6.0], times=[0.0], unit="percent_change",
    )  # fmt: skip


def test_mouse_data():
    # Efron & Tibshirani 1993, An Introduction to the Bootstrap, ch. 15: 1,613 of 11,440 allocations (counted again).
    maps = people(TREATED + CONTROL, group=["treated"] * 7 + ["control"] * 9)
    contrast = tfs.between_groups(maps, "group", "treated", "control", equal_variance=True)
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=20_000, alternative="greater")
    assert result.null.size == 11_440 and result.exact
    assert result.p_values.item() == 1613 / 11_440
    assert result.estimate.item() == pytest.approx(30.63, abs=0.005)
    assert result.statistic.item() == pytest.approx(1.12, abs=0.005)


def test_sleep_as_two_groups():
    # Student 1908, Biometrika 6:1; t values computed again with scipy.
    maps = people(SLEEP_FIRST + SLEEP_SECOND, drug=["first"] * 10 + ["second"] * 10)
    welch = tfs.permutation_test(
        tfs.between_groups(maps, "drug", "first", "second"), tfs.MaxStatistic(), permutations=2000
    )
    assert abs(welch.welch_t.item()) == pytest.approx(1.8608135, abs=5e-8)
    assert welch.df.item() == pytest.approx(17.776474, abs=5e-7)
    assert 2 * stats.norm.sf(abs(welch.statistic.item())) == pytest.approx(0.07939414, abs=5e-8)
    assert not welch.exact
    pooled = tfs.permutation_test(
        tfs.between_groups(maps, "drug", "first", "second", equal_variance=True),
        tfs.FalseDiscoveryRate(p_values="parametric"), permutations=2000,
    )  # fmt: skip
    assert pooled.p_values.item() == pytest.approx(0.07918671, abs=5e-8) and pooled.df == 18


def test_lady_tasting_tea():
    # Fisher 1935, The Design of Experiments: all eight cups right, 1/70 one-sided.
    maps = people([1, 1, 1, 1, 0, 0, 0, 0], milk=["first"] * 4 + ["last"] * 4)
    contrast = tfs.between_groups(maps, "milk", "first", "last", equal_variance=True)
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=100, alternative="greater")
    assert result.p_values.item() == 1 / 70


def test_signed_rank():
    # Hollander & Wolfe 1973, Nonparametric Statistical Methods: signed rank 40, one-sided p = 10/512.
    x = np.array([1.83, 0.50, 1.62, 2.48, 1.68, 1.88, 1.55, 3.06, 1.30])
    y = np.array([0.878, 0.647, 0.598, 2.05, 1.06, 1.29, 1.06, 3.14, 1.29])
    contrast = tfs.paired(conditions(np.stack([x, y], axis=1), ["x", "y"]), "x", "y")
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), alternative="greater", robust="rank")
    assert result.p_values.item() == 10 / 512
    assert result.estimate.item() == pytest.approx((x - y).mean())


def nist_anova_files():
    folder = Path(scipy.__file__).parent / "stats" / "tests" / "data" / "nist_anova"
    return sorted(folder.glob("*.dat"))


@pytest.mark.parametrize("path", nist_anova_files(), ids=lambda path: path.stem)
def test_nist_one_way(path):
    """NIST Statistical Reference Datasets, one-way analysis of variance, certified F; the files ship inside scipy."""
    text = path.read_text(encoding="utf-8")
    certified = float(re.search(r"Between \w+\s+\d+\s+\S+\s+\S+\s+(\S+)", text).group(1))
    table = np.loadtxt(text.splitlines()[60:])
    codes = table[:, 0].astype(int)
    maps = people(table[:, 1], group=[f"g{code:02d}" for code in codes])
    result = tfs.permutation_test(tfs.several_groups(maps, "group"), tfs.MaxStatistic(), permutations=100)
    # The last three sets carry 13 constant digits; their data as stored hold F to about 1e-4 only.
    tolerance = 2e-3 if path.stem in ("SmLs07", "SmLs08", "SmLs09") else 1e-7 if path.stem != "SmLs04" else 1e-7
    if path.stem in ("SmLs04", "SmLs05", "SmLs06"):
        tolerance = 1e-6
    assert result.statistic.item() == pytest.approx(certified, rel=tolerance)


def test_iris():
    # Fisher 1936, Annals of Eugenics 7:179; one-way F computed again with scipy.
    datasets = pytest.importorskip(
        "sklearn.datasets", reason="the iris data ship with scikit-learn, which is not installed"
    )
    iris = datasets.load_iris()
    for column, f in zip(iris.data.T, (119.2645, 49.1600, 1180.1612, 960.0071)):
        maps = people(column, species=[f"s{code}" for code in iris.target])
        result = tfs.permutation_test(tfs.several_groups(maps, "species"), tfs.MaxStatistic(), permutations=50)
        assert result.statistic.item() == pytest.approx(f, abs=5e-5)
        assert result.df == (2, 147)


def repeated_measures_table():
    folder = Path(statsmodels.__file__).parent / "stats" / "tests" / "results"
    return pd.read_csv(folder / "anova-rm-test-data.csv")


def anova_maps(rows, factors):
    table = repeated_measures_table().iloc[:rows]
    cells = table[factors].astype(str).agg("/".join, axis=1)
    wide = table.assign(cell=cells).pivot(index="id", columns="cell", values="DV")
    return conditions(wide.to_numpy(), list(wide.columns)), table


def test_repeated_measures_table():
    """The table ships inside statsmodels, whose tests confirm these figures in R."""
    maps, _ = anova_maps(16, ["B"])
    result = tfs.permutation_test(tfs.repeated_measures(maps), tfs.FalseDiscoveryRate(p_values="parametric"))
    assert result.statistic.item() == pytest.approx(22.4, abs=0.05) and result.df == (1, 7)
    assert result.p_values.item() == pytest.approx(0.002125452, abs=5e-9)


@pytest.mark.parametrize(
    ("effect", "f", "df"), [("A", 40.14159, (1, 7)), ("B", 29.21739, (2, 14)), ("A:B", 17.10545, (2, 14))]
)
def test_repeated_measures_factors(effect, f, df):
    maps, table = anova_maps(48, ["A", "B"])
    factors = {name: sorted(table[name].astype(str).unique()) for name in ("A", "B")}
    contrast = tfs.repeated_measures(maps, factors=factors, effect=effect)
    result = tfs.permutation_test(contrast, tfs.MaxStatistic())
    assert result.statistic.item() == pytest.approx(f, abs=5e-6) and result.df == df
    anova = sm.stats.AnovaRM(table, "DV", "id", within=["A", "B"]).fit().anova_table
    assert result.statistic.item() == pytest.approx(anova.loc[effect, "F Value"])


AGES = [
    [108, 96, 110, 122], [103, 117, 127, 133], [96, 107, 106, 107], [84, 85, 92, 99], [118, 125, 125, 116],
    [110, 107, 96, 91], [129, 128, 123, 128], [90, 84, 101, 113], [84, 104, 100, 88], [96, 100, 103, 105],
    [105, 114, 105, 112], [113, 117, 132, 130],
]  # fmt: skip


def test_children_at_four_ages():
    # Maxwell & Delaney 1990, Designing Experiments and Analyzing Data, ch. 11: F(3,33) printed 3.03; 284/4096 computed.
    maps = conditions(AGES, ["30", "36", "42", "48"])
    result = tfs.permutation_test(tfs.repeated_measures(maps), tfs.MaxStatistic())
    assert result.statistic.item() == pytest.approx(3.027, abs=5e-4) and result.df == (3, 33)
    assert result.null.size == 2048 and result.exact
    assert result.p_values.item() == 284 / 4096
    labels = tfs.permutation_test(tfs.repeated_measures(maps, scheme="labels"), tfs.MaxStatistic(), permutations=5000)
    assert labels.statistic.item() == pytest.approx(result.statistic.item())
    assert labels.p_values.item() == pytest.approx(0.045, abs=0.012)
    parametric = tfs.permutation_test(tfs.repeated_measures(maps), tfs.FalseDiscoveryRate(p_values="parametric"))
    assert parametric.p_values.item() == pytest.approx(0.0432, abs=5e-5)


@pytest.mark.parametrize("blocked", [False, True])
def test_slope_agrees_with_least_squares(blocked):
    rng = np.random.default_rng(3)
    n = 26
    score, age, site = rng.normal(size=n), rng.uniform(20, 70, n), np.repeat(["a", "b"], n // 2)
    y = 0.4 * score - 0.03 * age + (site == "a") + rng.normal(size=n)
    maps = people(y, score=score, age=age, site=site)
    contrast = tfs.slope(maps, "score", nuisance=["age"], blocks="site" if blocked else None)
    result = tfs.permutation_test(contrast, tfs.ClusterMass(0.9), permutations=200)
    columns = [score, age, np.ones(n)] + ([(site == "a").astype(float)] if blocked else [])
    fit = sm.OLS(y, np.stack(columns, axis=1)).fit()
    assert result.statistic.item() == pytest.approx(fit.tvalues[0])
    assert result.df == fit.df_resid and not result.exact
    row = result.clusters.iloc[0]
    assert row.estimate == pytest.approx(fit.params[0])
    assert (row.estimate_low, row.estimate_high) == pytest.approx(tuple(fit.conf_int()[0]))
    assert row.effect_size == pytest.approx(fit.tvalues[0] / np.sqrt(fit.tvalues[0] ** 2 + fit.df_resid))


def test_plain_slope_is_a_correlation():
    rng = np.random.default_rng(5)
    x, y = rng.normal(size=7), rng.normal(size=7)
    result = tfs.permutation_test(tfs.slope(people(y, x=x), "x"), tfs.ClusterMass(0.99))
    expected = stats.pearsonr(x, y)
    assert result.null.size == 5040 and result.exact
    row = result.clusters.iloc[0]
    assert row.effect_size == pytest.approx(expected.statistic)
    interval = expected.confidence_interval()
    assert (row.effect_low, row.effect_high) == pytest.approx((interval.low, interval.high))
    oracle = stats.permutation_test(
        (x,), lambda v: abs(stats.pearsonr(v, y).statistic), permutation_type="pairings", alternative="greater",
        n_resamples=np.inf, vectorized=False,
    )  # fmt: skip
    assert result.p_values.item() == pytest.approx(oracle.pvalue)


def test_rank_slope_is_spearman():
    rng = np.random.default_rng(6)
    x, y = rng.normal(size=15), np.round(rng.normal(size=15), 1)
    result = tfs.permutation_test(tfs.slope(people(y, x=x), "x", rank=True), tfs.MaxStatistic(), permutations=100)
    assert result.effect_size.item() == pytest.approx(stats.spearmanr(x, y).statistic)


@pytest.mark.parametrize("equal_variance", [True, False])
def test_adjusted_groups_without_adjustment_are_the_plain_ones(equal_variance):
    """A block column with one block takes out nothing: the adjusted statistic is then Welch's or the pooled t."""
    rng = np.random.default_rng(7)
    y, group = rng.normal(size=14) * np.repeat([3.0, 1.0], [5, 9]), ["a"] * 5 + ["b"] * 9
    maps = people(y, group=group, site=["s"] * 14)
    plain, blocked = (
        tfs.permutation_test(
            tfs.between_groups(maps, "group", "a", "b", blocks=blocks, equal_variance=equal_variance),
            tfs.MaxStatistic(), permutations=3000,
        )
        for blocks in (None, "site")
    )  # fmt: skip
    assert blocked.statistic == pytest.approx(plain.statistic, rel=1e-6)
    assert blocked.df == pytest.approx(plain.df)
    assert np.sort(blocked.null) == pytest.approx(np.sort(plain.null), rel=1e-6, abs=1e-7)
    assert blocked.p_values == pytest.approx(plain.p_values)
