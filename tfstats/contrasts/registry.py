"""Every design by name: what a plan may ask for and what the shared suite tests."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from tfstats.contrasts.between_subjects import between_groups, several_groups, slope
from tfstats.contrasts.contrast import Contrast
from tfstats.contrasts.several_conditions import repeated_measures
from tfstats.contrasts.single_subject import trialwise, trialwise_change, trialwise_slope
from tfstats.contrasts.within_subject import against_zero, interaction, paired, trend, weighted

__all__ = ["DESIGNS", "DesignEntry"]


@dataclass(frozen=True)
class DesignEntry:
    """One design: its function, and what its first argument is."""

    function: Callable[..., Contrast]
    takes: str
    """"maps": ConditionMaps of several subjects; "trials": RelativeTrials of one; "power": TrialPower of one."""


DESIGNS = {
    "paired": DesignEntry(paired, "maps"),
    "against_zero": DesignEntry(against_zero, "maps"),
    "weighted": DesignEntry(weighted, "maps"),
    "trend": DesignEntry(trend, "maps"),
    "interaction": DesignEntry(interaction, "maps"),
    "repeated_measures": DesignEntry(repeated_measures, "maps"),
    "between_groups": DesignEntry(between_groups, "maps"),
    "several_groups": DesignEntry(several_groups, "maps"),
    "slope": DesignEntry(slope, "maps"),
    "trialwise": DesignEntry(trialwise, "trials"),
    "trialwise_slope": DesignEntry(trialwise_slope, "trials"),
    "trialwise_change": DesignEntry(trialwise_change, "power"),
}
