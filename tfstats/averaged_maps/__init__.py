"""One map a subject and condition: the container, means over its axes, averaging over trials, power laws of averages."""

from tfstats.averaged_maps.broadband import broadband_adjusted
from tfstats.averaged_maps.labelled import as_labelled, from_labelled
from tfstats.averaged_maps.long_tables import long_table, write_table
from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.averaged_maps.open_map_files import read_maps, write_maps
from tfstats.averaged_maps.power_law_rows import PowerLawMaps, power_law_maps
from tfstats.averaged_maps.relative_to_baseline import relative_maps
from tfstats.averaged_maps.trial_averaging import condition_maps

__all__ = [
    "ConditionMaps",
    "PowerLawMaps",
    "as_labelled",
    "broadband_adjusted",
    "condition_maps",
    "from_labelled",
    "long_table",
    "power_law_maps",
    "read_maps",
    "relative_maps",
    "write_maps",
    "write_table",
]
