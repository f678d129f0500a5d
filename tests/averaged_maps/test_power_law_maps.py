"""Exponent and level as maps that contrasts take, and maps without what is common to all frequencies."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import tfstats as tfs
from tests.plain_versions.trial_averages import median_line

FREQUENCIES = np.geomspace(2, 64, 11)
TIMES = np.arange(-5, 10) * 0.1


def power_maps(subjects=6, seed=0, steeper=0.3, **more):
    """Activity of "recalled" is steeper by a known amount; the baselines are alike."""
    random = np.random.default_rng(seed)
    exponent = 1.2 + 0.2 * random.normal(size=subjects)
    values = np.empty((subjects, 2, 2, FREQUENCIES.size, TIMES.size))
    for condition in range(2):
        change = np.where(TIMES > 0, steeper * (condition == 0), 0.0)
        tilt = exponent[:, None] + change + 0.01 * random.normal(size=(subjects, TIMES.size))
        values[:, condition] = (5 * FREQUENCIES[:, None] ** -tilt[:, None, :])[:, None]
    given = {
        "subjects": [f"S{number}" for number in range(subjects)],
        "conditions": ["recalled", "missed"],
        "channels": ["Fz", "Pz"],
        "frequencies": FREQUENCIES,
        "times": TIMES,
        "unit": "power",
        "scaling": "density",
        "trial_counts": np.full((subjects, 2), 30),
        "participants": pd.DataFrame(
            {"participant_id": [f"S{number}" for number in range(subjects)], "score": np.arange(subjects) * 1.0}
        ),
    }
    return tfs.ConditionMaps(more.pop("values", values), **{**given, **more})


def test_rows_can_be_contrasted_like_a_band():
    rows = tfs.power_law_maps(power_maps(), {"baseline": (-0.5, -0.2), "activity": (0.2, 0.8)})
    exponent = rows.exponent
    assert exponent.conditions == ("recalled/baseline", "recalled/activity", "missed/baseline", "missed/activity")
    assert exponent.values.shape == (6, 4, 2, 1, 1) and exponent.channels == ("Fz", "Pz")
    assert exponent.frequencies.tolist() == [1.0] and exponent.times.tolist() == [pytest.approx((-0.35 + 0.5) / 2)]
    assert exponent.trial_counts.to_numpy().tolist() == [[30] * 4] * 6
    contrast = tfs.interaction(
        exponent, ("recalled/activity", "recalled/baseline"), ("missed/activity", "missed/baseline")
    )
    result = tfs.permutation_test(contrast, tfs.MaxStatistic(), permutations=64, alpha=0.1)
    np.testing.assert_allclose(result.estimate, 0.3, atol=0.03)
    assert np.all(result.p_values == 2 / 64) and result.estimate_unit == "exponent"
    assert tfs.slope(rows.level, "score", condition="missed/activity").estimate_unit == "log10 power per unit of score"


def test_one_window_leaves_the_conditions_their_names():
    maps = power_maps()
    rows = tfs.power_law_maps(maps, (0.2, 0.8), exclude=[(7, 13)])
    assert rows.exponent.conditions == maps.conditions and rows.exponent.times.tolist() == [0.5]
    kept = (FREQUENCIES < 7) | (FREQUENCIES > 13)
    spectrum = maps.values[2, 1, 0][:, (TIMES > 0.15) & (TIMES < 0.85)].mean(axis=1)
    fit = tfs.fit_power_law(spectrum[kept], FREQUENCIES[kept])
    assert rows.exponent.values[2, 1, 0, 0, 0] == pytest.approx(fit.exponent, rel=1e-12)
    assert rows.level.values[2, 1, 0, 0, 0] == pytest.approx(fit.level_at_1_hz, rel=1e-12)
    assert rows.fit_quality.values[2, 1, 0, 0, 0] == pytest.approx(fit.fit_quality, rel=1e-12)
    assert rows.residual_spread.unit == "dB" and rows.bend_frequency is None
    assert rows.exponent.history[-1] == (
        "Power was averaged over time (0.2 to 0.8 s) and a line (median of all pairwise slopes) was fitted to log10 power over "
        "log10 frequency from 2 to 64 Hz, without 7 to 13 Hz; the exponent is minus its slope, the level its height at 1 Hz."
    )


def test_wavelets_of_unit_gain_with_growing_cycles_give_the_exponent_of_the_density():
    density = power_maps(steeper=0.0)
    cycles = np.linspace(3, 9, FREQUENCIES.size)
    amplitude = power_maps(
        values=density.values * (FREQUENCIES / cycles)[:, None], scaling="amplitude", wavelet_cycles=cycles
    )
    one, other = (tfs.power_law_maps(maps, (0.2, 0.8)) for maps in (density, amplitude))
    np.testing.assert_allclose(one.exponent.values, other.exponent.values, atol=1e-9)
    assert other.exponent.scaling == "density"


def test_gaps_at_low_frequencies_are_left_out_of_the_fit():
    maps = power_maps()
    values = maps.values.copy()
    values[:, :, :, :2, :] = np.nan
    values[0, 0, 0] = np.nan
    rows = tfs.power_law_maps(power_maps(values=values), (0.2, 0.8), bend=True)
    assert np.isnan(rows.exponent.values[0, 0, 0]).all() and np.isnan(rows.exponent.values).sum() == 1
    assert rows.bend_frequency.unit == "Hz" and np.isnan(rows.bend_frequency.values).all()


# -- broadband-adjusted maps --------------------------------------------------------------------------


def decibel_maps(values, **more):
    subjects, conditions, channels, frequencies, times = values.shape
    return tfs.ConditionMaps(
        values,
        subjects=[f"S{number}" for number in range(subjects)],
        conditions=["recalled", "missed"][:conditions],
        channels=["Fz", "Pz"][:channels],
        frequencies=FREQUENCIES[:frequencies],
        times=TIMES[:times],
        unit="decibel",
        **more,
    )


def test_a_shift_and_tilt_of_the_whole_spectrum_is_gone():
    random = np.random.default_rng(1)
    shift, tilt = random.normal(size=(2, 3, 2, 2, 1, TIMES.size))
    pattern = 0.2 * random.normal(size=(3, 2, 2, FREQUENCIES.size, TIMES.size))
    pure = tfs.broadband_adjusted(decibel_maps(shift + tilt * np.log10(FREQUENCIES)[:, None] + 0 * pattern))
    assert np.abs(pure.values).max() < 1e-12
    one = tfs.broadband_adjusted(decibel_maps(pattern))
    other = tfs.broadband_adjusted(decibel_maps(pattern + shift + tilt * np.log10(FREQUENCIES)[:, None]))
    np.testing.assert_allclose(one.values, other.values, atol=1e-12)


def test_every_point_equals_the_plain_twin():
    random = np.random.default_rng(2)
    values = random.normal(size=(2, 2, 1, FREQUENCIES.size, 4))
    values[:, :, :, :2, 0] = np.nan
    values[0, 0, 0, 2:, 1] = np.nan
    adjusted = tfs.broadband_adjusted(decibel_maps(values), exclude=[(7, 13)]).values
    kept = (FREQUENCIES < 7) | (FREQUENCIES > 13)
    x = np.log10(FREQUENCIES)
    for place in np.ndindex(2, 2, 1):
        for time in range(4):
            column = values[place][:, time]
            if np.count_nonzero(~np.isnan(column[kept])) < 3:
                assert np.isnan(adjusted[place][:, time]).all()
                continue
            slope, height = median_line(x[kept].tolist(), column[kept].tolist())
            np.testing.assert_allclose(adjusted[place][:, time], column - height - slope * x, atol=1e-12)


@settings(deadline=None, max_examples=20)
@given(seed=st.integers(0, 2**32 - 1))
def test_a_swap_of_conditions_turns_the_sign_of_their_contrast(seed):
    values = np.random.default_rng(seed).normal(size=(4, 2, 1, FREQUENCIES.size, 3))
    one = tfs.paired(tfs.broadband_adjusted(decibel_maps(values)), "recalled", "missed")
    other = tfs.paired(tfs.broadband_adjusted(decibel_maps(values[:, ::-1])), "recalled", "missed")
    assert np.array_equal(one.values, -other.values)


def test_a_real_fall_of_alpha_leaves_a_residue_of_the_opposite_sign_which_excluding_it_takes_away():
    fall = np.where((FREQUENCIES >= 5) & (FREQUENCIES <= 14), -3.0, 0.0)
    wave = 0.5 * np.random.default_rng(0).normal(size=FREQUENCIES.size)  # in data no point lies on the line exactly
    values = (fall + wave)[None, None, None, :, None] * np.ones((1, 1, 1, 1, 2))
    without_fall = tfs.broadband_adjusted(decibel_maps(wave[None, None, None, :, None] * np.ones((1, 1, 1, 1, 2))))
    made = tfs.broadband_adjusted(decibel_maps(values))
    residue = (made.values - without_fall.values)[0, 0, 0, fall == 0, 0]
    assert residue.mean() > 0.05 and residue.min() > -1e-9
    excluded = tfs.broadband_adjusted(decibel_maps(values), exclude=[(5, 14)])
    reference = tfs.broadband_adjusted(decibel_maps(values - fall[:, None]), exclude=[(5, 14)])
    np.testing.assert_allclose((excluded.values - reference.values)[0, 0, 0, :, 0], fall, atol=1e-12)
    assert made.cautions == (
        "The maps are broadband-adjusted, which is a model: a real change of one band leaves a residue of the opposite sign at "
        "other frequencies, so clusters of the opposite sign carry no claim.",
    )
    assert excluded.history == (
        "At each time of each condition's map the robust line over log frequency (median of all pairwise slopes) was "
        "subtracted, to which 5 to 14 Hz did not count (broadband-adjusted maps).",
    )


def test_what_is_known_of_the_maps_stays():
    baseline = tfs.Baseline()
    maps = decibel_maps(np.zeros((3, 2, 1, FREQUENCIES.size, 4), np.float32), baseline=baseline, scaling="density")
    adjusted = tfs.broadband_adjusted(maps)
    assert (adjusted.baseline, adjusted.scaling, adjusted.unit) == (baseline, "density", "decibel")
    assert adjusted.values.dtype == np.float32
