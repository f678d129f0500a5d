"""The blocks of a subject's power, as it lies in memory or in its file."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from tfstats.normalization.window_statistics import TrialWindows

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["Place", "read_windows", "spans_all_times", "whole_blocks"]

Place = tuple[slice, slice, slice, slice]


def whole_blocks(power: TrialPower) -> Iterator[tuple[Place, NDArray[Any]]]:
    """Where each block stands (trials, channels, frequencies, times), and its values."""
    shape = power.values.shape
    if isinstance(power.values, np.ndarray) and not isinstance(power.values, np.memmap):
        yield tuple(slice(0, size) for size in shape), power.values  # type: ignore[misc]
        return
    for place, block in power.blocks():
        yield tuple(slice(*part.indices(size)[:2]) for part, size in zip(place, shape)), block  # type: ignore[misc]


def spans_all_times(place: Place, power: TrialPower) -> bool:
    """Whether a block holds its trials' baseline windows too."""
    return bool(place[3].start == 0 and place[3].stop == power.values.shape[3])


def read_windows(power: TrialPower, window: slice, windows: TrialWindows) -> None:
    """Fill the statistics of every trial's baseline window."""
    for place, block in whole_blocks(power):
        if not spans_all_times(place, power):
            break
        windows.add(block[..., window], place[:3])
    else:
        return
    # Times are what the file stores slowest, so that the window lies in one piece.
    shape = power.values.shape
    windows.add(np.asarray(power.values[:, :, :, window]), (slice(0, shape[0]), slice(0, shape[1]), slice(0, shape[2])))
