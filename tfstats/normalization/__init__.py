"""Relative units: the choice of a baseline, trials relative to it, what may be tested against chance; power laws (1/f)."""

from tfstats.normalization.baseline_choice import Baseline
from tfstats.normalization.chance import (
    averaging_for_chance,
    chance_problem,
    decibel_bias_of_mean,
    decibel_bias_of_single_trials,
)
from tfstats.normalization.power_law import PowerLawFit, fit_power_law
from tfstats.normalization.relative_trials import RelativeTrials, normalized_trials

__all__ = [
    "Baseline",
    "PowerLawFit",
    "RelativeTrials",
    "averaging_for_chance",
    "chance_problem",
    "decibel_bias_of_mean",
    "decibel_bias_of_single_trials",
    "fit_power_law",
    "normalized_trials",
]
