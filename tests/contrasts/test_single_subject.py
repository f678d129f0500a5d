"""Trials of one subject against scipy, least squares (statsmodels) and loops written out here."""

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf
from scipy import stats

import tfstats as tfs
from tfstats.findings.effect_sizes import effect_of
from tfstats.permutation.schemes import planned_rows

TRIALS = 30
TIMES = np.arange(-4, 4) / 10


def power_of(trials=TRIALS, seed=1, **columns):
    rng = np.random.default_rng(seed)
    table = {
        "memory": ["recalled" if yes else "missed" for yes in rng.random(trials) < 0.45],
        "speed": rng.gamma(4.0, 0.2, trials),
        "number": np.arange(trials),
        "run": np.repeat(["1", "2", "3"], (trials + 2) // 3)[:trials],
    }
    return tfs.TrialPower(
        rng.exponential(size=(trials, 2, 3, TIMES.size)) + 0.05, frequencies=[4.0, 8.0, 16.0], times=TIMES,
        channels=["Fz", "Pz"], subject="S07", trials=pd.DataFrame({**table, **columns}),
    )  # fmt: skip


def relative(power, order="trial_first", **more):
    return tfs.normalized_trials(power, tfs.Baseline((-0.4, -0.2), order=order, **more)).select(times=(0.0, 0.3))


def run(contrast, permutations=60, **more):
    more.setdefault("alpha", 0.2)
    return tfs.permutation_test(contrast, more.pop("correction", tfs.MaxStatistic()), permutations=permutations, **more)


def least_squares(trials, formula, term, rows=None):
    values = np.asarray(trials.values).reshape(len(trials.trials), -1)
    rows = np.arange(len(values)) if rows is None else rows
    return [smf.ols(formula, trials.trials.iloc[rows].assign(y=y[rows])).fit() for y in values.T]


@pytest.mark.parametrize("labels", ["assigned", "behaviour"])
@pytest.mark.parametrize("equal_variance", [False, True])
def test_two_kinds_of_trials_are_a_t_test(labels, equal_variance):
    trials = relative(power_of())
    contrast = tfs.trialwise(trials, "memory", "recalled", "missed", labels=labels, equal_variance=equal_variance)
    result = run(contrast)
    first = np.array(trials.trials["memory"]) == "recalled"
    test = stats.ttest_ind(trials.values[first], trials.values[~first], equal_var=equal_variance)
    t = result.statistic if equal_variance else result.welch_t
    assert t == pytest.approx(test.statistic) and result.df == pytest.approx(test.df if not equal_variance else 28)
    assert result.estimate == pytest.approx(trials.values[first].mean(axis=0) - trials.values[~first].mean(axis=0))
    assert contrast.relabelling.kind == {"assigned": "shuffle", "behaviour": "circular_shift"}[labels]
    assert not result.exact or (labels == "assigned" and result.enumerated)


MISSED = "C(memory, Treatment('missed'))"


@pytest.mark.parametrize("labels", ["assigned", "behaviour"])
@pytest.mark.parametrize(
    ("settings", "extra"),
    [
        ({"blocks": "run"}, "C(run)"),
        ({"nuisance": ["number"]}, "number"),
        ({"blocks": "run", "nuisance": ["number", "speed"]}, "C(run) + number + speed"),
    ],
    ids=["runs", "number", "all"],
)
def test_blocks_and_nuisance_are_least_squares(settings, extra, labels):
    trials = relative(power_of(seed=2))
    contrast = tfs.trialwise(trials, "memory", "recalled", "missed", equal_variance=True, labels=labels, **settings)
    result = run(contrast)
    fits = least_squares(trials, f"y ~ {MISSED} + {extra}", None)
    term = f"{MISSED}[T.recalled]"
    assert result.statistic.ravel() == pytest.approx([fit.tvalues[term] for fit in fits])
    assert result.estimate.ravel() == pytest.approx([fit.params[term] for fit in fits])
    assert result.df == fits[0].df_resid
    effect = effect_of(contrast, contrast.values)
    assert effect.low.ravel() == pytest.approx([fit.conf_int().loc[term, 0] for fit in fits])
    unequal = run(tfs.trialwise(trials, "memory", "recalled", "missed", labels=labels, **settings))
    assert unequal.statistic_name == "Welch score (adjusted)" and unequal.estimate == pytest.approx(result.estimate)


@pytest.mark.parametrize("labels", ["assigned", "behaviour"])
def test_slopes_over_trials(labels):
    power = power_of(seed=3)
    power.trials.loc[[2, 11], "speed"] = np.nan
    trials = relative(power)
    kept = [row for row in range(TRIALS) if row not in (2, 11)]
    contrast = tfs.trialwise_slope(trials, "speed", labels=labels)
    assert contrast.unit_names == tuple(str(row) for row in kept)
    result = run(contrast)
    line = stats.linregress(trials.trials["speed"].iloc[kept], trials.values[kept, 1, 2, 3])
    assert result.estimate[1, 2, 3] == pytest.approx(line.slope)
    assert result.effect_size[1, 2, 3] == pytest.approx(line.rvalue)
    assert result.statistic[1, 2, 3] == pytest.approx(line.slope / line.stderr) and result.df == 26
    adjusted = run(tfs.trialwise_slope(trials, "speed", labels=labels, blocks="run", nuisance=["number"]))
    fits = least_squares(trials, "y ~ speed + number + C(run)", "speed", kept)
    assert adjusted.statistic.ravel() == pytest.approx([fit.tvalues["speed"] for fit in fits])
    assert adjusted.df == fits[0].df_resid == 28 - 5


def test_labels_turn_in_a_circle_within_runs():
    """Two runs of 4 and 5 trials: 20 pairs of shifts, each the labels of a run pushed along its circle."""
    memory = np.array(list("xyyxxyyyx"))
    power = power_of(9, memory=memory, run=["1"] * 4 + ["2"] * 5)
    contrast = tfs.trialwise(relative(power), "memory", "x", "y", blocks="run", equal_variance=True)
    rows = planned_rows(contrast, "two-sided", 100, 0)
    assert rows.count == 20 and rows.enumerated and not rows.exact
    found = {tuple(contrast.labels[order]) for order in rows(0, 20)}
    code = (memory == "x").astype(int)
    expected = {(*np.roll(code[:4], first), *np.roll(code[4:], second)) for first in range(4) for second in range(5)}
    assert found == expected


def test_p_of_shifts_is_a_loop_over_shifts():
    trials = relative(power_of(seed=5))
    result = run(tfs.trialwise(trials, "memory", "recalled", "missed", equal_variance=True), 1000)
    first = np.array(trials.trials["memory"]) == "recalled"
    rows = np.array(
        [
            np.abs(stats.ttest_ind(trials.values[np.roll(first, k)], trials.values[~np.roll(first, k)]).statistic)
            for k in range(TRIALS)
        ]
    )
    assert result.enumerated and result.null.size == TRIALS and not result.exact
    assert result.p_values == pytest.approx(
        (rows.max(axis=(1, 2, 3))[:, None, None, None] >= rows[0] - 1e-9).mean(axis=0)
    )


def test_other_labels_and_trials_without_one_are_left_out():
    memory = ["recalled", "missed", "unsure", None, "", "n/a"] * 5
    contrast = tfs.trialwise(relative(power_of(memory=memory)), "memory", "recalled", "missed")
    assert contrast.unit_names == tuple(str(row) for row in range(30) if row % 6 < 2)
    assert contrast.trial_counts.loc["S07"].to_dict() == {"recalled": 5, "missed": 5}


def test_nuisance_is_asked_only_of_the_trials_compared():
    memory = ["recalled", "missed", "unsure"] * 10
    speed = [np.nan if row % 3 == 2 else row * 1.5 for row in range(30)]
    contrast = tfs.trialwise(
        relative(power_of(memory=memory, speed=speed)), "memory", "recalled", "missed", nuisance="speed"
    )
    assert contrast.nuisance.shape == (20, 1) and contrast.nuisance_names == ("speed",)


def test_autocorrelations_over_trials_are_told():
    power = power_of(seed=6)
    trials = relative(power)
    contrast = tfs.trialwise(trials, "memory", "recalled", "missed")

    def lag_one(x):
        return np.corrcoef(x[:-1], x[1:])[0, 1], np.sum((x - x.mean())[1:] * (x - x.mean())[:-1]) / np.sum(
            (x - x.mean()) ** 2
        )

    code = (np.array(trials.trials["memory"]) == "recalled").astype(float)
    flat = np.asarray(trials.values).reshape(TRIALS, -1)
    drift = np.median([lag_one(x)[1] for x in flat.T])
    assert contrast.history[-1] == (
        f"Lag-1 autocorrelation over trials: labels {lag_one(code)[1]:.2f}, power {drift:.2f} (median over points)."
    )
    # The usual correlation of neighbours differs from it by end effects only.
    assert lag_one(code)[0] == pytest.approx(lag_one(code)[1], abs=0.1)
    slope = tfs.trialwise_slope(trials, "speed")
    speed = trials.trials["speed"].to_numpy()
    assert f"speed {lag_one(speed)[1]:.2f}, power {drift:.2f}" in slope.history[-1]


def test_one_subject_is_said():
    result = run(tfs.trialwise(relative(power_of()), "memory", "recalled", "missed"))
    assert "The units are trials of one subject: the result speaks of this subject only." in result.cautions
    assert "Circular shifts of the label sequence hold the error rate approximately, not exactly." in result.cautions
    assert result.subjects_at_point.min() == TRIALS


def test_power_of_a_trial_may_be_missing_at_a_point():
    power = power_of(seed=7)
    values = np.array(power.values)
    values[4, 0, 1, -1] = np.nan
    gaps = tfs.TrialPower(
        values, frequencies=power.frequencies, times=power.times, channels=power.channels, trials=power.trials,
        subject="S07",
    )  # fmt: skip
    contrast = tfs.trialwise(relative(gaps), "memory", "recalled", "missed", blocks="run")
    result = run(contrast)
    assert not result.tested[0, 1, 3] and result.tested.sum() == 2 * 3 * 4 - 1
    assert result.subjects_at_point[0, 1, 3] == TRIALS - 1


def test_change_from_baseline_is_a_running_mean_of_logarithms():
    power = power_of(12, seed=8)
    contrast = tfs.trialwise_change(power, (-0.4, -0.2))
    logs = 10 * np.log10(np.asarray(power.values))
    baseline = logs[..., :3].mean(axis=-1)
    # Windows of three samples; those that hold a sample of the baseline and that at the end are incomplete.
    for place in range(TIMES.size):
        whole = place - 1 >= 3 and place + 1 < TIMES.size
        expected = logs[..., place - 1 : place + 2].mean(axis=-1) - baseline if whole else np.nan
        assert contrast.values[..., place] == pytest.approx(np.broadcast_to(expected, baseline.shape), nan_ok=True)
    result = run(contrast, 10_000)
    assert result.enumerated and result.exact and result.null.size == 2**11
    test = stats.ttest_1samp(contrast.values[:, 1, 2, 5], 0.0)
    assert result.statistic[1, 2, 5] == pytest.approx(test.statistic)
