"""The p rule: (b + 1)/(m + 1) of Phipson & Smyth 2010, Stat. Appl. Genet. Mol. Biol. 9:39."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from tfstats.corrections.p_values import clopper_pearson, draws_to_settle, monte_carlo_interval, p_of_null


@settings(deadline=None, max_examples=60)
@given(st.lists(st.integers(0, 6), min_size=1, max_size=40))
def test_share_of_rows_at_least_as_extreme(values):
    null = np.array(values, dtype=float)
    expected = [(1 + sum(row >= value for row in null[1:])) / null.size for value in (null[0], 3.0)]
    assert p_of_null([null[0], 3.0], null, 1e-9) == pytest.approx(expected)


def test_p_is_never_zero_and_rounding_does_not_break_ties():
    null = np.array([0.3, 0.1 + 0.2 - 1e-12, 0.1])
    assert p_of_null(0.3, null, 1e-9)[0] == 2 / 3
    assert p_of_null(99.0, null, 1e-9)[0] == 1 / 3


def test_interval_is_of_the_draws_alone():
    low, high = monte_carlo_interval(np.array([0.01]), 1000, enumerated=False)
    expected = stats.binomtest(9, 999).proportion_ci(0.95, "exact")
    assert (low[0], high[0]) == pytest.approx((expected.low, expected.high))
    assert [bound[0] for bound in monte_carlo_interval(np.array([0.01]), 1000, enumerated=True)] == [0.01, 0.01]
    assert clopper_pearson(7, 7)[1] == 1.0


def test_draws_to_settle():
    assert draws_to_settle(0.04, 0.05) == int(np.ceil(3.84 * 0.04 * 0.96 / 0.01**2))
    assert draws_to_settle(0.05, 0.05) is None
