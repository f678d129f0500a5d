"""The generator gives what its design says: Gaussian power, wavelet smoothness, background, planted effects."""

import dataclasses

import numpy as np
import pytest
from scipy import stats

import tfstats as tfs
from tfstats.simulated_power import (
    LAMP_GROUPS,
    PlantedEffect,
    StudyDesign,
    lamp_electrodes,
    lamp_participants,
    lamp_sequences,
    planted_decibels,
    simulate_study,
    simulate_subject,
)


def plain_design(**changes):
    settings = {
        "subjects": ("S1", "S2"),
        "channels": tuple(f"C{number}" for number in range(10)),
        "frequencies": (5.0, 10.0, 20.0),
        "times": tuple((np.arange(-20, 40) * 0.02).round(3)),
        "trial_counts": {"recalled": (60, 60), "missed": (60, 60)},
        "exponent": 0.0,
    }
    return StudyDesign(**{**settings, **changes})


def test_the_same_design_gives_the_same_numbers_whoever_else_takes_part():
    design = plain_design()
    alone = dataclasses.replace(design, subjects=("S2",))
    assert np.array_equal(simulate_subject(design, "S2").values, simulate_subject(alone, "S2").values)
    assert not np.array_equal(simulate_subject(design, "S1").values, simulate_subject(design, "S2").values)
    other = dataclasses.replace(design, seed=1)
    assert not np.array_equal(simulate_subject(design, "S1").values, simulate_subject(other, "S1").values)


def test_a_study_can_be_read_twice():
    study = simulate_study(plain_design())
    assert len(study) == 2 and [power.subject for power in study] == [power.subject for power in study] == ["S1", "S2"]


def test_single_points_are_exponential_with_mean_one():
    """Power of a Gaussian signal: mean x chi-square(2)/2 (common practice)."""
    values = simulate_subject(plain_design(), "S1").values[:, :, 1, 30].ravel()
    assert stats.kstest(values, "expon").pvalue > 0.001


def test_fields_are_as_smooth_in_time_as_wavelets_make_them():
    """Correlation of power of white noise at lag d: exp(-d^2/(2 sigma_t^2)), with sigma_t = cycles/(2 pi f)."""
    design = plain_design(trial_counts={"recalled": (600, 600)})
    values = simulate_subject(design, "S1").values - 1.0
    for place, frequency in enumerate(design.frequencies):
        width = design.wavelet_cycles / (2 * np.pi * frequency)
        for lag in (1, 3, 6):
            here, later = values[:, :, place, 10], values[:, :, place, 10 + lag]
            expected = np.exp(-((lag * 0.02) ** 2) / (2 * width**2))
            assert np.corrcoef(here.ravel(), later.ravel())[0, 1] == pytest.approx(expected, abs=0.06)


def test_the_ends_are_like_the_middle():
    values = simulate_subject(plain_design(trial_counts={"recalled": (800, 800)}), "S1").values
    assert values[..., 0].mean() == pytest.approx(1.0, abs=0.05)
    assert values[..., -1].mean() == pytest.approx(1.0, abs=0.05)


def test_background_falls_with_frequency_by_its_exponent():
    values = simulate_subject(plain_design(exponent=1.5), "S1").values.mean(axis=(0, 1, 3), dtype=float)
    slope = np.polyfit(np.log10([5.0, 10.0, 20.0]), np.log10(values), 1)[0]
    assert slope == pytest.approx(-1.5, abs=0.05)


def test_planted_effects_have_their_size_at_their_place_and_none_elsewhere():
    effect = PlantedEffect("recalled", (9.0, 11.0), (0.2, 0.5), ("C1",), 6.0, edges="box")
    design = plain_design(effects=(effect,))
    plain = simulate_subject(dataclasses.replace(design, effects=()), "S1")
    changed = simulate_subject(design, "S1")
    planted = planted_decibels(design, "recalled")
    assert set(np.unique(planted)) == {0.0, 6.0}
    assert planted[1, 1, 30] == 6.0 and np.count_nonzero(planted) == 16
    assert np.all(planted_decibels(design, "missed") == 0)
    rows = (changed.trials["memory"] == "recalled").to_numpy()
    np.testing.assert_allclose(
        10 * np.log10(changed.values[rows] / plain.values[rows]), planted[None].repeat(60, 0), atol=1e-5
    )
    assert np.array_equal(changed.values[~rows], plain.values[~rows])


def test_smooth_edges_lie_outside_and_leave_the_baseline_alone():
    effect = PlantedEffect("recalled", (8.0, 13.0), (0.3, 0.6), ("C0",), 2.0)
    shape = effect.shape(
        np.array([6.0, 7.0, 8.0, 10.0, 13.0, 15.0, 20.0]), np.array([-0.3, 0.19, 0.25, 0.3, 0.6, 0.71])
    )
    assert np.all(shape[2:5, 3:5] == 1.0)
    assert np.all(shape[[0, 6]] == 0) and np.all(shape[:, [0, 1, 5]] == 0)
    assert 0 < shape[1, 3] < 1 and shape[3, 2] == pytest.approx(0.5, abs=1e-4)


def test_overall_power_is_correlated_over_trials_when_asked_for():
    design = plain_design(trial_counts={"recalled": (400, 400)}, trial_spread=3.0, trial_autocorrelation=0.8)
    level = np.log(simulate_subject(design, "S1").values).mean(axis=(1, 2, 3))
    assert np.corrcoef(level[1:], level[:-1])[0, 1] == pytest.approx(0.8, abs=0.1)


def test_channels_share_what_they_are_told_to():
    values = simulate_subject(plain_design(shared=0.5, trial_counts={"recalled": (2000, 2000)}), "S1").values
    # Correlation of squared moduli is the squared correlation of the fields.
    assert np.corrcoef(values[:, 0, 1, 30], values[:, 1, 1, 30])[0, 1] == pytest.approx(0.25, abs=0.08)


def test_the_lamp_study_holds_what_it_states():
    design = lamp_sequences()
    assert len(design.subjects) == 20 and len(design.channels) == 8
    difference = planted_decibels(design, "recalled") - planted_decibels(design, "missed")
    frontal = [design.channels.index(name) for name in LAMP_GROUPS["frontal"]]
    posterior = [design.channels.index(name) for name in LAMP_GROUPS["posterior"]]
    theta = (design.frequency_axis >= 4) & (design.frequency_axis <= 8)
    window = (design.time_axis >= 0.3) & (design.time_axis <= 0.9)
    np.testing.assert_allclose(difference[np.ix_(frontal, theta, window)], 1.2)
    alpha = (design.frequency_axis >= 8) & (design.frequency_axis <= 13)
    window = (design.time_axis >= 0.5) & (design.time_axis <= 1.2)
    np.testing.assert_allclose(difference[np.ix_(posterior, alpha, window)], -1.5)
    assert np.all(difference[:, :, design.time_axis < 0.2] == 0)
    assert np.all(difference[[design.channels.index("C3"), design.channels.index("C4")]] == 0)


def test_the_lamp_study_is_small_enough_for_a_demo():
    power = simulate_subject(lamp_sequences(), "01")
    assert power.values.dtype == np.float32 and 20 * power.values.nbytes < 100e6
    assert set(power.trials["memory"]) == {"recalled", "missed"} and set(power.trials["block"]) == {1, 2, 3, 4}


def test_electrodes_lie_on_a_sphere_on_the_side_their_names_say():
    table = lamp_electrodes().set_index("name")
    np.testing.assert_allclose(np.linalg.norm(table.to_numpy(), axis=1), 90.0, atol=0.01)
    assert table.index.tolist() == list(lamp_sequences().channels)
    for name, place in table.iterrows():
        assert (place.y > 0) == name.startswith("F") or name.startswith("C")
        side = 0 if name.endswith("z") else (-1 if int(name[-1]) % 2 else 1)
        assert np.sign(round(place.x, 2)) == side


def test_participants_of_the_lamp_study():
    design = lamp_sequences(subjects=3)
    table = lamp_participants(design)
    assert table["participant_id"].tolist() == ["01", "02", "03"] and table["age"].between(20, 35).all()


def test_the_planted_difference_is_found_in_its_region():
    design = lamp_sequences()
    maps = tfs.condition_maps(simulate_study(design), "memory", tfs.Baseline((-0.5, -0.2)))
    regions = (("frontal", (4, 8), (0.3, 0.9), 1.2), ("posterior", (8, 13), (0.5, 1.2), -1.5))
    for group, band, window, size in regions:
        part = maps.select(channels=LAMP_GROUPS[group], frequencies=band, times=window).values.mean(axis=(2, 3, 4))
        low, high = stats.ttest_1samp(part[:, 1] - part[:, 0], 0.0).confidence_interval(0.99)
        assert low <= size <= high
    before = maps.select(times=(-0.1, 0.1)).values.mean(axis=(2, 3, 4))
    low, high = stats.ttest_1samp(before[:, 1] - before[:, 0], 0.0).confidence_interval(0.99)
    assert low <= 0 <= high
