"""Tests that draw until resolved, and small p-values from a fitted tail."""

from fractions import Fraction

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tests.plain_versions import stopping
from tfstats.corrections.p_values import p_of_null
from tfstats.corrections.stopping_rule import GRID, boundaries, boundaries_on_grid, confidence_sequence
from tfstats.corrections.tail_approximation import (
    TailFit,
    _anderson_darling,
    _fit_p,
    _moments_fit,
    approximated_p,
    fitted_tail,
)


def contrast_of(effect, subjects=20, seed=0):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(subjects, 2, 1, 4, 6))
    values[:, 0, 0, 1:3, 2:5] += effect
    maps = tfs.ConditionMaps(
        values, subjects=[f"S{i:02d}" for i in range(subjects)], conditions=["a", "b"], channels=["Fz"],
        frequencies=[4, 6, 8, 10], times=np.arange(6) / 10, unit="decibel",
    )  # fmt: skip
    return tfs.paired(maps, "a", "b")


@pytest.mark.parametrize(("alpha", "risk"), [(Fraction(1, 20), Fraction(1, 1000)), (Fraction(1, 10), Fraction(1, 50))])
def test_boundaries_by_their_definition(alpha, risk):
    # Gandy 2009, J. Am. Stat. Assoc. 104:1504, spending risk n / (1000 + n), in exact fractions.
    expected = list(stopping.boundaries(alpha, risk, 220))
    assert list(boundaries(float(alpha), float(risk), 220)) == expected


def test_the_resampling_risk_is_held():
    """Bernoulli streams near alpha: how often the wrong boundary is crossed (exact for the walk at alpha itself)."""
    rng = np.random.default_rng(0)
    risk, most, streams = 0.02, 3000, 4000
    looks = np.array(list(boundaries_on_grid(0.05, risk, most)))
    for p, wrong_side in ((0.0501, "low"), (0.0499, "high")):
        counts = np.cumsum(rng.binomial(GRID, p, size=(streams, most // GRID)), axis=1)
        below, above = counts <= looks[:, 1], counts >= looks[:, 2]
        first_below = np.where(below.any(axis=1), below.argmax(axis=1), most)
        first_above = np.where(above.any(axis=1), above.argmax(axis=1), most)
        wrong = np.sum(first_below < first_above) if wrong_side == "low" else np.sum(first_above < first_below)
        assert stats.binomtest(int(wrong), streams, risk, alternative="greater").pvalue > 1e-3


def test_one_risk_serves_all_clusters():
    """Clusters share a null, so that half the risk for each side holds for any number of them at once."""
    rng = np.random.default_rng(3)
    alpha, risk, most, streams = 0.1, 0.04, 1500, 1500
    looks = np.array(list(boundaries_on_grid(alpha, risk / 2, most)))
    true_p = np.array([0.09, 0.0975, 0.0999, 0.1001, 0.102, 0.11])
    wrong = 0
    for _ in range(streams):
        draws = rng.random(most)
        counts = np.array([np.cumsum(draws < p)[looks[:, 0] - 1] for p in true_p])
        below, above = counts <= looks[:, 1], counts >= looks[:, 2]
        first_below = np.where(below.any(axis=1), below.argmax(axis=1), most)
        first_above = np.where(above.any(axis=1), above.argmax(axis=1), most)
        wrong += bool(np.where(true_p <= alpha, first_above < first_below, first_below < first_above).any())
    assert wrong > 0
    assert stats.binomtest(wrong, streams, risk, alternative="greater").pvalue > 1e-3


@pytest.mark.parametrize("alpha", [0.001, 0.05, 0.5])
def test_what_crosses_a_boundary_has_its_p_on_that_side(alpha):
    for draws, low, high in boundaries_on_grid(alpha, 5e-4, 5000):
        assert low < 0 or (low + 1) / (draws + 1) <= alpha
        assert (high + 1) / (draws + 1) > alpha


def test_confidence_sequence_holds_at_every_look():
    rng = np.random.default_rng(1)
    missed = 0
    for _ in range(300):
        counts = np.cumsum(rng.random(2000) < 0.03)
        looks = range(99, 2000, 100)
        missed += any(not (lambda b: b[0] <= 0.03 <= b[1])(confidence_sequence(int(counts[n]), n + 1)) for n in looks)
    assert stats.binomtest(missed, 300, 0.05, alternative="greater").pvalue > 1e-3
    fixed = stats.binomtest(60, 2000).proportion_ci(0.95, "exact")
    low, high = confidence_sequence(60, 2000)
    assert low < fixed.low and high > fixed.high
    assert confidence_sequence(0, 100)[0] == 0.0 and confidence_sequence(100, 100)[1] == 1.0


@pytest.mark.parametrize(
    "correction", [tfs.ClusterMass(0.05), tfs.MaxStatistic(), tfs.ThresholdFree()], ids=lambda c: c.kind
)
def test_clear_effects_need_few_relabellings(correction):
    result = tfs.permutation_test(contrast_of(1.6), correction, permutations="until_resolved")
    assert result.record.sequential and not result.enumerated and result.record.unresolved == 0
    assert 250 < result.record.rows < 100_000 and result.null.size == result.record.rows
    fixed = tfs.permutation_test(contrast_of(1.6), correction, permutations=result.record.rows)
    # A stopped run is the beginning of a longer one, and its p-values are shares of its rows.
    assert np.array_equal(result.null, fixed.null) and np.array_equal(result.p_values, fixed.p_values, equal_nan=True)
    assert "until every comparison was on one side of .05" in result.methods() and "Gandy 2009" in result.methods()
    assert "until resolved" in result.summary()


def test_threads_do_not_decide_when_it_stops():
    one, two = (
        tfs.permutation_test(contrast_of(0.9), tfs.ClusterMass(0.05), permutations="until_resolved", threads=threads)
        for threads in (1, 2)
    )
    assert one.null.tobytes() == two.null.tobytes()


def test_what_is_not_resolved_is_said():
    for seed in range(40):
        contrast = contrast_of(0.65, seed=seed)
        result = tfs.permutation_test(
            contrast, tfs.ClusterMass(0.05), permutations="until_resolved", most_permutations=1000
        )
        if result.record.unresolved:
            break
    assert result.record.rows == 1000
    assert any(" on neither side of .05 yet (cluster " in caution for caution in result.cautions)
    low, high = result.record.unresolved_p
    assert result.clusters["p"].between(low, high).sum() == result.record.unresolved


def test_without_clusters_there_is_a_null_all_the_same():
    result = tfs.permutation_test(contrast_of(0.0), tfs.ClusterMass(1e-6), permutations="until_resolved")
    assert not len(result.clusters) and result.null.size == GRID + 1 and result.record.unresolved == 0


def test_few_distinct_relabellings_are_drawn_with_replacement():
    contrast = contrast_of(1.6, subjects=7)
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations="until_resolved")
    every = tfs.permutation_test(contrast, tfs.MaxStatistic())
    assert every.enumerated and not result.enumerated and not result.exact
    assert np.isin(np.round(result.null, 9), np.round(every.null, 9)).all()
    assert np.array_equal(result.mask, every.mask)
    row = result.clusters.iloc[0]
    count = round(row.p * result.record.rows) - 1
    assert (row.p_low, row.p_high) == confidence_sequence(count, result.record.rows - 1)


@pytest.mark.parametrize(
    "more",
    [{"permutations": "until_resolved", "most_permutations": 1000}, {"permutations": 1000, "tail_approximation": True}],
)
def test_saved_and_loaded(tmp_path, more):
    result = tfs.permutation_test(contrast_of(0.65, seed=8), tfs.ClusterMass(0.05), **more)
    result.save(tmp_path)
    again = tfs.ContrastResult.load(tmp_path)
    assert again.record == result.record and again.methods() == result.methods() and again.summary() == result.summary()
    assert np.array_equal(again.point_p_values, result.point_p_values)
    assert list(again.clusters.columns) == list(result.clusters.columns)


@pytest.mark.parametrize("shape", [-0.15, 0.0, 0.2])
def test_tail_of_a_known_distribution(shape):
    """Draws of a generalised Pareto distribution: the fitted tail against the exact one (scipy's sign of the shape)."""
    rng = np.random.default_rng(4)
    exact = stats.genpareto(-shape)
    far = exact.isf(np.array([2e-3, 4e-4]))
    ratios = []
    for _ in range(150):
        null = np.concatenate([[0.0], exact.rvs(2000, random_state=rng)])
        fit = fitted_tail(null, 0)
        if fit is not None:
            ratios.append(approximated_p(far, p_of_null(far, null, 1e-9), fit, 1e-9) / exact.sf(far))
    assert len(ratios) > 120
    # Where a fitted tail has ended the counted p stays, so that a short tail errs upward.
    middle = np.median(ratios, axis=0)
    assert (middle > 0.8).all() and (middle < (1.2 if shape <= 0 else 1.35)).all()


def test_a_tail_that_does_not_fit_is_not_used():
    rng = np.random.default_rng(2)
    lumpy = np.concatenate([[5.0], np.round(rng.exponential(size=3000))])
    assert fitted_tail(lumpy, 0) is None


def test_fits_of_true_tails_are_rejected_at_their_level():
    """Anderson-Darling against simulated refits: about one true tail in twenty is rejected at any one threshold."""
    rng = np.random.default_rng(5)
    rejected = 0
    for shape in (-0.2, 0.0, 0.25):
        for _ in range(60):
            above = np.sort(stats.genpareto(-shape).rvs(150, random_state=rng))
            fitted = _moments_fit(above[None])
            statistic = _anderson_darling(above[None], *fitted)[0]
            rejected += _fit_p(float(statistic), 150, float(fitted[0][0]), 0) <= 0.05
    low, high = stats.binomtest(rejected, 180).proportion_ci(0.99)
    assert low <= 0.05 <= high


def test_a_fitted_tail_that_ends_keeps_the_order_of_p():
    fit = TailFit(threshold=2.0, exceedances=100, rows=1001, shape=0.5, scale=0.5, fit_p=0.5)  # ends at 3
    observed = np.array([3.5, 2.9999, 2.5, 1.0])
    counted = np.array([0.001, 0.001, 0.03, 0.4])
    assert approximated_p(observed, counted, fit, 1e-9) == pytest.approx([0.001, 0.001, 0.1 * 0.25, 0.4])
    # Without anything beyond its end only the smallest attainable p is a floor.
    assert approximated_p(observed[1:], counted[1:], fit, 1e-6)[0] == 1e-6


def test_approximated_p_is_marked_and_keeps_the_interval_of_its_count():
    settings = {"permutations": 1500, "seed": 1}
    contrast = contrast_of(0.65, seed=8)
    counted = tfs.permutation_test(contrast, tfs.ClusterMass(0.05), **settings)
    fitted = tfs.permutation_test(contrast, tfs.ClusterMass(0.05), tail_approximation=True, **settings)
    marked = fitted.clusters["p_approximated"].to_numpy()
    assert marked.any() and not marked.all()
    assert np.array_equal(marked, fitted.clusters["p"] != counted.clusters["p"])
    for bound in ("p_low", "p_high"):
        assert np.array_equal(fitted.clusters[bound], counted.clusters[bound])
    assert "p_approximated" not in counted.clusters
    assert "by a fitted tail; the count's Monte Carlo 95 % CI" in fitted.sentence()
    # Few draws leave too few exceedances for a fit.
    none = tfs.permutation_test(contrast, tfs.ClusterMass(0.05), permutations=200, tail_approximation=True)
    assert not none.clusters["p_approximated"].any() and none.record.tail_fit is None
    assert "A generalised Pareto tail was asked for but not used" in none.methods()


def test_tail_approximation_end_to_end():
    contrast = contrast_of(1.0, subjects=14, seed=3)
    truth = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2**13)
    few = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2000, tail_approximation=True, seed=1)
    counted = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2000, seed=1)
    assert truth.enumerated and few.record.tail_fit is not None
    small = truth.p_values < 0.02
    assert small.any()
    assert np.abs(np.log(few.p_values[small] / truth.p_values[small])).max() < np.log(3)
    large = counted.p_values > 0.1
    assert np.array_equal(few.p_values[large], counted.p_values[large])
    assert (few.p_values >= 1 / 2**13).all()
    assert "generalised Pareto distribution" in few.methods()
    assert any(caution.startswith("p-values up to .1 are approximations") for caution in few.cautions)
    enumerated = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=2**13, tail_approximation=True)
    assert np.array_equal(enumerated.p_values, truth.p_values)
    assert any("No p-value was approximated: all relabellings were visited" in text for text in enumerated.cautions)
