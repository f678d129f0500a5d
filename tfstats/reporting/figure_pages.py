"""The figures of one contrast as files for a paper or a talk: several panels each, 85 or 180 mm wide or between."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from tfstats.reporting import plane_maps
from tfstats.reporting.plane_axes import COLUMN_WIDTH, PAGE_WIDTH, add_axes, blank_figure, draw_colour_bar
from tfstats.reporting.report_pictures import (
    MAP_HEIGHT,
    individuals_into,
    null_figure,
    shown_channels,
    shown_clusters,
)
from tfstats.results import ContrastResult

__all__ = ["file_figures"]

Window = tuple[float, float]

PANEL_HEIGHT = 36.0
ROW_STEP = 50.0  # a panel, its title, and the numbers of its time axis


def file_figures(result: ContrastResult, window: Window | None) -> Iterator[tuple[str, Figure]]:
    """The figures of one contrast made for files alone, with the ends of their names; wide ones come from the report."""
    channels = shown_channels(result)
    yield "conditions", _conditions_page(result, channels, window)
    yield "maps", _maps_page(result, channels, window)
    yield "null", null_figure(result)
    if shown_clusters(result):
        yield "individuals", _individuals_page(result)


def _conditions_page(result: ContrastResult, channels: list[int], window: Window | None) -> Figure:
    conditions = list(result.contrast.condition_means)
    columns = min(3, len(conditions))
    per_channel = int(np.ceil(len(conditions) / columns))
    rows = per_channel * len(channels)
    width, gap = 45.0, 4.0
    whole = 11 + columns * (width + gap) + 17
    figure = blank_figure(whole, _page_height(rows))
    scale = plane_maps.condition_scale(result, channels)
    for block, channel in enumerate(channels):
        for place, condition in enumerate(conditions):
            row, column = divmod(place, columns)
            row += block * per_channel
            ax = add_axes(figure, 11 + column * (width + gap), _row_bottom(row, rows), width, PANEL_HEIGHT)
            plane_maps.draw_condition_map(ax, result, condition, channel, scale=scale, baseline_window=window)
            _outer_labels_only(ax, first_column=column == 0, last_row=row == rows - 1)
    draw_colour_bar(add_axes(figure, whole - 17, _row_bottom(0, rows), 2.6, PANEL_HEIGHT), scale)
    return figure


def _maps_page(result: ContrastResult, channels: list[int], window: Window | None) -> Figure:
    rows = len(channels)
    figure = blank_figure(PAGE_WIDTH, _page_height(rows))
    draws = (
        (plane_maps.draw_difference, plane_maps.difference_scale(result, channels)),
        (plane_maps.draw_statistic, plane_maps.statistic_scale(result, channels)),
        (plane_maps.draw_effect_size, plane_maps.effect_scale(result, channels)),
    )
    for row, channel in enumerate(channels):
        bottom = _row_bottom(row, rows)
        for column, (draw, scale) in enumerate(draws):
            left = 10.5 + column * 58.0
            ax = add_axes(figure, left, bottom, 38.0, PANEL_HEIGHT)
            draw(ax, result, channel, scale=scale, baseline_window=window)
            _outer_labels_only(ax, first_column=column == 0, last_row=row == rows - 1)
            draw_colour_bar(add_axes(figure, left + 39.5, bottom, 2.2, PANEL_HEIGHT), scale)
    return figure


def _page_height(rows: int) -> float:
    return 10.0 + (rows - 1) * ROW_STEP + PANEL_HEIGHT + 9.5


def _row_bottom(row: int, rows: int) -> float:
    return 10.0 + (rows - 1 - row) * ROW_STEP


def _outer_labels_only(ax: Axes, *, first_column: bool, last_row: bool) -> None:
    if not first_column:
        ax.set_ylabel("")
        ax.tick_params(labelleft=False)
    if not last_row:
        ax.set_xlabel("")


def _individuals_page(result: ContrastResult) -> Figure:
    clusters = shown_clusters(result)
    columns = min(2, len(clusters))
    rows = int(np.ceil(len(clusters) / columns))
    figure = blank_figure(COLUMN_WIDTH if columns == 1 else PAGE_WIDTH, rows * MAP_HEIGHT)
    for place, cluster in enumerate(clusters):
        row, column = divmod(place, columns)
        individuals_into(figure, result, cluster, column * 92.0, (rows - 1 - row) * MAP_HEIGHT)
    return figure
