"""Effect sizes and intervals against published tables and general-purpose libraries."""

import numpy as np
import pytest
from scipy import integrate, stats

from tfstats.corrections.p_values import clopper_pearson
from tfstats.findings.effect_sizes import hedges_factor, noncentral_t_interval


def test_hedges_factor():
    # Hedges 1981, J. Educ. Stat. 6:107, exact J; values computed again from the gamma form.
    known = {2: 0.5641896, 5: 0.8407487, 9: 0.9138749, 10: 0.9227456, 20: 0.9619445, 30: 0.9747544, 50: 0.9849119}
    for df, value in known.items():
        assert float(hedges_factor(df)) == pytest.approx(value, abs=5e-8)


def test_clopper_pearson():
    # Clopper & Pearson 1934, Biometrika 26:404; values computed again by the beta quantile.
    low, high = clopper_pearson(5, 100)
    assert (low, high) == pytest.approx((0.01643188, 0.11283491), abs=5e-9)
    low, high = clopper_pearson(0, 1000)
    assert (low, high) == pytest.approx((0, 0.00368208), abs=5e-9)


def noncentral_t_probability(t, df, noncentrality):
    """P(T <= t) by its definition: a normal variable over an independent root mean chi-square, integrated numerically."""
    scale = stats.chi(df, scale=1 / np.sqrt(df))
    return integrate.quad(
        lambda s: stats.norm.cdf(t * s - noncentrality) * scale.pdf(s), 0, 8, limit=400, epsabs=1e-13, epsrel=1e-12
    )[0]


@pytest.mark.parametrize("df", [4, 9, 23, 60])
@pytest.mark.parametrize("t", [-6.0, -1.2, 0.0, 0.4, 2.1, 8.0])
def test_noncentral_interval_agrees_with_the_definition(t, df):
    low, high = noncentral_t_interval(t, df)
    assert noncentral_t_probability(t, df, float(low)) == pytest.approx(0.975, abs=1e-9)
    assert noncentral_t_probability(t, df, float(high)) == pytest.approx(0.025, abs=1e-9)


def test_undefined_t_has_no_interval():
    low, high = noncentral_t_interval(np.array([np.nan, np.inf]), 9)
    assert np.isnan(low).all() and np.isnan(high).all()
