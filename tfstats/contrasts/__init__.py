"""Designs: what is compared, by which statistic, and which relabellings the null hypothesis allows."""

from tfstats.contrasts.between_subjects import between_groups, several_groups, slope
from tfstats.contrasts.contrast import Contrast, Relabelling
from tfstats.contrasts.registry import DESIGNS, DesignEntry
from tfstats.contrasts.restriction import restricted
from tfstats.contrasts.several_conditions import repeated_measures
from tfstats.contrasts.single_subject import trialwise, trialwise_change, trialwise_slope
from tfstats.contrasts.trial_effects import trial_effect_maps
from tfstats.contrasts.within_subject import against_zero, interaction, paired, trend, weighted

__all__ = [
    "Contrast",
    "DESIGNS",
    "DesignEntry",
    "Relabelling",
    "against_zero",
    "between_groups",
    "interaction",
    "paired",
    "repeated_measures",
    "restricted",
    "several_groups",
    "slope",
    "trend",
    "trial_effect_maps",
    "trialwise",
    "trialwise_change",
    "trialwise_slope",
    "weighted",
]
