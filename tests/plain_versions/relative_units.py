"""Relative units from the formulas, one number at a time; slow, and shares nothing with the package."""

from __future__ import annotations

import math

NOTHING = float("nan")


def known(numbers):
    return [number for number in numbers if not math.isnan(number)]


def mean(numbers):
    numbers = known(numbers)
    return sum(numbers) / len(numbers) if numbers else NOTHING


def deviation(numbers):
    numbers = known(numbers)
    if len(numbers) < 2:
        return NOTHING
    centre = sum(numbers) / len(numbers)
    return math.sqrt(sum((number - centre) ** 2 for number in numbers) / (len(numbers) - 1))


def logarithms(numbers):
    return [math.log(number) for number in numbers]


def in_unit(activity, level, spread, unit):
    if unit == "none":
        return activity
    if math.isnan(activity) or math.isnan(level):
        return NOTHING
    if unit == "decibel":
        return 10.0 * math.log10(activity / level)
    if unit == "percent_change":
        return 100.0 * (activity - level) / level
    if unit == "ratio":
        return activity / level
    return (activity - level) / spread if spread > 0 else NOTHING


def reference_trials(trial, labels, groups, conditions, reference, reference_condition):
    """Trials whose baseline serves this trial."""
    chosen = []
    for other, label in enumerate(labels):
        if groups is not None and groups[other] != groups[trial]:
            continue
        if reference == "pooled" and label in conditions:
            chosen.append(other)
        if reference == "own" and label == labels[trial]:
            chosen.append(other)
        if reference == "named" and label == reference_condition:
            chosen.append(other)
    return chosen


def reference_of(trials, series, samples, unit, order, mean_kind):
    """Level and SD of a baseline made of several trials; series[trial][time]."""
    if order == "average_first":
        curve = [mean([series[trial][sample] for trial in trials]) for sample in samples]
        spread = deviation(curve)
        if mean_kind == "geometric":
            return math.exp(mean(logarithms(known(curve)))), spread
        return mean([mean([series[trial][sample] for sample in samples]) for trial in trials]), spread
    everything = [series[trial][sample] for trial in trials for sample in samples]
    if mean_kind == "geometric":
        means = [mean(logarithms(known([series[trial][sample] for sample in samples]))) for trial in trials]
        return math.exp(mean(means)), deviation(everything)
    return mean([mean([series[trial][sample] for sample in samples]) for trial in trials]), deviation(everything)


def condition_series(
    series, labels, groups, condition, conditions, samples, unit, reference, order, mean_kind, reference_condition=None
):
    """The relative value of one condition at each time; series[trial][time] of one channel and frequency."""
    mine = [trial for trial, label in enumerate(labels) if label == condition]
    times = range(len(series[0]))
    if unit == "none":
        return [mean([series[trial][time] for trial in mine]) for time in times]
    held_against = {}
    for trial in mine:
        if order == "trial_first":
            held_against[trial] = reference_of([trial], series, samples, unit, order, mean_kind)
        else:
            trials = reference_trials(trial, labels, groups, conditions, reference, reference_condition)
            held_against[trial] = reference_of(trials, series, samples, unit, order, mean_kind)
    values = []
    for time in times:
        if order != "average_first":
            values.append(mean([in_unit(series[trial][time], *held_against[trial], unit) for trial in mine]))
        elif unit == "z_score":
            values.append(in_unit(mean([series[trial][time] for trial in mine]), *held_against[mine[0]], unit))
        else:
            ratios = mean([in_unit(series[trial][time], *held_against[trial], "ratio") for trial in mine])
            values.append(in_unit(ratios, 1.0, NOTHING, unit))
    return values
