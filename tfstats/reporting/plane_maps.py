"""Time-frequency maps: conditions, difference, statistic, effect size, with the corrected mask outlined."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection
from numpy.typing import NDArray

from tfstats.foundations.units import symbol_of, unchanged_value
from tfstats.reporting.colours import ON_MAP, UNTESTED, faded
from tfstats.reporting.plane_axes import (
    ColourScale,
    around_centre,
    cell_edges,
    from_floor,
    logarithmic_frequencies,
    mark_event,
    name_axes,
    shortened,
    time_ticks,
    title,
)
from tfstats.results import ContrastResult

__all__ = [
    "condition_scale",
    "difference_scale",
    "draw_condition_map",
    "draw_difference",
    "draw_effect_size",
    "draw_mesh",
    "draw_outline",
    "draw_statistic",
    "effect_scale",
    "outline_segments",
    "statistic_label",
    "statistic_scale",
]

Floats = NDArray[np.float64]
Window = tuple[float, float]


# -- scales, shared by all panels of a kind -----------------------------------------------------------------------------
def condition_scale(result: ContrastResult, channels: list[int]) -> ColourScale:
    """One scale for all conditions and the channels shown, symmetric about no change; power itself has a floor instead."""
    contrast = result.contrast
    shown = [np.asarray(mean)[channels] for mean in contrast.condition_means.values()]
    symbol = symbol_of(contrast.unit)
    if contrast.unit in ("power", "none"):
        return from_floor(shown, "power")
    words = "relative power" if symbol == contrast.unit else f"power relative to baseline ({symbol})"
    return around_centre(shown, words, unchanged_value(contrast.unit))


def difference_scale(result: ContrastResult, channels: list[int] | slice = slice(None)) -> ColourScale:
    """The compared value's mean in its unit, symmetric about zero."""
    return around_centre([result.estimate[channels]], f"{_estimate_name(result)} ({result.estimate_unit})")


def statistic_scale(result: ContrastResult, channels: list[int] | slice = slice(None)) -> ColourScale:
    """The statistic, symmetric about zero."""
    return around_centre([result.statistic[channels]], statistic_label(result))


def effect_scale(result: ContrastResult, channels: list[int] | slice = slice(None)) -> ColourScale:
    """The standardised effect size, symmetric about zero."""
    return around_centre([result.effect_size[channels]], f"effect size {result.effect_name}")


def statistic_label(result: ContrastResult) -> str:
    """Name of the statistic with its df where it is one number."""
    return f"{result.statistic_name} (df {result.df:g})" if isinstance(result.df, float) else result.statistic_name


def _estimate_name(result: ContrastResult) -> str:
    return {"against_zero": "mean change", "trend": "mean slope", "trialwise_change": "mean change"}.get(
        result.contrast.design, "mean difference"
    )


# -- drawing --------------------------------------------------------------------------------------------------------------
def draw_mesh(
    ax: Axes,
    values: NDArray[np.floating],
    across: Floats,
    up: Floats,
    scale: ColourScale,
    keep: NDArray[np.bool_] | None = None,
) -> Axes:
    """Cells of (rows, columns) values between edges; those outside `keep` paler, untested ones hatched."""
    colours = scale.rgba(values)
    if keep is not None and keep.any():
        colours = np.where(keep[..., None], colours, np.where(colours[..., 3:] > 0, faded(colours), colours))
    ax.patch.set(facecolor=UNTESTED, hatch="//////", edgecolor="#9aa4af", linewidth=0)
    if np.isfinite(values).all():
        ax.patch.set_visible(False)
    ax.pcolormesh(across, up, colours, rasterized=True, antialiased=False, linewidth=0, zorder=1)
    return ax


def outline_segments(mask: NDArray[np.bool_], across: Floats, up: Floats) -> Floats:
    """(segments, 2, 2) lines along the cell edges where a (rows, columns) mask changes, the border of the map included."""
    padded = np.pad(np.asarray(mask, dtype=bool), 1)
    row, column = np.nonzero(padded[1:, 1:-1] != padded[:-1, 1:-1])
    flat = np.stack(
        [np.stack([across[column], up[row]], axis=-1), np.stack([across[column + 1], up[row]], axis=-1)], axis=1
    )
    row, column = np.nonzero(padded[1:-1, 1:] != padded[1:-1, :-1])
    upright = np.stack(
        [np.stack([across[column], up[row]], axis=-1), np.stack([across[column], up[row + 1]], axis=-1)], axis=1
    )
    return np.concatenate([flat, upright]) if flat.size or upright.size else np.empty((0, 2, 2))


def draw_outline(ax: Axes, mask: NDArray[np.bool_], across: Floats, up: Floats, *, firm: bool = True) -> Axes:
    """The edge of a mask: a dark line on a light one, firm for the corrected mask and dotted otherwise; nothing if empty."""
    segments = outline_segments(mask, across, up)
    if not len(segments):
        return ax
    if firm:
        halo = LineCollection(list(segments), colors="white", linewidths=2.4, capstyle="projecting", zorder=3.0)
        ax.add_collection(halo, autolim=False)
    line = LineCollection(
        list(segments),
        colors=ON_MAP,
        linewidths=1.1 if firm else 0.7,
        linestyles="solid" if firm else [(0, (1.0, 1.6))],
        capstyle="projecting" if firm else "butt",
        zorder=3.1,
        label="corrected mask" if firm else "cluster above alpha",
    )
    ax.add_collection(line, autolim=False)
    return ax


def _plane(
    ax: Axes,
    result: ContrastResult,
    values: NDArray[np.floating],
    scale: ColourScale,
    window: Window | None,
    keep: NDArray[np.bool_] | None = None,
) -> tuple[Floats, Floats]:
    across, up = cell_edges(result.times), cell_edges(result.frequencies, logarithmic=True)
    logarithmic_frequencies(ax, up)
    time_ticks(ax, across)
    draw_mesh(ax, values, across, up, scale, keep)
    mark_event(ax, window)
    name_axes(ax)
    return across, up


def draw_condition_map(
    ax: Axes,
    result: ContrastResult,
    condition: str,
    channel: int,
    *,
    scale: ColourScale | None = None,
    baseline_window: Window | None = None,
) -> Axes:
    """Mean relative power of one condition at one channel; descriptive, so no mask."""
    values = np.asarray(result.contrast.condition_means[condition])[channel]
    _plane(ax, result, values, scale or condition_scale(result, [channel]), baseline_window)
    title(
        ax, condition, f"{shortened(result.channels[channel], 12)} · mean over {result.contrast.unit_kind}s, untested"
    )
    return ax


def draw_difference(
    ax: Axes,
    result: ContrastResult,
    channel: int,
    *,
    scale: ColourScale | None = None,
    baseline_window: Window | None = None,
) -> Axes:
    """The compared value's mean at one channel, the corrected mask outlined."""
    scale = scale or difference_scale(result, [channel])
    edges = _plane(ax, result, result.estimate[channel], scale, baseline_window)
    draw_outline(ax, result.mask[channel], *edges)
    title(ax, result.contrast.difference, _below(result, channel))
    return ax


def draw_statistic(
    ax: Axes,
    result: ContrastResult,
    channel: int,
    *,
    scale: ColourScale | None = None,
    baseline_window: Window | None = None,
) -> Axes:
    """The statistic at one channel: mask outlined and numbered, the rest paler, other clusters dotted."""
    scale = scale or statistic_scale(result, [channel])
    mask = result.mask[channel]
    edges = _plane(ax, result, result.statistic[channel], scale, baseline_window, keep=mask)
    others = (result.cluster_labels[channel] > 0) & ~mask
    draw_outline(ax, others, *edges, firm=False)
    draw_outline(ax, mask, *edges)
    _number_clusters(ax, result, channel)
    title(ax, "Statistic", _below(result, channel))
    return ax


def draw_effect_size(
    ax: Axes,
    result: ContrastResult,
    channel: int,
    *,
    scale: ColourScale | None = None,
    baseline_window: Window | None = None,
) -> Axes:
    """The standardised effect size at one channel: mask outlined, the rest paler."""
    scale = scale or effect_scale(result, [channel])
    mask = result.mask[channel]
    edges = _plane(ax, result, result.effect_size[channel], scale, baseline_window, keep=mask)
    draw_outline(ax, mask, *edges)
    title(ax, "Effect size", _below(result, channel))
    return ax


def _below(result: ContrastResult, channel: int) -> str:
    """Second line of a map's title: the channel, that its values are uncorrected, and what the outline is."""
    level = f"{result.alpha:g}".replace("0.", ".", 1)
    outline = f"outline corrected at {level}" if result.mask[channel].any() else f"nothing outlined at {level}"
    return f"{shortened(result.channels[channel], 12)} · uncorrected; {outline}"


def _number_clusters(ax: Axes, result: ContrastResult, channel: int) -> None:
    """The number of each significant cluster at its largest statistic in this channel."""
    for cluster in result.significant["cluster"]:
        inside = result.cluster_labels[channel] == cluster
        if not inside.any():
            continue
        height = np.where(inside, np.abs(np.nan_to_num(result.statistic[channel])), -1.0)
        row, column = np.unravel_index(int(np.argmax(height)), height.shape)
        place = (result.times[column], result.frequencies[row])
        ax.plot(*place, marker="o", markersize=8.5, markerfacecolor="white", markeredgecolor=ON_MAP, markeredgewidth=0.7,
                zorder=4)  # fmt: skip
        ax.annotate(str(cluster), place, ha="center", va="center_baseline", fontsize=6.2, color=ON_MAP, zorder=4.1)  # fmt: skip
