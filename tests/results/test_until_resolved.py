"""Tests that draw until resolved, and small p-values from a fitted tail."""

import re
from fractions import Fraction

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tests.plain_versions import stopping
from tfstats.corrections.p_values import p_of_null
from tfstats.corrections.stopping_rule import GRID, boundaries, boundaries_on_grid, confidence_sequence
from tfstats.corrections.tail_approximation import approximated_p, fitted_tail


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


def test_settings_that_do_not_belong():
    contrast = contrast_of(0.0)
    for settings, text in (
        (
            {"permutations": "enough"},
            "permutations: expected a whole number or \"until_resolved\", got 'enough'; 10000 is the usual number.",
        ),
        (
            {"most_permutations": 5000},
            'most_permutations: expected None unless permutations = "until_resolved", got 5000; leave it out.',
        ),
        (
            {"permutations": "until_resolved", "most_permutations": 10},
            "most_permutations: expected a whole number of at least 1000, got 10; 100000 is the usual bound.",
        ),
        ({"tail_approximation": "yes"}, "tail_approximation: expected True or False, got 'yes'; leave it out."),
    ):
        with pytest.raises(tfs.InputError, match=f"^{re.escape(text)}$"):
            tfs.permutation_test(contrast, tfs.ClusterMass(), **settings)
    with pytest.raises(tfs.InputError, match="a whole number for FalseDiscoveryRate"):
        tfs.permutation_test(contrast, tfs.FalseDiscoveryRate(), permutations="until_resolved")
    with pytest.raises(tfs.InputError, match="False for FalseDiscoveryRate"):
        tfs.permutation_test(contrast, tfs.FalseDiscoveryRate(), tail_approximation=True)


@pytest.mark.parametrize("shape", [-0.15, 0.0, 0.2])
def test_tail_of_a_known_distribution(shape):
    """Draws of a generalised Pareto distribution: the fitted tail against the exact one (scipy's sign of the shape)."""
    rng = np.random.default_rng(4)
    exact = stats.genpareto(-shape)
    far = exact.isf(np.array([2e-3, 4e-4]))
    ratios = []
    for _ in range(250):
        null = np.concatenate([[0.0], exact.rvs(2000, random_state=rng)])
        fit = fitted_tail(null, 0)
        if fit is not None:
            ratios.append(approximated_p(far, p_of_null(far, null, 1e-9), fit, 1e-9) / exact.sf(far))
    assert len(ratios) > 200
    # Where a fitted tail has ended the counted p stays, so that a short tail errs upward.
    middle = np.median(ratios, axis=0)
    assert (middle > 0.8).all() and (middle < (1.2 if shape <= 0 else 1.35)).all()


def test_a_tail_that_does_not_fit_is_not_used():
    rng = np.random.default_rng(2)
    lumpy = np.concatenate([[5.0], np.round(rng.exponential(size=3000))])
    assert fitted_tail(lumpy, 0) is None


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
