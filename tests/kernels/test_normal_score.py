"""Normal scores of t against scipy's tail probabilities."""

import numpy as np
import pytest
from scipy import stats

from tfstats.kernels.normal_score import fitted_score, normal_scores


def scores(t, df, fit):
    out = np.full(len(t), np.nan)
    normal_scores(t, df, fit, out)
    return out


@pytest.mark.parametrize(
    ("least", "most"), [(1, 1.2), (1, 3), (1, 40), (4, 9), (7, 30), (99, 198), (23, 23), (3, 1000)]
)
def test_relative_error_is_below_a_millionth(least, most):
    generator = np.random.default_rng(0)
    df = generator.uniform(least, most, 4000)
    z = generator.uniform(-8, 8, 4000)
    t = np.copysign(stats.t.isf(stats.norm.sf(np.abs(z)), df), z)
    expected = np.copysign(stats.norm.isf(stats.t.sf(np.abs(t), df)), t)
    np.testing.assert_allclose(scores(t, df, fitted_score(least, most)), expected, rtol=1e-6)


def test_small_t_and_zero():
    fit = fitted_score(5, 30)
    t = np.array([0.0, 1e-12, -1e-6, 1e-3])
    df = np.full(4, 9.0)
    slope = stats.t.pdf(0, 9.0) / stats.norm.pdf(0)
    np.testing.assert_allclose(scores(t, df, fit), t * slope, rtol=1e-5)


def test_far_out_scores_grow_with_t_and_stay_below_it():
    fit = fitted_score(5, 30)
    t = np.geomspace(1, 1e6, 3000)
    for df in (5.0, 12.5, 30.0):
        z = scores(t, np.full(t.size, df), fit)
        assert (np.diff(z) > 0).all()
        assert (z < t).all()


def test_nan_stays():
    assert np.isnan(scores(np.array([np.nan]), np.array([5.0]), fitted_score(5, 6)))[0]
