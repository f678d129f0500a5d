"""Which pictures of one contrast the report shows, and what their captions say."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import partial

import numpy as np
from matplotlib.figure import Figure

from tfstats.contrasts.contrast import ONE_SAMPLE_T
from tfstats.reporting import plane_maps
from tfstats.reporting.channel_overview import channel_grid, channel_overviews, grid_channels
from tfstats.reporting.individual_values import (
    condition_axis_words,
    condition_columns,
    draw_estimate,
    draw_individuals,
)
from tfstats.reporting.null_histogram import draw_null_histogram, null_quantity, p_of_observed
from tfstats.reporting.plane_axes import COLUMN_WIDTH, ColourScale, add_axes, blank_figure, draw_colour_bar, title
from tfstats.results import ContrastResult
from tfstats.results.apa_numbers import p_text

__all__ = [
    "FEWEST_FOR_OVERVIEW",
    "MAP_HEIGHT",
    "Picture",
    "PictureGroup",
    "individuals_into",
    "null_figure",
    "report_pictures",
    "shown_channels",
    "shown_clusters",
]

Window = tuple[float, float]

MAP_HEIGHT = 62.0
PANEL_HEIGHT = 57.0
PANEL_WIDTH = 75.0  # of the report's panels: narrower than a column, so that three beside each other stay readable
MOST_SHOWN_CHANNELS = 2
MOST_SHOWN_CLUSTERS = 4
FEWEST_FOR_OVERVIEW = 4


@dataclass(frozen=True)
class Picture:
    """One picture of the report: how to draw it, and its words."""

    name: str
    kind: str
    caption: str
    alt: str
    draw: Callable[[Window | None], Figure]
    """Takes the baseline window to be marked."""
    wide: bool = False


@dataclass(frozen=True)
class PictureGroup:
    """Pictures under one heading, and what holds for all of them."""

    heading: str
    note: str
    pictures: tuple[Picture, ...]


def shown_channels(result: ContrastResult) -> list[int]:
    """Channels whose maps are shown: where the significant clusters peak, else the one with the largest statistic."""
    names = list(result.channels)
    peaks = [names.index(name) for name in result.significant["peak_channel"]]
    if not peaks:
        size = np.nan_to_num(np.abs(result.statistic), nan=-1.0).max(axis=(1, 2))
        peaks = [int(size.argmax())]
    return list(dict.fromkeys(peaks))[:MOST_SHOWN_CHANNELS]


def shown_clusters(result: ContrastResult) -> list[int]:
    """Clusters whose subjects are shown: the significant ones, else the one with the smallest p."""
    clusters = [int(number) for number in result.significant["cluster"]][:MOST_SHOWN_CLUSTERS]
    if not clusters and len(result.clusters):
        clusters = [int(result.clusters.sort_values("p", kind="stable")["cluster"].iloc[0])]
    # Values by subject are kept for the first clusters only.
    there = set(result.region_table["region"])
    return [number for number in clusters if f"cluster {number}" in there]


# -- the report's pictures ----------------------------------------------------------------------------------------------
def report_pictures(result: ContrastResult, window: Window | None) -> list[PictureGroup]:
    """All pictures of one contrast, in the order of the report."""
    channels = shown_channels(result)
    groups = [
        PictureGroup(
            _where(result, channel),
            _channel_note(result, channel, window),
            (*_condition_pictures(result, channel, channels), *_map_pictures(result, channel, channels)),
        )
        for channel in channels
    ]
    kind = result.contrast.unit_kind
    individuals = tuple(_individual_pictures(result))
    groups.append(
        PictureGroup(
            f"Null distribution and individual {kind}s" if individuals else "Null distribution",
            f"Each dot is one {kind}'s mean over the points of a region; diamonds are means with 95 % t intervals, unadjusted. "
            "The regions were chosen on these data, so their effects are inflated."
            if individuals
            else "",
            (_null_picture(result), *individuals),
        )
    )
    wide = []
    if len(result.channels) > 2:
        wide.append(_grid_picture(result))
    if len(result.channels) >= FEWEST_FOR_OVERVIEW:
        wide.append(_overview_picture(result))
    if wide:
        groups.append(PictureGroup("All channels", _marks(result, window), tuple(wide)))
    return groups


def _map_figure(draw: Callable[..., object], scale: ColourScale, window: Window | None) -> Figure:
    figure = blank_figure(PANEL_WIDTH, PANEL_HEIGHT)
    height = PANEL_HEIGHT - 18.5
    draw(add_axes(figure, 11, 9.5, 46.5, height), scale=scale, baseline_window=window)
    draw_colour_bar(add_axes(figure, 60, 9.5, 2.6, height), scale)
    return figure


def _level(result: ContrastResult) -> str:
    return f"{result.alpha:g}".replace("0.", ".", 1)


def _where(result: ContrastResult, channel: int) -> str:
    """Which channel is shown, and why."""
    name = result.channels[channel]
    if len(result.channels) == 1:
        return f"Channel {name}"
    here = [str(number) for number in result.significant[result.significant["peak_channel"] == name]["cluster"]]
    if here:
        noun = "cluster" if result.record.correction.clusterwise else "region"
        plural = f"{noun}s {', '.join(here)} peak" if len(here) > 1 else f"{noun} {here[0]} peaks"
        return f"Channel {name}, where {plural}"
    return f"Channel {name}, which holds the largest statistic"


def _channel_note(result: ContrastResult, channel: int, window: Window | None) -> str:
    """What holds for all maps of one channel."""
    level = _level(result)
    if result.mask[channel].any():
        said = [
            f"Lines enclose points with corrected p ≤ {level}; their course is no tested boundary. In the maps of statistic and "
            "effect size all else is paler, and numbers are those of the table below."
        ]
    else:
        said = [f"No point of this channel has a corrected p ≤ {level}."]
    if ((result.cluster_labels[channel] > 0) & ~result.mask[channel]).any():
        said.append(f"Dotted: clusters with corrected p above {level}.")
    said.append(_marks(result, window))
    return " ".join(said).strip()


def _marks(result: ContrastResult, window: Window | None) -> str:
    said = []
    low, high = float(result.times[0]), float(result.times[-1])
    if low <= 0 <= high:
        said.append("The dashed line is the event at 0 s.")
    if window is not None:
        inside = window[0] < high and window[1] > low
        said.append(
            f"The bar marks the baseline window, {window[0]:g} to {window[1]:g} s."
            if inside
            else f"The baseline window, {window[0]:g} to {window[1]:g} s, lies outside the times tested."
        )
    if not result.tested.all():
        said.append("Hatched points were not tested.")
    return " ".join(said)


def _extent(result: ContrastResult) -> str:
    return (
        f"{result.frequencies[0]:.4g} to {result.frequencies[-1]:.4g} Hz, "
        f"{result.times[0]:.4g} to {result.times[-1]:.4g} s"
    )


def _peak_words(result: ContrastResult, values: np.ndarray, channel: int, unit: str) -> str:
    part = np.asarray(values)[channel]
    if not np.isfinite(part).any():
        return "no finite value"
    row, column = np.unravel_index(int(np.nanargmax(np.abs(part))), part.shape)
    return (
        f"largest size {part[row, column]:.3g} {unit} at {result.frequencies[row]:.4g} Hz and "
        f"{result.times[column]:.4g} s"
    )


def _condition_pictures(result: ContrastResult, channel: int, channels: list[int]) -> Iterator[Picture]:
    contrast = result.contrast
    unit = contrast.estimate_unit.removesuffix(contrast.per)
    scale = plane_maps.condition_scale(result, channels)
    name = result.channels[channel]
    for number, condition in enumerate(contrast.condition_means):
        words = f"{condition} at {name}: mean over {contrast.unit_kind}s in {unit}, untested."
        if len(contrast.condition_means) > 1:
            words += " All conditions share one scale."
        yield Picture(
            f"condition_{number}_{channel}",
            "conditions",
            words,
            f"Time-frequency map of {condition} at channel {name}, {_extent(result)}: "
            f"{_peak_words(result, contrast.condition_means[condition], channel, unit)}.",
            partial(_map_figure, partial(plane_maps.draw_condition_map, result=result, condition=condition, channel=channel),
                    scale),
        )  # fmt: skip


def _map_pictures(result: ContrastResult, channel: int, channels: list[int]) -> Iterator[Picture]:
    name = result.channels[channel]
    unit, statistic, effect = result.estimate_unit, plane_maps.statistic_label(result), result.effect_name
    kinds = (
        ("difference", plane_maps.draw_difference, plane_maps.difference_scale, result.estimate, unit,
         f"{result.contrast.difference} at {name}, mean in {unit}; values uncorrected."),
        ("statistic", plane_maps.draw_statistic, plane_maps.statistic_scale, result.statistic, result.statistic_name,
         f"Statistic at {name}, {statistic}; values uncorrected."),
        ("effect_size", plane_maps.draw_effect_size, plane_maps.effect_scale, result.effect_size, effect,
         f"Effect size at {name}, {effect}; values uncorrected."),
    )  # fmt: skip
    for kind, draw, scale, values, symbol, words in kinds:
        yield Picture(
            f"{kind}_{channel}",
            kind,
            words,
            f"Time-frequency map of the {kind.replace('_', ' ')} at channel {name}, {_extent(result)}: "
            f"{_peak_words(result, values, channel, symbol)}; {int(result.mask[channel].sum())} points outlined.",
            partial(_map_figure, partial(draw, result=result, channel=channel), scale(result, channels)),
        )


def _grid_picture(result: ContrastResult) -> Picture:
    chosen = grid_channels(result)
    which = (
        f"All {len(chosen)} channels" if len(chosen) == len(result.channels)
        else f"{len(chosen)} of {len(result.channels)} channels, those of significant clusters first"
    )  # fmt: skip
    marked = [result.channels[channel] for channel in chosen if result.mask[channel].any()]
    return Picture(
        "channels",
        "channels",
        f"{which}: {result.contrast.difference}, mean in {result.estimate_unit}, on one scale; the values are uncorrected. "
        f"Lines enclose points with corrected p ≤ {_level(result)}.",
        f"Small time-frequency maps of {len(chosen)} channels. Channels with outlined points: "
        f"{', '.join(marked) or 'none'}.",
        partial(channel_grid, result),
        wide=True,
    )


def _overview_picture(result: ContrastResult) -> Picture:
    return Picture(
        "overview",
        "overview",
        "All channels at once. Left: at each channel and time the statistic of the largest size over frequencies. Right: "
        "at each channel and frequency the one over times; inside the lines, over the points of the mask. "
        "The values are uncorrected and, being extremes, look larger than "
        f"a single map. Lines enclose channels and times, or channels and frequencies, that hold a point with corrected "
        f"p ≤ {_level(result)}.",
        f"Two overviews of {len(result.channels)} channels, by time and by frequency; "
        f"{int(result.mask.any(axis=(1, 2)).sum())} channels hold outlined points.",
        partial(channel_overviews, result),
        wide=True,
    )


def null_figure(result: ContrastResult, width: float = COLUMN_WIDTH, height: float = MAP_HEIGHT) -> Figure:
    """The null distribution as a figure of its own."""
    figure = blank_figure(width, height)
    draw_null_histogram(add_axes(figure, 13, 9.5, width - 17.0, height - 18.5), result)
    return figure


def _null_picture(result: ContrastResult) -> Picture:
    observed, p = result.null[0], p_text(p_of_observed(result))
    return Picture(
        "null",
        "null",
        f"Null distribution: {null_quantity(result)} in each of {result.record.rows} relabellings. The solid line is the "
        f"observed labelling ({observed:.4g}, {p}); relabellings at least as extreme are hatched. Dashed: the value that "
        f"alpha = {_level(result)} asks for.",
        f"Histogram of {result.record.rows} relabellings; the observed value {observed:.4g} has {p}.",
        lambda _: null_figure(result, PANEL_WIDTH, PANEL_HEIGHT),
    )


def individuals_into(
    figure: Figure,
    result: ContrastResult,
    cluster: int,
    left: float,
    bottom: float,
    width: float = COLUMN_WIDTH,
    height: float = MAP_HEIGHT,
) -> None:
    """One cluster's subjects in a block of some width in mm: conditions with paired lines, then the compared value."""
    columns, compared = condition_columns(result, cluster)
    row = result.clusters[result.clusters["cluster"] == cluster].iloc[0]
    noun = "Cluster" if result.record.correction.clusterwise else "Region"
    head = f"{noun} {cluster}, {p_text(row.p)}"
    below = f"{len(result.contrast.unit_names)} {result.contrast.unit_kind}s · region chosen on these data"
    inner = height - 17.5
    side_width = 14.0 if columns else width - 30.0
    side = add_axes(figure, left + (width - side_width - 2.0 if columns else 15.0), bottom + 8.5, side_width, inner)
    if columns:
        ax = add_axes(figure, left + 12.5, bottom + 8.5, width - side_width - 28.0, inner)
        draw_individuals(ax, columns, condition_axis_words(result), joined=result.contrast.statistic == ONE_SAMPLE_T)
    title(ax if columns else side, head, below)
    if compared is None:
        draw_estimate(side, row, f"difference ({result.estimate_unit})", "difference")
        return
    words = "slope" if result.contrast.per else "difference" if columns else "change"
    draw_individuals(
        side,
        {words if columns else result.contrast.difference: compared},
        f"{words} ({result.estimate_unit})",
        zero=True,
        first_colour=5 if columns else 0,
    )


def _individual_figure(result: ContrastResult, cluster: int, _: Window | None = None) -> Figure:
    figure = blank_figure(PANEL_WIDTH, PANEL_HEIGHT)
    individuals_into(figure, result, cluster, 0, 0, PANEL_WIDTH, PANEL_HEIGHT)
    return figure


def _individual_pictures(result: ContrastResult) -> Iterator[Picture]:
    noun = "Cluster" if result.record.correction.clusterwise else "Region"
    for cluster in shown_clusters(result):
        columns, compared = condition_columns(result, cluster)
        row = result.clusters[result.clusters["cluster"] == cluster].iloc[0]
        kind = result.contrast.unit_kind
        joined = " Lines join the values of one subject." if columns and compared is not None else ""
        above = (
            "" if row.p <= result.alpha else f" Its corrected p is above {_level(result)}: shown for orientation only."
        )
        if compared is not None:
            above = f" {int((compared > 0).sum())} of {int(np.isfinite(compared).sum())} values are above zero.{above}"
        yield Picture(
            f"individuals_{cluster}",
            "individuals",
            f"{noun} {cluster} ({row.channels.replace(';', ', ')}), {p_text(row.p)}.{joined}{above}",
            f"Dots of {len(result.contrast.unit_names)} {kind}s for {noun.lower()} {cluster}; mean {row.estimate:.3g} "
            f"{result.estimate_unit}, 95 % interval {row.estimate_low:.3g} to {row.estimate_high:.3g}.",
            partial(_individual_figure, result, cluster),
        )
