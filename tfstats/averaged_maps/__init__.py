"""One map a subject and condition: the container, means over its axes, and averaging over trials."""

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.averaged_maps.trial_averaging import condition_maps

__all__ = ["ConditionMaps", "condition_maps"]
