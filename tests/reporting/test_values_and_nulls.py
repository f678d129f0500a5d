"""The null histogram and the individual values against the numbers that they show."""

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tfstats.reporting.individual_values import condition_columns, draw_individuals, mean_interval, spread_out
from tfstats.reporting.null_histogram import draw_null_histogram, null_quantity, p_of_observed
from tfstats.results.apa_numbers import p_text


@pytest.mark.parametrize("correction", [tfs.ClusterMass(0.05), tfs.ClusterExtent(0.05), tfs.MaxStatistic()])
def test_the_marked_p_is_the_smallest_corrected_p(correction, make_result, axes):
    result = make_result(correction)
    assert p_of_observed(result) == np.nanmin(result.p_values)
    assert draw_null_histogram(axes, result) is axes
    assert f"observed, {p_text(np.nanmin(result.p_values))}" in [text.get_text() for text in axes.texts]
    assert any(np.all(np.asarray(line.get_xdata()) == result.null[0]) for line in axes.lines)


def test_the_dashed_value_separates_what_alpha_separates(make_result):
    from tfstats.reporting.null_histogram import _critical_value

    result = make_result()
    critical = _critical_value(result)
    assert np.mean(result.null >= critical) <= result.alpha
    below = np.max(result.null[result.null < critical])
    assert np.mean(result.null >= below) > result.alpha


def test_false_discoveries_are_said_to_be_another_rate(make_result, axes):
    draw_null_histogram(axes, make_result(tfs.FalseDiscoveryRate()))
    assert any("false discovery rate" in text.get_text() for text in axes.texts)


def test_words_of_the_null(make_result):
    assert null_quantity(make_result()) == "largest cluster mass (sum of |t|)"
    assert null_quantity(make_result(tfs.MaxStatistic(), alternative="less")) == "largest -t of the plane"


def test_every_subject_is_a_dot_and_pairs_are_joined(make_result, axes):
    result = make_result()
    columns, compared = condition_columns(result, 1)
    assert list(columns) == ["recalled", "missed"]
    assert compared == pytest.approx(columns["recalled"] - columns["missed"])
    draw_individuals(axes, columns, "dB", joined=True)
    dots = [line for line in axes.lines if line.get_linestyle() == "None" and len(line.get_xdata()) == 9]
    assert [np.asarray(line.get_ydata()).tolist() for line in dots] == [columns[name].tolist() for name in columns]
    pairs = [line for line in axes.lines if line.get_linestyle() == "-" and list(line.get_xdata()) == [0, 1]]
    assert len(pairs) == 9
    assert not axes.patches  # no bars


def test_one_condition_is_shown_once(make_result, make_maps):
    maps = make_maps(unit="percent_change", effect=3.0)
    result = make_result(maps=maps, contrast=tfs.against_zero(maps, "recalled"))
    columns, compared = condition_columns(result, 1)
    assert columns == {} and compared.shape == (9,)


def test_interval_is_that_of_student():
    values = np.array([0.7, -1.6, -0.2, -1.2, -0.1, 3.4, np.nan])
    mean, low, high = mean_interval(values)
    known = values[:6]
    expected = stats.t.interval(0.95, 5, known.mean(), stats.sem(known))
    assert (mean, low, high) == pytest.approx((known.mean(), *expected))
    assert np.isnan(mean_interval(np.array([1.0]))[1])


def test_dots_of_like_value_stand_apart():
    values = np.array([1.0, 1.0, 1.0, 5.0])
    places = spread_out(values, 0.4)
    assert len(set(places[:3])) == 3 and np.abs(places).max() <= 0.2
    assert np.array_equal(spread_out(np.full(3, 2.0), 0.4), np.zeros(3))
