"""Relative units: the choice of a baseline, trials relative to it, and what may be tested against chance."""

from tfstats.normalization.baseline_choice import Baseline
from tfstats.normalization.chance import (
    averaging_for_chance,
    chance_problem,
    decibel_bias_of_mean,
    decibel_bias_of_single_trials,
)
from tfstats.normalization.relative_trials import RelativeTrials, normalized_trials

__all__ = [
    "Baseline",
    "RelativeTrials",
    "averaging_for_chance",
    "chance_problem",
    "decibel_bias_of_mean",
    "decibel_bias_of_single_trials",
    "normalized_trials",
]
