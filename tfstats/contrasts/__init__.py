"""Designs: what is compared, by which statistic, and which relabellings the null hypothesis allows."""

from tfstats.contrasts.contrast import Contrast, Relabelling
from tfstats.contrasts.registry import DESIGNS, DesignEntry
from tfstats.contrasts.single_subject import trialwise, trialwise_change
from tfstats.contrasts.within_subject import against_zero, interaction, paired, trend, weighted

__all__ = [
    "Contrast",
    "DESIGNS",
    "DesignEntry",
    "Relabelling",
    "against_zero",
    "interaction",
    "paired",
    "trend",
    "trialwise",
    "trialwise_change",
    "weighted",
]
