"""Many channels at once: a small map each, and channel x time and channel x frequency overviews."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedFormatter, FixedLocator, NullFormatter, NullLocator
from numpy.typing import NDArray

from tfstats.reporting.plane_axes import (
    PAGE_WIDTH,
    SMALL_SIZE,
    ColourScale,
    add_axes,
    blank_figure,
    cell_edges,
    draw_colour_bar,
    frequency_ticks,
    logarithmic_frequencies,
    mark_event,
    name_axes,
    shortened,
    time_ticks,
    title,
)
from tfstats.reporting.plane_maps import difference_scale, draw_mesh, draw_outline, statistic_scale
from tfstats.results import ContrastResult

__all__ = [
    "channel_grid",
    "channel_overviews",
    "draw_channels_by_frequency",
    "draw_channels_by_time",
    "grid_channels",
    "signed_extremes",
]

Floats = NDArray[np.float64]
Window = tuple[float, float]
MOST_SMALL_MAPS = 16
MOST_NAMED_CHANNELS = 40


def signed_extremes(values: NDArray[np.floating], mask: NDArray[np.bool_], axis: int) -> Floats:
    """The value of the largest size along an axis, with its sign; NaN where none is finite.

    Where the line of values holds points of the mask, the largest among those: so the colour inside an outline is that
    of what is outlined.
    """
    counted = np.where(mask.any(axis=axis, keepdims=True), mask, True)
    size = np.where(np.isfinite(values) & counted, np.abs(values), -1.0)
    place = np.expand_dims(size.argmax(axis=axis), axis)
    return np.asarray(np.take_along_axis(values, place, axis=axis).squeeze(axis), dtype=np.float64)


def _channel_axis(ax: Axes, channels: tuple[str, ...]) -> Floats:
    edges = np.arange(len(channels) + 1) - 0.5
    ax.set_ylim(edges[-1], edges[0])
    step = int(np.ceil(len(channels) / MOST_NAMED_CHANNELS))
    places = list(range(0, len(channels), step))
    ax.yaxis.set_major_locator(FixedLocator(places))
    ax.yaxis.set_major_formatter(FixedFormatter([shortened(channels[place], 10) for place in places]))
    ax.tick_params(axis="y", length=0)
    if len(places) > 20:
        ax.tick_params(axis="y", labelsize=SMALL_SIZE - 1.4)
    return np.asarray(edges, dtype=np.float64)


def draw_channels_by_time(
    ax: Axes, result: ContrastResult, *, scale: ColourScale | None = None, baseline_window: Window | None = None
) -> Axes:
    """At each channel and time, the statistic of the largest size over all frequencies; outlined where any is in the mask."""
    across, up = cell_edges(result.times), _channel_axis(ax, result.channels)
    time_ticks(ax, across)
    draw_mesh(ax, signed_extremes(result.statistic, result.mask, axis=1), across, up, scale or statistic_scale(result))
    mark_event(ax, baseline_window, named=False)
    draw_outline(ax, np.any(result.mask, axis=1, keepdims=True)[:, 0], across, up)
    name_axes(ax, up="channel")
    title(ax, "Channels by time", "statistic of the largest size over frequencies · uncorrected")
    return ax


def draw_channels_by_frequency(ax: Axes, result: ContrastResult, *, scale: ColourScale | None = None) -> Axes:
    """At each channel and frequency, the statistic of the largest size over all times; outlined where any is in the mask."""
    across, up = cell_edges(result.frequencies, logarithmic=True), _channel_axis(ax, result.channels)
    ax.set_xscale("log", base=2)
    ax.set_xlim(across[0], across[-1])
    ticks = frequency_ticks(float(across[0]), float(across[-1]))
    ax.xaxis.set_major_locator(FixedLocator(ticks))
    ax.xaxis.set_major_formatter(FixedFormatter([f"{tick:.4g}" for tick in ticks]))
    ax.xaxis.set_minor_locator(NullLocator())
    ax.xaxis.set_minor_formatter(NullFormatter())
    draw_mesh(ax, signed_extremes(result.statistic, result.mask, axis=2), across, up, scale or statistic_scale(result))
    draw_outline(ax, np.any(result.mask, axis=2, keepdims=True)[:, :, 0], across, up)
    name_axes(ax, across="frequency (Hz)", up="channel")
    title(ax, "Channels by frequency", "statistic of the largest size over times · uncorrected")
    return ax


def channel_overviews(result: ContrastResult, baseline_window: Window | None = None) -> Figure:
    """Both overviews side by side on one scale."""
    height = float(np.clip(26.0 + 3.1 * len(result.channels), 52.0, 150.0))
    figure = blank_figure(PAGE_WIDTH, height)
    scale = statistic_scale(result)
    inner = height - 21.0
    draw_channels_by_time(add_axes(figure, 15, 10, 67, inner), result, scale=scale, baseline_window=baseline_window)
    draw_channels_by_frequency(add_axes(figure, 97, 10, 63, inner), result, scale=scale)
    draw_colour_bar(add_axes(figure, 163.5, 10, 3, inner), scale)
    return figure


def grid_channels(result: ContrastResult) -> list[int]:
    """Channels for the grid of small maps: all, or where there are many those of significant clusters first."""
    everyone = list(range(len(result.channels)))
    if len(everyone) <= MOST_SMALL_MAPS:
        return everyone
    inside = [bool(part.any()) for part in result.mask]
    size = np.nan_to_num(np.abs(result.statistic), nan=-1.0).max(axis=(1, 2))
    order = sorted(everyone, key=lambda place: (not inside[place], -size[place]))
    return sorted(order[:MOST_SMALL_MAPS])


def channel_grid(result: ContrastResult, baseline_window: Window | None = None) -> Figure:
    """A small map of the compared value for each channel, on one scale, masks outlined."""
    chosen = grid_channels(result)
    columns = min(4, len(chosen))
    rows = int(np.ceil(len(chosen) / columns))
    left, right, bottom, top, gap = 12.0, 20.0, 10.0, 8.0, 3.0
    width = (PAGE_WIDTH - left - right - gap * 3) / 4
    height = 26.0
    up_step = height + 5.5
    whole = PAGE_WIDTH if columns == 4 else left + right + columns * width + gap * (columns - 1)
    figure = blank_figure(whole, bottom + top + rows * up_step - 5.5)
    scale = difference_scale(result, chosen)
    across, up = cell_edges(result.times), cell_edges(result.frequencies, logarithmic=True)
    for place, channel in enumerate(chosen):
        row, column = divmod(place, columns)
        ax = add_axes(figure, left + column * (width + gap), bottom + (rows - 1 - row) * up_step, width, height)
        logarithmic_frequencies(ax, up)
        time_ticks(ax, across, most=3)
        draw_mesh(ax, result.estimate[channel], across, up, scale)
        mark_event(ax, baseline_window, named=False)
        draw_outline(ax, result.mask[channel], across, up)
        lowest = place + columns >= len(chosen)
        name_axes(ax, across="time from event (s)" if lowest else None, up="frequency (Hz)" if column == 0 else None)
        ax.tick_params(labelbottom=lowest, labelleft=column == 0)
        title(ax, shortened(result.channels[channel], 20))
    inner = rows * up_step - 5.5
    draw_colour_bar(add_axes(figure, whole - right + 3.5, bottom, 3, min(inner, 60.0)), scale)
    return figure
