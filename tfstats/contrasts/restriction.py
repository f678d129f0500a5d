"""A contrast on a part of the plane."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from tfstats.contrasts.contrast import Contrast
from tfstats.foundations.axes import closed_window, label_positions
from tfstats.foundations.errors import Problems

__all__ = ["restricted"]


def restricted(
    contrast: Contrast,
    *,
    channels: Iterable[object] | None = None,
    frequencies: Sequence[float] | None = None,
    times: Sequence[float] | None = None,
    every_nth_time: int = 1,
) -> Contrast:
    """The same comparison on some channels, a band, a window, each n-th time; closed windows in Hz and s.

    Raises
    ------
    InputError
        Channels that are not there and windows without a point, all at once.
    """
    problems = Problems()
    places = list(range(len(contrast.channels)))
    band, when = slice(None), slice(None)
    if channels is not None:
        with problems.gathering():
            places = label_positions(channels, contrast.channels, "test, channels", of="channel")
    if frequencies is not None:
        with problems.gathering():
            band = closed_window(contrast.frequencies, frequencies, "test, frequencies", "Hz")
    if times is not None:
        with problems.gathering():
            when = closed_window(contrast.times, times, "test, times", "s")
    problems.raise_if_any()
    when = slice(when.start, when.stop, every_nth_time)

    def part(values: Any) -> Any:
        inside = values[..., band, when]
        return inside if places == list(range(len(contrast.channels))) else np.take(inside, places, axis=-3)

    return replace(
        contrast,
        values=np.ascontiguousarray(part(contrast.values)),
        channels=tuple(contrast.channels[place] for place in places),
        frequencies=contrast.frequencies[band],
        times=contrast.times[when],
        condition_means={name: part(mean) for name, mean in contrast.condition_means.items()},
        condition_values={name: part(values) for name, values in contrast.condition_values.items()},
    )
