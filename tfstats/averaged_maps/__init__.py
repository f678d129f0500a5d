"""One map a subject and condition: the container, means over its axes, and averaging over trials."""

from tfstats.averaged_maps.labelled import as_labelled, from_labelled
from tfstats.averaged_maps.long_tables import long_table, write_table
from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.averaged_maps.open_map_files import read_maps, write_maps
from tfstats.averaged_maps.trial_averaging import condition_maps

__all__ = [
    "ConditionMaps",
    "as_labelled",
    "condition_maps",
    "from_labelled",
    "long_table",
    "read_maps",
    "write_maps",
    "write_table",
]
