"""Each subject's effect over trials against scipy, least squares (statsmodels) and weights by hand."""

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
from scipy import stats

import tfstats as tfs

TIMES = np.arange(-4, 3) / 10
BASELINE = tfs.Baseline((-0.4, -0.2), order="trial_first")


def power_of(subject, trials, seed, **columns):
    rng = np.random.default_rng(seed)
    table = {
        "memory": (["recalled", "missed", "missed"] * trials)[:trials],
        "speed": rng.gamma(4.0, 0.2, trials),
        "number": np.arange(trials),
    }
    return tfs.TrialPower(
        rng.exponential(size=(trials, 2, 2, TIMES.size)) + 0.05, frequencies=[4.0, 8.0], times=TIMES,
        channels=["Fz", "Pz"], subject=subject, trials=pd.DataFrame({**table, **columns}),
    )  # fmt: skip


@pytest.fixture(scope="module")
def study():
    return [power_of(f"S{number}", 8 + 5 * number, number) for number in range(7)]


def test_differences_of_labels(study):
    maps = tfs.trial_effect_maps(study, "memory", BASELINE, first="recalled", second="missed")
    for row, power in enumerate(study):
        values = tfs.normalized_trials(power, BASELINE).values
        first = np.array(power.trials["memory"]) == "recalled"
        assert maps.values[row, 0] == pytest.approx(values[first].mean(axis=0) - values[~first].mean(axis=0))
    assert maps.conditions == ("effect",) and maps.of_differences and maps.unit == "decibel"
    assert maps.trial_counts["effect"].tolist() == [8 + 5 * number for number in range(7)]
    assert maps.history[-1] == (
        "Each subject's effect over trials was the difference recalled - missed (memory); every subject weighed the same."
    )


@pytest.mark.parametrize("nuisance", [(), ("number",)], ids=["plain", "nuisance"])
@pytest.mark.parametrize("column", ["speed", "memory"])
def test_slopes_and_differences_beside_nuisance_are_least_squares(study, column, nuisance):
    labels = {"first": "recalled", "second": "missed"} if column == "memory" else {}
    maps = tfs.trial_effect_maps(study, column, BASELINE, nuisance=nuisance, **labels)
    term = "speed" if column == "speed" else "C(memory)[T.recalled]"
    for row, power in enumerate(study):
        y = tfs.normalized_trials(power, BASELINE).values[:, 1, 1, -1]
        formula = " + ".join([f"y ~ {'speed' if column == 'speed' else 'C(memory)'}", *nuisance])
        fit = smf.ols(formula, power.trials.assign(y=y)).fit()
        assert maps.values[row, 0, 1, 1, -1] == pytest.approx(fit.params[term])
    assert maps.unit == ("dB per unit of speed" if column == "speed" else "decibel")


def test_weights_by_precision(study):
    plain = tfs.trial_effect_maps(study, "memory", BASELINE, first="recalled", second="missed")
    weighed = tfs.trial_effect_maps(study, "memory", BASELINE, first="recalled", second="missed", precision=True)
    effects, squares = [], []
    for power in study:
        y = tfs.normalized_trials(power, BASELINE).values[:, 0, 1, -1]
        fit = smf.ols("y ~ C(memory)", power.trials.assign(y=y)).fit()
        effects.append(fit.params.iloc[1])
        squares.append(fit.bse.iloc[1] ** 2)
    effects, squares = np.array(effects), np.array(squares)
    between = max(0.0, np.mean(effects**2 - squares))
    weights = 1 / (squares + between)
    assert plain.values[:, 0, 0, 1, -1] == pytest.approx(effects)
    assert weighed.values[:, 0, 0, 1, -1] == pytest.approx(effects * weights / weights.mean())
    assert weighed.values[:, 0, 0, 1, -1].mean() == pytest.approx(np.average(effects, weights=weights))
    assert weighed.history[-1].endswith("subjects were weighted by precision, 1 / (s^2/n + tau^2).")
    # Flipping a subject's effect changes no weight: the relabelled test is that of flipped effects.
    flipped = effects * np.where(np.arange(7) % 2, 1, -1)
    assert max(0.0, np.mean(flipped**2 - squares)) == pytest.approx(between)


def test_the_effects_are_tested_over_subjects(study):
    maps = tfs.trial_effect_maps(study, "speed", BASELINE)
    contrast = tfs.against_zero(maps, "effect")
    assert contrast.values == pytest.approx(maps.values[:, 0]) and contrast.estimate_unit == "dB per unit of speed"
    result = tfs.permutation_test(contrast, tfs.MaxStatistic())
    assert result.statistic[0, 1, 5] == pytest.approx(stats.ttest_1samp(maps.values[:, 0, 0, 1, 5], 0).statistic)
    assert result.exact and result.null.size == 64
    assert "slope on speed" in result.methods()


def test_effects_of_ratios_are_held_against_zero_not_one(study):
    baseline = tfs.Baseline((-0.4, -0.2), unit="ratio", order="trial_first")
    maps = tfs.trial_effect_maps(study, "memory", baseline, first="recalled", second="missed")
    assert tfs.against_zero(maps, "effect").values == pytest.approx(maps.values[:, 0])


def test_a_missing_value_stays_at_its_point(study):
    power = study[2]
    values = np.array(power.values)
    values[3, 0, 1, 5] = np.nan
    gaps = tfs.TrialPower(
        values, frequencies=power.frequencies, times=power.times, channels=power.channels, trials=power.trials,
        subject=power.subject,
    )  # fmt: skip
    one = tfs.trial_effect_maps(study, "speed", BASELINE, nuisance=["number"])
    other = tfs.trial_effect_maps([*study[:2], gaps, *study[3:]], "speed", BASELINE, nuisance=["number"])
    away = np.ones(one.values.shape, bool)
    away[2, 0, 0, 1, 5] = False
    assert np.isnan(other.values[2, 0, 0, 1, 5]) and np.isfinite(other.values[away]).all()
    assert other.values[away] == pytest.approx(one.values[away])
    # By precision the others keep their weights among themselves at that point.
    weighed = tfs.trial_effect_maps([*study[:2], gaps, *study[3:]], "speed", BASELINE, precision=True)
    without = tfs.trial_effect_maps([*study[:2], *study[3:]], "speed", BASELINE, precision=True)
    kept = np.delete(weighed.values, 2, axis=0)
    assert kept[:, 0, 0, 1, 5] == pytest.approx(without.values[:, 0, 0, 1, 5])


def test_trials_without_a_number_are_left_out(study):
    power = study[3]
    speed = power.trials["speed"].astype(object).copy()
    speed[4] = None
    speed[6] = "n/a"
    maps = tfs.trial_effect_maps([power_of("S3", len(speed), 3, speed=list(speed))], "speed", BASELINE)
    assert maps.trial_counts["effect"].tolist() == [len(speed) - 2]
    rows = [row for row in range(len(speed)) if row not in (4, 6)]
    y = tfs.normalized_trials(power, BASELINE).values[rows, 0, 0, 6]
    assert maps.values[0, 0, 0, 0, 6] == pytest.approx(stats.linregress(power.trials["speed"].iloc[rows], y).slope)
