"""Groups and covariates against least squares (statsmodels), analysis of variance and a sandwich computed here."""

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import statsmodels.formula.api as smf
from scipy import stats

import tfstats as tfs
from tfstats.findings.effect_sizes import effect_of
from tfstats.permutation.prepared_tests import prepared_test
from tfstats.permutation.schemes import planned_rows

SHAPE = (1, 2, 3)


def study(values, conditions=("rest",), **columns):
    """Maps (subjects, conditions, *SHAPE), or of one condition, with a participants table."""
    values = np.asarray(values, dtype=float)
    if values.ndim == 4:
        values = values[:, None]
    channels, frequencies, times = values.shape[2:]
    names = [f"S{number:02d}" for number in range(len(values))]
    return tfs.ConditionMaps(
        values, subjects=names, conditions=conditions, channels=[f"C{number}" for number in range(channels)],
        frequencies=4.0 + np.arange(frequencies), times=np.arange(times) / 20, unit="decibel",
        participants=pd.DataFrame({"participant_id": names, **columns}), baseline=tfs.Baseline((-0.5, -0.2)),
    )  # fmt: skip


def people(n, seed):
    rng = np.random.default_rng(seed)
    first = n // 3
    return rng, {
        "group": ["patient"] * first + ["control"] * (n - first),
        "age": rng.uniform(20, 70, n),
        "sleep": rng.normal(7, 1, n),
        "site": [("north", "south", "west")[number] for number in rng.integers(0, 3, n)],
    }


def run(contrast, permutations=100, **more):
    return tfs.permutation_test(contrast, more.pop("correction", tfs.MaxStatistic()), permutations=permutations, **more)


def by_least_squares(maps, formula, term):
    """statsmodels fit at every point; the values are y."""
    fits = []
    for y in maps.values[:, 0].reshape(len(maps.subjects), -1).T:
        fits.append(smf.ols(formula, maps.participants.assign(y=y)).fit())
    return fits, np.array([fit.tvalues[term] for fit in fits]).reshape(SHAPE)


GROUP = "C(group, Treatment('control'))"


@pytest.mark.parametrize(
    ("settings", "extra"),
    [
        ({"nuisance": ["age"]}, "age"),
        ({"nuisance": ["age", "sleep"]}, "age + sleep"),
        ({"blocks": "site"}, "C(site)"),
        ({"nuisance": ["age", "sleep"], "blocks": "site"}, "age + sleep + C(site)"),
    ],
    ids=["one", "two", "blocks", "all"],
)
def test_adjusted_pooled_groups_are_least_squares(settings, extra):
    rng, columns = people(27, 1)
    maps = study(rng.normal(size=(27, *SHAPE)) + np.array(columns["age"])[:, None, None, None] / 20, **columns)
    contrast = tfs.between_groups(maps, "group", "patient", "control", equal_variance=True, **settings)
    result = run(contrast)
    fits, t = by_least_squares(maps, f"y ~ {GROUP} + {extra}", f"{GROUP}[T.patient]")
    assert result.statistic == pytest.approx(t)
    assert result.df == fits[0].df_resid
    effect = effect_of(contrast, contrast.values.reshape(27, -1))
    intervals = np.array([fit.conf_int().loc[f"{GROUP}[T.patient]"] for fit in fits])
    assert effect.estimate == pytest.approx([fit.params[f"{GROUP}[T.patient]"] for fit in fits])
    assert np.stack([effect.low, effect.high], axis=1) == pytest.approx(intervals)
    assert effect.size == pytest.approx(effect.estimate / [np.sqrt(fit.mse_resid) for fit in fits])
    parametric = run(contrast, correction=tfs.FalseDiscoveryRate(p_values="parametric"))
    assert parametric.point_p_values.ravel() == pytest.approx(
        [fit.pvalues[f"{GROUP}[T.patient]"] for fit in fits], rel=1e-6
    )


def unequal_score(y, x, others, group):
    """Least squares with one residual variance for each group, by the full matrices of Winkler et al. 2014.

    Their v: the variance of the coefficient is that of weighted least squares, C'(M'WM)^-1 C, with W the reciprocal of
    each group's residual sum of squares over the trace of its part of the residual-forming matrix.  The degrees of
    freedom are those of Satterthwaite 1946, Biometrics Bulletin 2:110: 2 V^2 / var V, derivatives taken numerically.
    """
    model = np.column_stack([x, others])
    hat = model @ np.linalg.pinv(model)
    left = y - hat @ y
    shares = [(1 - np.diag(hat))[group == code].sum() for code in (1, 0)]
    variances = np.array([(left[group == code] ** 2).sum() / share for code, share in zip((1, 0), shares)])

    def variance(of_groups):
        weights = np.where(group == 1, 1 / of_groups[0], 1 / of_groups[1])
        return np.linalg.pinv(model.T @ (model * weights[:, None]))[0, 0]

    total = variance(variances)
    spread = 0.0
    for place, share in enumerate(shares):
        step = np.zeros(2)
        step[place] = 1e-5 * variances[place]
        slope = (variance(variances + step) - variance(variances - step)) / (2 * step[place])
        spread += (slope * variances[place]) ** 2 / share
    df = total**2 / spread
    t = (np.linalg.pinv(model) @ y)[0] / np.sqrt(total)
    return t, df, np.sign(t) * stats.norm.isf(stats.t.sf(abs(t), df))


@pytest.mark.parametrize("blocked", [False, True])
def test_adjusted_unequal_groups_against_full_matrices(blocked):
    rng, columns = people(21, 2)
    group = (np.array(columns["group"]) == "patient").astype(int)
    values = rng.normal(size=(21, *SHAPE)) * np.where(group == 1, 2.5, 1.0)[:, None, None, None]
    maps = study(values, **columns)
    contrast = tfs.between_groups(
        maps, "group", "patient", "control", nuisance=["age"], blocks="site" if blocked else None
    )
    result = run(contrast)
    fixed = np.ones((21, 1)) if not blocked else np.array(pd.get_dummies(columns["site"]), dtype=float)
    others = np.column_stack([columns["age"], fixed])
    expected = np.array([unequal_score(y, group, others, group) for y in values.reshape(21, -1).T])
    assert result.welch_t.ravel() == pytest.approx(expected[:, 0], rel=1e-6)
    assert result.df.ravel() == pytest.approx(expected[:, 1], rel=1e-5)
    assert result.statistic.ravel() == pytest.approx(expected[:, 2], rel=1e-4)

    # The relabelled maps: labels and covariates move against what the covariates and blocks leave of the data.
    rows = planned_rows(contrast, "two-sided", 12, 0)
    engine = prepared_test(contrast).engine
    flat = values.reshape(21, -1)
    residuals = flat - others @ np.linalg.lstsq(others, flat, rcond=None)[0]
    for order in rows(0, 12):
        moved = np.column_stack([np.asarray(columns["age"])[order], fixed])
        scores = [unequal_score(y, group[order], moved, group[order])[2] for y in residuals.T]
        assert np.ravel(engine.statistic(order)) == pytest.approx(np.array(scores), rel=1e-4)


def test_adjusted_unequal_groups_hold_size_and_coverage():
    """8 against 24 people with SD 3 to 1 and a covariate: normal scores and intervals at many points of one study each."""
    rng = np.random.default_rng(3)
    group = np.repeat([1, 0], [8, 24])
    age = rng.normal(size=32) + group
    points = 6000
    values = rng.normal(size=(32, 1, 10, points // 10)) * np.where(group == 1, 3.0, 1.0)[:, None, None, None]
    maps = study(values + age[:, None, None, None], group=group, age=age)
    contrast = tfs.between_groups(maps, "group", 1, 0, nuisance=["age"])
    score = run(contrast, permutations=20).statistic.ravel()
    # Satterthwaite's approximation at these sizes is good to about a fifth of the level.
    assert np.mean(np.abs(score) > stats.norm.isf(0.025)) == pytest.approx(0.05, abs=0.012)
    effect = effect_of(contrast, contrast.values.reshape(32, -1))
    assert np.mean((effect.low <= 0) & (effect.high >= 0)) == pytest.approx(0.95, abs=0.012)
    pooled = run(replace(contrast, statistic="regression_t"), permutations=20)
    assert np.mean(2 * stats.t.sf(np.abs(pooled.statistic), pooled.df) < 0.05) > 0.15


@pytest.mark.parametrize("groups", [("a", "b"), ("a", "b", "c"), ("d", "b", "a", "c")], ids=len)
@pytest.mark.parametrize("blocked", [False, True])
def test_several_groups_are_analysis_of_variance(groups, blocked):
    rng = np.random.default_rng(4)
    n = 28
    columns = {"kind": list("abcd" * 7), "site": list(rng.permutation(["x", "y"] * 14))}
    values = rng.normal(size=(n, *SHAPE)) + (np.array(columns["site"]) == "x")[:, None, None, None]
    maps = study(values, **columns)
    contrast = tfs.several_groups(maps, "kind", groups, blocks="site" if blocked else None)
    result = run(contrast)
    inside = np.isin(columns["kind"], groups)
    for place, y in enumerate(values.reshape(n, -1).T):
        table = maps.participants.assign(y=y)[inside]
        fit = smf.ols("y ~ C(kind)" + (" + C(site)" if blocked else ""), table).fit()
        row = sm.stats.anova_lm(fit, typ=2).loc["C(kind)"]
        assert result.statistic.ravel()[place] == pytest.approx(row["F"])
        assert result.df == (row["df"], fit.df_resid)
        eta = row["sum_sq"] / (row["sum_sq"] + fit.ssr)
        assert result.effect_size.ravel()[place] == pytest.approx(eta)
    assert contrast.label_names == groups
    means = [values[np.array(columns["kind"]) == name].mean(axis=0) for name in groups]
    assert result.estimate == pytest.approx(np.ptp(means, axis=0))


def test_two_groups_by_f_are_the_square_of_t():
    rng, columns = people(9, 5)
    maps = study(rng.normal(size=(9, *SHAPE)), **columns)
    f = run(tfs.several_groups(maps, "group"), 1000)
    t = run(tfs.between_groups(maps, "group", "patient", "control", equal_variance=True), 1000)
    assert f.statistic == pytest.approx(t.statistic**2)
    assert f.p_values == pytest.approx(t.p_values) and f.enumerated and f.exact


def test_slopes_are_least_squares_with_ranks_taken_first():
    rng, columns = people(19, 6)
    score = np.round(rng.normal(size=19), 1)
    maps = study(rng.normal(size=(19, *SHAPE)) + score[:, None, None, None], score=score, **columns)
    _, t = by_least_squares(maps, "y ~ score + age + C(site)", "score")
    assert run(tfs.slope(maps, "score", nuisance=["age"], blocks="site")).statistic == pytest.approx(t)
    ranked = study(stats.rankdata(maps.values, axis=0), **{**columns, "score": stats.rankdata(score)})
    _, t = by_least_squares(ranked, "y ~ score + age", "score")
    result = run(tfs.slope(maps, "score", nuisance=["age"], rank=True))
    assert result.statistic == pytest.approx(t)
    assert result.estimate_unit == "rank per rank of score"


def test_a_slope_on_two_codes_is_a_group_difference():
    rng, columns = people(12, 7)
    code = [1.0 if name == "patient" else 0.0 for name in columns["group"]]
    maps = study(rng.normal(size=(12, *SHAPE)), code=code, **columns)
    one = run(tfs.slope(maps, "code"), 200)
    other = run(tfs.between_groups(maps, "group", "patient", "control", equal_variance=True), 200)
    assert one.statistic == pytest.approx(other.statistic) and one.estimate == pytest.approx(other.estimate)
    assert one.df == other.df


def test_group_by_condition_is_the_groups_difference_of_differences():
    rng, columns = people(17, 8)
    values = rng.normal(size=(17, 2, *SHAPE))
    maps = study(values, ("task", "rest"), **columns)
    contrast = tfs.between_groups(maps, "group", "patient", "control", combine={"task": 1, "rest": -1})
    member = np.array(columns["group"]) == "patient"
    gain = values[:, 0] - values[:, 1]
    welch = stats.ttest_ind(gain[member], gain[~member], equal_var=False)
    result = run(contrast)
    assert result.welch_t == pytest.approx(welch.statistic) and result.df == pytest.approx(welch.df)
    assert result.estimate == pytest.approx(gain[member].mean(axis=0) - gain[~member].mean(axis=0))
    # With equal variances it is the interaction of the mixed analysis of variance: F = t^2.
    pooled = run(
        tfs.between_groups(maps, "group", "patient", "control", combine={"task": 1, "rest": -1}, equal_variance=True)
    )
    y = values[:, :, 0, 0, 0]
    long = pd.DataFrame(
        {"y": y.ravel(), "subject": np.repeat(maps.subjects, 2), "when": ["task", "rest"] * 17,
         "group": np.repeat(columns["group"], 2)}
    )  # fmt: skip
    long["extra"] = (long["group"] == "patient") * (long["when"] == "task") * 1.0
    fit = smf.ols("y ~ C(subject) + C(when) + extra", long).fit()
    reduced = smf.ols("y ~ C(subject) + C(when)", long).fit()
    f = (reduced.ssr - fit.ssr) / (fit.ssr / (17 - 2))
    assert pooled.statistic[0, 0, 0] ** 2 == pytest.approx(f)
    slope = run(tfs.slope(maps, "age", combine={"task": 1, "rest": -1}))
    line = stats.linregress(columns["age"], gain[:, 0, 1, 2])
    assert slope.estimate[0, 1, 2] == pytest.approx(line.slope)


def test_shuffles_stay_within_blocks():
    rng, columns = people(12, 9)
    maps = study(rng.normal(size=(12, *SHAPE)), **{**columns, "site": ["a"] * 5 + ["b"] * 7})
    contrast = tfs.slope(maps, "age", blocks="site")
    orders = planned_rows(contrast, "two-sided", 50, 3)(0, 50)
    site = np.array(maps.participants["site"])
    assert np.all(site[orders] == site) and len(np.unique(orders, axis=0)) == 50


def test_order_of_people_is_irrelevant():
    rng, columns = people(10, 10)
    values = rng.normal(size=(10, *SHAPE))
    maps = study(values, **columns)
    other = maps.select(subjects=list(reversed(maps.subjects)))
    for make in (
        lambda m: tfs.between_groups(m, "group", "patient", "control", nuisance=["age"]),
        lambda m: tfs.slope(m, "sleep"),
        lambda m: tfs.several_groups(m, "group"),
    ):
        one, two = run(make(maps), 200, seed=4), run(make(other), 200, seed=4)
        assert one.statistic == pytest.approx(two.statistic)


# -- tables of participants ------------------------------------------------------------------------------------------


def test_labels_are_compared_as_text_without_spaces_around():
    rng, columns = people(8, 11)
    maps = study(rng.normal(size=(8, *SHAPE)), **{**columns, "group": [1.0, 1.0, " 1", "1 ", 2, 2.0, "2", " 2 "]})
    assert list(tfs.between_groups(maps, "group", 1, "2").labels) == [1] * 4 + [0] * 4


def test_rows_of_the_table_find_their_subjects():
    rng, columns = people(9, 12)
    maps = study(rng.normal(size=(9, *SHAPE)), **columns)
    mixed = tfs.ConditionMaps(
        maps.values, subjects=maps.subjects, conditions=maps.conditions, channels=maps.channels,
        frequencies=maps.frequencies, times=maps.times, unit="decibel",
        participants=maps.participants.sample(frac=1, random_state=1),
    )  # fmt: skip
    one, other = (tfs.slope(each, "age").predictor for each in (maps, mixed))
    assert np.array_equal(one, other)


def test_what_people_who_are_not_compared_lack_is_of_no_account():
    rng, columns = people(10, 13)
    columns["group"] = ["patient"] * 4 + ["control"] * 4 + ["pilot"] * 2
    columns["age"] = [*columns["age"][:8], np.nan, np.nan]
    columns["site"] = [*(["a", "b"] * 4), None, ""]
    maps = study(rng.normal(size=(10, *SHAPE)), **columns)
    contrast = tfs.between_groups(maps, "group", "patient", "control", nuisance=["age"], blocks="site")
    fewer = tfs.between_groups(
        maps.select(subjects=maps.subjects[:8]), "group", "patient", "control", nuisance=["age"], blocks="site"
    )
    assert contrast.unit_names == fewer.unit_names and np.array_equal(contrast.nuisance, fewer.nuisance)
    assert contrast.relabelling == fewer.relabelling
    assert tfs.several_groups(maps, "group", ["patient", "control"], blocks="site").relabelling == fewer.relabelling


# -- covariates that say the same, units of covariates, points without residuals ---------------------------------------


def test_a_covariate_twice_takes_out_one_degree_of_freedom():
    rng, columns = people(14, 14)
    maps = study(rng.normal(size=(14, *SHAPE)), months=np.array(columns["age"]) * 12 + 3, one=[1.0] * 14, **columns)
    plain = run(tfs.slope(maps, "sleep", nuisance=["age"]))
    for nuisance in (["age", "months"], ["age", "one"]):
        twice = run(tfs.slope(maps, "sleep", nuisance=nuisance))
        assert twice.df == plain.df == 14 - 3
        assert twice.statistic == pytest.approx(plain.statistic)


def test_units_of_covariates_decide_nothing():
    """Power in V^2 beside an age in years: both are taken out."""
    rng, columns = people(14, 15)
    volts = rng.uniform(1, 2, 14)
    maps = study(rng.normal(size=(14, *SHAPE)) + volts[:, None, None, None], volts=volts, tiny=volts * 1e-12, **columns)
    one = run(tfs.slope(maps, "sleep", nuisance=["age", "volts"]))
    other = run(tfs.slope(maps, "sleep", nuisance=["age", "tiny"]))
    assert one.df == other.df == 14 - 4 and one.statistic == pytest.approx(other.statistic)


def test_a_point_that_the_covariates_determine_is_not_tested():
    rng, columns = people(14, 16)
    values = rng.normal(size=(14, *SHAPE))
    whole = run(tfs.slope(study(values, **columns), "sleep", nuisance=["age"]), 200)
    values[:, 0, 1, 2] = 3.0 * np.array(columns["age"]) - 1.0
    before = values.copy()
    result = run(tfs.slope(study(values, **columns), "sleep", nuisance=["age"]), 200)
    assert not result.tested[0, 1, 2] and result.tested.sum() == 5 and np.isnan(result.p_values[0, 1, 2])
    assert result.statistic[result.tested] == pytest.approx(whole.statistic[result.tested])
    assert np.all(result.null <= whole.null + 1e-9) and np.array_equal(values, before)


def test_a_point_that_is_missing_adds_nothing_to_the_null_of_ranks():
    rng, columns = people(10, 17)
    values = rng.normal(size=(10, *SHAPE))
    values[3, 0, 0, 0] = np.nan
    gaps = run(tfs.slope(study(values, **columns), "age", rank=True), 300)
    without = run(tfs.slope(study(values[..., 1:], **columns), "age", rank=True), 300)
    other = run(tfs.slope(study(values[..., 1:, :], **columns), "age", rank=True), 300)
    assert not gaps.tested[0, 0, 0]
    assert np.all(gaps.null >= without.null - 1e-9) and np.all(gaps.null >= other.null - 1e-9)
    # Every row is the larger of the two parts that together hold all other points.
    assert gaps.null == pytest.approx(np.maximum(without.null, other.null))


def test_ranks_of_four_people_cannot_reach_the_level():
    """Reversed ranks give the opposite sign: of 24 orders two reach the largest |t|, 2/24 = .083 (arithmetic)."""
    rng = np.random.default_rng(18)
    maps = study(rng.normal(size=(4, *SHAPE)), score=[1.0, 2.0, 7.0, 30.0])
    with pytest.raises(tfs.InputError, match="24 distinct relabellings, whose smallest p is 0.08333"):
        run(tfs.slope(maps, "score", rank=True), 100)
    assert run(tfs.slope(maps, "score", rank=True), 100, alternative="greater").record.smallest_p == 1 / 24
    assert run(tfs.slope(maps, "score"), 100).record.smallest_p == 1 / 24


# -- words ---------------------------------------------------------------------------------------------------------------


def test_words_of_groups():
    rng, columns = people(12, 19)
    maps = study(rng.normal(size=(12, *SHAPE)) * np.repeat([4.0, 1.0], [4, 8])[:, None, None, None], **columns)
    contrast = tfs.between_groups(maps, "group", "patient", "control", nuisance=["age"], blocks="site")
    assert "with age, site taken out (Freedman & Lane 1983)" in contrast.history[-2]
    assert contrast.history[-1].startswith("The ratio of the groups' standard deviations was ")
    assert any("differ in spread" in text for text in contrast.cautions)
    assert any("difference in their baseline power" in text for text in contrast.cautions)
    result = run(contrast)
    assert result.statistic_name == "Welch score (adjusted)" and result.effect_name == "d (average SD)"
    assert any("Freedman & Lane 1983" in text for text in result.cautions)
    assert contrast.condition_means["patient"] == pytest.approx(maps.values[:4, 0].mean(axis=0))


def test_points_that_nobody_has_are_no_fault():
    rng, columns = people(12, 21)
    values = rng.normal(size=(12, *SHAPE))
    values[..., 0, :] = np.nan
    maps = study(values, **columns)
    for contrast in (tfs.between_groups(maps, "group", "patient", "control"), tfs.several_groups(maps, "group")):
        result = run(contrast)
        assert result.tested.any() and not result.tested.all()
