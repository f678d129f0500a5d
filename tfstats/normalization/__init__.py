"""Relative units: the choice of a baseline, trials relative to it, and what may be tested against chance."""

from tfstats.normalization.baseline_choice import Baseline
from tfstats.normalization.chance import (
    chance_problem,
    decibel_bias_of_mean,
    decibel_bias_of_single_trials,
)

__all__ = [
    "Baseline",
    "chance_problem",
    "decibel_bias_of_mean",
    "decibel_bias_of_single_trials",
]
