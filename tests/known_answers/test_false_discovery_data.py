"""Benjamini & Hochberg 1995, JRSS B 57:289: the 15 p-values of their example."""

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.multitest import multipletests

from tfstats.corrections.false_discovery import adjusted_p

P = np.array(
    [
        0.0001,
        0.0004,
        0.0019,
        0.0095,
        0.0201,
        0.0278,
        0.0298,
        0.0344,
        0.0459,
        0.3240,
        0.4262,
        0.5719,
        0.6528,
        0.7590,
        1.0,
    ]
)


def test_the_example():
    adjusted = adjusted_p(P, "benjamini_hochberg")
    assert (adjusted <= 0.05).sum() == 4
    assert adjusted[:5] == pytest.approx([0.0015, 0.003, 0.0095, 0.035625, 0.0603])
    assert (adjusted_p(P, "benjamini_yekutieli") <= 0.05).sum() == 3


@pytest.mark.parametrize("seed", range(5))
def test_any_order_agrees_with_general_purpose_libraries(seed):
    p = np.random.default_rng(seed).permutation(np.concatenate([P, P[:3]]))
    for method, scipy_name, statsmodels_name in (
        ("benjamini_hochberg", "bh", "fdr_bh"),
        ("benjamini_yekutieli", "by", "fdr_by"),
    ):
        adjusted = adjusted_p(p, method)
        assert adjusted == pytest.approx(stats.false_discovery_control(p, method=scipy_name))
        assert adjusted == pytest.approx(multipletests(p, method=statsmodels_name)[1])
