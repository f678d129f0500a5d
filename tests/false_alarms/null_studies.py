"""Studies without any effect, one function a design: smooth maps with 1/f noise, and the contrast that is made of them.

The maps are Gaussian fields (units, conditions, 1 channel, 12 frequencies, 30 times), smooth along frequency, with a spectrum
that falls as 1/f along time, unit variance at every point and a level of each unit that all of its points share.
Per-trial power of one subject is the squared modulus of two such fields on a 1/f background.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pandas as pd
from scipy import special

import tfstats as tfs
from tfstats.contrasts import restricted
from tfstats.simulated_power import StudyDesign, simulate_study

FREQUENCIES = np.geomspace(4.0, 40.0, 12).round(2)
TIMES = (np.arange(30) * 0.04).round(2)
BEFORE = 10  # samples ahead of 0 s in trials
SUBJECT_LEVEL = 0.5


def _rows_of_unit_length(matrix):
    return matrix / np.linalg.norm(matrix, axis=1, keepdims=True)


def _over_frequencies(size=FREQUENCIES.size, width=1.2):
    places = np.arange(size)
    return _rows_of_unit_length(np.exp(-0.5 * ((places[:, None] - places) / width) ** 2))


def _over_times(size):
    """Rows that turn white noise on a circle into noise whose power falls as 1/f up to 5 cycles a map, and faster above."""
    around = 3 * size
    cycles = np.fft.rfftfreq(around) * around
    amplitude = np.where(cycles >= 1, 1 / np.sqrt(np.maximum(cycles, 1)), 0) * np.exp(-0.5 * (cycles / (size / 2)) ** 2)
    kernel = np.fft.irfft(amplitude, around)
    return _rows_of_unit_length(np.array([np.roll(kernel, shift) for shift in range(size)]))


FREQUENCY_MIX = _over_frequencies()
TIME_MIX = _over_times(TIMES.size)
TRIAL_TIME_MIX = _over_times(TIMES.size + BEFORE)


def fields(rng, *leading, times=TIME_MIX):
    """(*leading, frequencies, times) of unit variance."""
    white = rng.standard_normal((*leading, FREQUENCIES.size, times.shape[1]), dtype=np.float32)
    return np.matmul(FREQUENCY_MIX, white @ times.T)


def skewed(values):
    """The same field with exponential margins of mean 0 and variance 1."""
    return -special.log_ndtr(-values) - 1.0


def values_of(rng, units, conditions, data):
    """(units, conditions, frequencies, times); "unequal": the SD of the last condition is twice that of the others."""
    values = fields(rng, units, conditions)
    if data == "skewed":
        values = skewed(values)
    if data == "unequal":
        values[:, -1] *= 2.0
    return values + SUBJECT_LEVEL * rng.standard_normal((units, 1, 1, 1))


def maps_of(values, **columns):
    units, conditions = values.shape[:2]
    names = [f"S{number:02d}" for number in range(units)]
    return tfs.ConditionMaps(
        values[:, :, None], subjects=names, conditions=list("abcdefgh"[:conditions]), channels=["Fz"],
        frequencies=FREQUENCIES, times=TIMES, unit="decibel", baseline=tfs.Baseline((-0.5, -0.2)),
        participants=pd.DataFrame({"participant_id": names, **columns}),
    )  # fmt: skip


def paired(rng, n, data):
    return tfs.paired(maps_of(values_of(rng, n, 2, data)), "a", "b")


def against_zero(rng, n, data):
    return tfs.against_zero(maps_of(values_of(rng, n, 1, data)), "a")


def weighted(rng, n, data):
    return tfs.weighted(maps_of(values_of(rng, n, 3, data)), {"a": 1, "b": -0.5, "c": -0.5})


def trend(rng, n, data):
    return tfs.trend(maps_of(values_of(rng, n, 3, data)), {"a": 2, "b": 4, "c": 6})


def interaction(rng, n, data):
    return tfs.interaction(maps_of(values_of(rng, n, 4, data)), ("a", "b"), ("c", "d"))


def repeated_measures(scheme):
    def make(rng, n, data):
        return tfs.repeated_measures(maps_of(values_of(rng, n, 3, data)), scheme=scheme)

    return make


def three_factors(rng, n, data):
    values = values_of(rng, n, 8, data)
    maps = maps_of(values)
    cells = [f"{a}/{b}/{c}" for a in "12" for b in "12" for c in "12"]
    maps = tfs.ConditionMaps(
        maps.values, subjects=maps.subjects, conditions=cells, channels=maps.channels, frequencies=maps.frequencies,
        times=maps.times, unit=maps.unit,
    )  # fmt: skip
    levels = ["1", "2"]
    return tfs.repeated_measures(maps, factors={"a": levels, "b": levels, "c": levels}, effect="a:b:c")


def groups_of(n):
    """Two groups of equal size, people in no particular order."""
    return (["x", "y"] * n)[:n]


def group_values(rng, n, data, groups, spread=2.0):
    """One value a subject; "unequal": the SD of group x is `spread` times that of the others."""
    values = values_of(rng, n, 1, "skewed" if data == "skewed" else "gaussian")
    if data == "unequal":
        values[np.array(groups) == "x"] *= spread
    return values


def between_groups(**settings):
    def make(rng, n, data):
        groups = groups_of(n)
        age = rng.normal(size=n) + (np.array(groups) == "x")
        site = ["s", "s", "t", "t"] * n
        values = group_values(rng, n, data, groups)
        if "nuisance" in settings:
            values = values + 0.5 * age[:, None, None, None]
        maps = maps_of(values, group=groups, age=age, site=site[:n])
        return tfs.between_groups(maps, "group", "x", "y", **settings)

    return make


def unequal_groups(equal_variance):
    """The weak point: 8 against 24 people, SD 3 to 1."""

    def make(rng, n, data):
        groups = ["x"] * 8 + ["y"] * 24
        maps = maps_of(group_values(rng, n, "unequal", groups, 3.0), group=groups)
        return tfs.between_groups(maps, "group", "x", "y", equal_variance=equal_variance)

    return make


def group_by_condition(rng, n, data):
    groups = groups_of(n)
    values = values_of(rng, n, 2, "skewed" if data == "skewed" else "gaussian")
    if data == "unequal":
        values[np.array(groups) == "x"] *= 2.0
    return tfs.between_groups(maps_of(values, group=groups), "group", "x", "y", combine={"a": 1, "b": -1})


def several_groups(blocks=None):
    def make(rng, n, data):
        groups = (["x", "y", "z"] * n)[:n]
        values = group_values(rng, n, data, groups)
        site = ((["s"] * 3 + ["t"] * 3) * n)[:n]
        return tfs.several_groups(maps_of(values, group=groups, site=site), "group", blocks=blocks)

    return make


def slope(**settings):
    def make(rng, n, data):
        score, age = rng.normal(size=n), rng.normal(size=n)
        if "nuisance" in settings:
            score = score + age
        # "unequal": every second person's SD is twice that of the others, whatever their score.
        values = group_values(rng, n, data, groups_of(n))
        if "nuisance" in settings:
            values = values + 0.5 * age[:, None, None, None]
        return tfs.slope(
            maps_of(values, score=score, age=age, site=(["s", "s", "t", "t"] * n)[:n]), "score", **settings
        )

    return make


def spread_grows_with_score(rng, n, data):
    """A weak point: no slope of the mean, but the spread is not the same for all values of the covariate."""
    score = rng.normal(size=n)
    values = values_of(rng, n, 1, "gaussian") * np.exp(0.5 * score)[:, None, None, None]
    return tfs.slope(maps_of(values, score=score), "score")


def autoregressive(rng, size, coefficient, columns=1):
    """(size, columns), stationary, unit variance."""
    out = rng.normal(size=(size, columns))
    for row in range(1, size):
        out[row] = coefficient * out[row - 1] + np.sqrt(1 - coefficient**2) * out[row]
    return out


def trial_power(rng, n, data):
    """TrialPower of one subject: "autocorrelated" has overall power and labels that drift over trials."""
    drift = 0.6 if data == "autocorrelated" else 0.0
    parts = fields(rng, 2, n, times=TRIAL_TIME_MIX)
    level = autoregressive(rng, n, drift)[:, 0]
    power = 0.5 * (parts**2).sum(axis=0) * 10 ** (0.3 * level)[:, None, None] / FREQUENCIES[:, None]
    tendency = autoregressive(rng, n, drift)[:, 0]
    kind = np.where(tendency > np.median(tendency), "x", "y")
    return tfs.TrialPower(
        power[:, None] + 1e-6, frequencies=FREQUENCIES, times=(np.arange(-BEFORE, TIMES.size) * 0.04).round(2),
        channels=["Fz"], subject="S1",
        trials=pd.DataFrame(
            {"kind": kind, "speed": tendency, "number": np.arange(n), "run": np.repeat(["1", "2"], (n + 1) // 2)[:n]}
        ),
    )  # fmt: skip


def relative(power):
    # The whole trial's level stays in: the reference is one for all trials.
    baseline = tfs.Baseline((-0.4, -0.08), order="trial_by_reference")
    return tfs.normalized_trials(power, baseline).select(times=(0.0, 1.2))


def trialwise(**settings):
    def make(rng, n, data):
        return tfs.trialwise(relative(trial_power(rng, n, data)), "kind", "x", "y", **settings)

    return make


def trialwise_slope(**settings):
    def make(rng, n, data):
        return tfs.trialwise_slope(relative(trial_power(rng, n, data)), "speed", **settings)

    return make


def trialwise_change(rng, n, data):
    power = trial_power(rng, n, data)
    return restricted(tfs.trialwise_change(power, (-0.4, -0.24)), times=(0.1, 1.0))


def trial_effects(precision):
    def make(rng, n, data):
        powers = []
        for subject in range(n):
            power = trial_power(rng, 12 + subject % 8, data)
            powers.append(
                tfs.TrialPower(
                    power.values, frequencies=power.frequencies, times=power.times, channels=power.channels,
                    trials=power.trials, subject=f"S{subject:02d}",
                )
            )  # fmt: skip
        baseline = tfs.Baseline((-0.4, -0.08), order="trial_by_reference")
        maps = tfs.trial_effect_maps(powers, "kind", baseline, first="x", second="y", precision=precision)
        return tfs.against_zero(maps.select(times=(0.0, 1.2)), "effect")

    return make


def from_trials(rng, n, data):
    """The whole way from simulated single trials; "skewed": overall power varies over trials with SD 6 dB."""
    study = StudyDesign(
        subjects=tuple(f"S{number:02d}" for number in range(n)), channels=("Fz",),
        frequencies=tuple(FREQUENCIES), times=tuple((np.arange(-BEFORE, TIMES.size) * 0.04).round(2)),
        trial_counts={"recalled": (8, 12), "missed": (8, 12)}, exponent_spread=0.2, level_spread=3.0,
        trial_spread=6.0 if data == "skewed" else 1.0, seed=int(rng.integers(2**31)),
    )  # fmt: skip
    baseline = tfs.Baseline((-0.4, -0.08), unit="percent_change")
    maps = tfs.condition_maps(simulate_study(study), "memory", baseline)
    return tfs.paired(maps.select(times=(0.0, 1.2)), "recalled", "missed")


def one_point(values, **columns):
    maps = maps_of(values, **columns)
    return maps.select(frequencies=(FREQUENCIES[5], FREQUENCIES[5]), times=(0.4, 0.4))


def skewed_point(rng, n, data):
    """The weak point: values of one sample with exponential margins."""
    return tfs.against_zero(one_point(skewed(fields(rng, n, 1))), "a")


def unequal_conditions(scheme):
    """The weak point of shuffled labels: equal means, SD 1, 1 and 3."""

    def make(rng, n, data):
        values = fields(rng, n, 3)
        values[:, 2] *= 3.0
        return tfs.repeated_measures(one_point(values), scheme=scheme)

    return make


def drifting_point(labels, coefficient):
    """The weak point of shuffled trials: power and labels with the same autocorrelation over trials, at one point."""

    def make(rng, n, data):
        power = autoregressive(rng, n, coefficient)[:, 0]
        tendency = autoregressive(rng, n, coefficient)[:, 0]
        trials = tfs.TrialPower(
            10 ** (power / 10)[:, None, None, None] * np.ones((1, 1, 1, 2)), frequencies=[6.0], times=[-0.1, 0.0],
            channels=["Fz"], subject="S1", trials=pd.DataFrame({"kind": np.where(tendency > np.median(tendency), "x", "y")}),
        )  # fmt: skip
        ready = tfs.normalized_trials(trials, tfs.Baseline((-0.1, -0.1), order="trial_by_reference"))
        return tfs.trialwise(ready.select(times=(0.0, 0.0)), "kind", "x", "y", labels=labels)

    return make


Make = Callable[[np.random.Generator, int, str], object]
DESIGNS: dict[str, Make] = {
    "paired": paired,
    "against_zero": against_zero,
    "weighted": weighted,
    "trend": trend,
    "interaction": interaction,
    "paired, from trials": from_trials,
    "repeated_measures, signs": repeated_measures("signs"),
    "repeated_measures, a:b:c": three_factors,
    "repeated_measures, labels": repeated_measures("labels"),
    "between_groups, Welch": between_groups(),
    "between_groups, pooled": between_groups(equal_variance=True),
    "between_groups, blocks, Welch": between_groups(blocks="site"),
    "between_groups, nuisance, Welch": between_groups(nuisance=["age"]),
    "between_groups, nuisance, pooled": between_groups(nuisance=["age"], equal_variance=True),
    "between_groups, group x condition": group_by_condition,
    "several_groups": several_groups(),
    "several_groups, blocks": several_groups("site"),
    "slope": slope(),
    "slope, blocks": slope(blocks="site"),
    "slope, nuisance": slope(nuisance=["age"]),
    "slope, ranks": slope(rank=True),
    "trialwise, assigned": trialwise(labels="assigned"),
    "trialwise, behaviour": trialwise(),
    "trialwise, behaviour, runs": trialwise(blocks="run"),
    "trialwise, assigned, runs": trialwise(labels="assigned", blocks="run"),
    "trialwise_slope, behaviour": trialwise_slope(),
    "trialwise_slope, assigned": trialwise_slope(labels="assigned", nuisance=["number"]),
    "trialwise_change": trialwise_change,
    "trial_effect_maps": trial_effects(False),
    "trial_effect_maps, precision": trial_effects(True),
}
