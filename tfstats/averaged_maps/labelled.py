"""Power and maps as arrays with named axes, for those who work with xarray."""

from __future__ import annotations

from typing import Any

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.averaged_maps.open_map_files import maps_as_labelled, maps_from_labelled
from tfstats.foundations.errors import refusal
from tfstats.power_files import TrialPower
from tfstats.power_files.labelled_arrays import is_data_array, power_as_labelled, power_from_labelled

__all__ = ["as_labelled", "from_labelled"]


def as_labelled(data: TrialPower | ConditionMaps) -> Any:
    """One subject's power, or condition maps, as an `xarray.DataArray` with named axes, labels and units.

    Parameters
    ----------
    data : TrialPower or ConditionMaps

    Returns
    -------
    xarray.DataArray
        Dimensions trial, channel, frequency, time, with each trial column as a coordinate along trial; or subject,
        condition, channel, frequency, time.  Frequencies in Hz, times in s.  `from_labelled` gives the same back.

    Raises
    ------
    InputError
        No xarray (it comes with the extra `labelled`), another kind of object, a trial column called like an axis.

    Notes
    -----
    Power that lies in a file is read into memory; maps are not copied.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> maps = tfs.ConditionMaps(np.zeros((2, 1, 1, 3, 2)), subjects=["S1", "S2"], conditions=["recalled"],
    ...     channels=["Fz"], frequencies=[4, 6, 8], times=[0.0, 0.1], unit="decibel")
    >>> tfs.as_labelled(maps).dims
    ('subject', 'condition', 'channel', 'frequency', 'time')
    """
    if isinstance(data, TrialPower):
        return power_as_labelled(data)
    if isinstance(data, ConditionMaps):
        return maps_as_labelled(data)
    raise refusal("as_labelled", "TrialPower or ConditionMaps", type(data).__name__, "give one of them")


def from_labelled(array: Any, *, subject: object = None) -> TrialPower | ConditionMaps:
    """Power or maps from an `xarray.DataArray`: maps where it has a dimension "subject", power otherwise.

    Parameters
    ----------
    array : xarray.DataArray
        Power: dimensions time and any of trial, channel, frequency in any order, linear power, each coordinate along
        trial a trial column, `attrs["subject"]`.  Maps: subject, condition, channel, frequency, time, and
        `attrs["unit"]`.  Each dimension but trial needs its labels: Hz, s, names.
    subject : str, optional
        Of power whose attributes do not say.

    Raises
    ------
    InputError
        Another object, dimensions or labels that are not there, and all that TrialPower or ConditionMaps refuse.

    Examples
    --------
    >>> import numpy as np, tfstats as tfs, xarray
    >>> array = xarray.DataArray(np.ones((3, 2, 4)), dims=("time", "channel", "frequency"),
    ...     coords={"time": [0.0, 0.1, 0.2], "channel": ["Fz", "Cz"], "frequency": [4, 6, 8, 10]})
    >>> tfs.from_labelled(array, subject="S1")
    <TrialPower S1: 1 trials x 2 channels x 4 frequencies x 3 times>
    """
    if not is_data_array(array):
        raise refusal("from_labelled", "an xarray.DataArray", type(array).__name__, "take one variable of a Dataset")
    if "subject" in array.dims:
        return maps_from_labelled(array)
    return power_from_labelled(array, subject)
