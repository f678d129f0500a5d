"""fit_power_law: robustness, gaps, shapes, the bend, against scipy's Theil-Sen line as an oracle."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs
from tests.plain_versions.trial_averages import median_line
from tfstats.normalization.robust_lines import robust_lines

FREQUENCIES = np.arange(1.0, 41.0)


def spectrum(exponent=1.3, level=1.0, noise=0.0, seed=0, shape=()):
    random = np.random.default_rng(seed)
    return 10.0 ** (level - exponent * np.log10(FREQUENCIES) + noise * random.normal(size=(*shape, FREQUENCIES.size)))


def test_a_planted_oscillation_is_nothing_to_the_fit_once_excluded():
    planted = spectrum()
    planted[(FREQUENCIES >= 8) & (FREQUENCIES <= 13)] *= 20
    fit = tfs.fit_power_law(planted, FREQUENCIES, exclude=[(8, 13)])
    assert (fit.exponent, fit.level_at_1_hz) == (pytest.approx(1.3, abs=1e-9), pytest.approx(1.0, abs=1e-9))
    assert not set(range(8, 14)) & set(fit.frequencies) and fit.frequencies.size == 34


def test_a_planted_oscillation_that_is_not_excluded_moves_the_line_little():
    planted = spectrum(noise=0.02)
    planted[(FREQUENCIES >= 8) & (FREQUENCIES <= 13)] *= 20
    least_squares = -np.polyfit(np.log10(FREQUENCIES), np.log10(planted), 1)[0]
    robust = tfs.fit_power_law(planted, FREQUENCIES).exponent
    assert abs(robust - 1.3) < 0.1 * abs(least_squares - 1.3) + 0.05


@settings(deadline=None, max_examples=30)
@given(seed=st.integers(0, 2**32 - 1), count=st.integers(3, 25))
def test_the_line_is_that_of_scipy(seed, count):
    random = np.random.default_rng(seed)
    frequencies = np.sort(random.uniform(1, 100, size=count))
    power = np.exp(random.normal(size=count))
    fit = tfs.fit_power_law(power, frequencies)
    oracle = scipy.stats.theilslopes(np.log10(power), np.log10(frequencies))
    assert fit.exponent == pytest.approx(-oracle.slope, rel=1e-9, abs=1e-12)


@settings(deadline=None, max_examples=30)
@given(
    seed=st.integers(0, 2**32 - 1), tilt=st.floats(-3, 3), gain=st.floats(-20, 20)
)  # fmt: skip
def test_a_change_of_gain_or_tilt_shows_as_itself(seed, tilt, gain):
    power = spectrum(noise=0.3, seed=seed)
    one = tfs.fit_power_law(power, FREQUENCIES)
    other = tfs.fit_power_law(power * 10.0**gain * FREQUENCIES**-tilt, FREQUENCIES)
    assert other.exponent == pytest.approx(one.exponent + tilt, abs=1e-9)
    assert other.level_at_1_hz == pytest.approx(one.level_at_1_hz + gain, abs=1e-9)
    assert other.residual_spread == pytest.approx(one.residual_spread, abs=1e-8)


def test_shapes_gaps_and_rows_that_are_too_short():
    power = spectrum(noise=0.1, shape=(2, 3, 4))
    power[0, 0, 0, :] = np.nan
    power[0, 1, 0, 2:] = np.nan
    power[1, 2, 3, 5:9] = np.nan
    power[1, 1, :, :3] = np.nan
    fit = tfs.fit_power_law(power, FREQUENCIES)
    for part in (fit.exponent, fit.level_at_1_hz, fit.fit_quality, fit.residual_spread):
        assert part.shape == (2, 3, 4)
        assert np.isnan(part[0, 0, 0]) and np.isnan(part[0, 1, 0]) and np.isnan(part).sum() == 2
    for place in ((0, 0, 1), (1, 2, 3), (1, 1, 2)):
        slope, height = median_line(np.log10(FREQUENCIES).tolist(), np.log10(power[place]).tolist())
        assert fit.exponent[place] == pytest.approx(-slope, rel=1e-12)
        assert fit.level_at_1_hz[place] == pytest.approx(height, rel=1e-12)
    assert fit.bend_frequency is None


def test_float32_and_whole_numbers_are_fitted_in_float64():
    power = spectrum(noise=0.1)
    fit = tfs.fit_power_law(power.astype(np.float32), FREQUENCIES.astype(int).tolist())
    assert fit.exponent == pytest.approx(tfs.fit_power_law(power, FREQUENCIES).exponent, abs=1e-5)


def test_quality_is_near_one_for_a_law_and_near_zero_for_a_flat_spectrum():
    steep, flat = spectrum(noise=0.05), spectrum(exponent=0.0, noise=0.05)
    assert tfs.fit_power_law(steep, FREQUENCIES).fit_quality > 0.97
    fit = tfs.fit_power_law(flat, FREQUENCIES)
    assert abs(fit.fit_quality) < 0.2
    assert fit.residual_spread == pytest.approx(0.5, rel=0.4)  # 0.05 in log10 is 0.5 dB
    left = np.log10(flat) - fit.level_at_1_hz + fit.exponent * np.log10(FREQUENCIES)
    expected = 1 - np.sum(left**2) / np.sum((np.log10(flat) - np.log10(flat).mean()) ** 2)
    assert fit.fit_quality == pytest.approx(expected, rel=1e-12)


def test_a_bend_only_where_there_is_one():
    random = np.random.default_rng(4)
    frequencies = np.arange(1.0, 61.0)
    noise = random.gamma(40, 1 / 40, size=(12, 60))
    bent = tfs.fit_power_law(3 / (1 + (frequencies / 9) ** 2.2) * noise, frequencies, bend=True)
    assert np.all(np.abs(np.log(bent.bend_frequency / 9)) < 0.3) and np.all(np.abs(bent.exponent - 2.2) < 0.35)
    assert np.all(np.abs(bent.level_at_1_hz - np.log10(3 / (1 + (1 / 9) ** 2.2))) < 0.08)
    line = tfs.fit_power_law(3 / frequencies**1.2 * noise, frequencies, bend=True)
    straight = tfs.fit_power_law(3 / frequencies**1.2 * noise, frequencies)
    assert np.isnan(line.bend_frequency).mean() > 0.8
    same = np.isnan(line.bend_frequency)
    assert np.array_equal(line.exponent[same], straight.exponent[same])
    assert np.array_equal(line.level_at_1_hz[same], straight.level_at_1_hz[same])


def test_an_excluded_band_beside_the_frequencies_changes_nothing():
    power = spectrum(noise=0.1)
    one = tfs.fit_power_law(power, FREQUENCIES, exclude=[(49, 51)])
    assert one.exponent == tfs.fit_power_law(power, FREQUENCIES).exponent


def test_rows_with_many_patterns_of_gaps():
    random = np.random.default_rng(5)
    rows = random.normal(size=(200, 12))
    rows[random.random(rows.shape) < 0.3] = np.nan
    places = np.log10(np.geomspace(2, 90, 12))
    slopes, heights = robust_lines(rows, places)
    for row, slope, height in zip(rows, slopes, heights):
        if np.count_nonzero(~np.isnan(row)) < 3:
            assert np.isnan(slope) and np.isnan(height)
        else:
            assert (slope, height) == pytest.approx(median_line(places.tolist(), row.tolist()), rel=1e-10, abs=1e-12)
