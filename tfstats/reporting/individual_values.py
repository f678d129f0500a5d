"""Every subject (or trial) behind a cluster's effect: dots, paired lines, mean and interval in front."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray
from scipy import special

from tfstats.contrasts.contrast import ONE_SAMPLE_T
from tfstats.reporting.colours import CONDITION_COLOURS, CONDITION_MARKERS, FRAME, INK, MUTED
from tfstats.reporting.plane_axes import name_axes, plain, shortened
from tfstats.results import ContrastResult

__all__ = ["condition_columns", "draw_estimate", "draw_individuals", "mean_interval"]

Floats = NDArray[np.float64]
MOST_WITH_LINES = 120


def condition_columns(result: ContrastResult, cluster: int) -> tuple[dict[str, Floats], Floats | None]:
    """Values by condition or group for one cluster, and the compared value of each subject (None for two groups)."""
    table = result.region_table
    here = table[table["region"] == f"cluster {cluster}"]
    columns = {
        str(name): part["value"].to_numpy(dtype=np.float64) for name, part in here.groupby("condition", sort=False)
    }
    if result.contrast.statistic != ONE_SAMPLE_T:
        return columns, None
    compared = columns.pop(result.contrast.difference, None)
    # One condition less a constant would be the same dots twice.
    return ({} if len(columns) == 1 else columns), compared


def mean_interval(values: Floats, confidence: float = 0.95) -> tuple[float, float, float]:
    """Mean and t interval of the finite values (NaN interval below two)."""
    finite = values[np.isfinite(values)]
    if finite.size < 2:
        return (float(finite.mean()) if finite.size else np.nan), np.nan, np.nan
    mean = float(finite.mean())
    half = float(special.stdtrit(finite.size - 1, 0.5 + confidence / 2) * finite.std(ddof=1) / np.sqrt(finite.size))
    return mean, mean - half, mean + half


def spread_out(values: Floats, width: float) -> Floats:
    """Sideways places that keep dots of like value apart, the same on every run."""
    places = np.zeros(values.size)
    finite = np.flatnonzero(np.isfinite(values))
    if finite.size < 2 or np.ptp(values[finite]) == 0:
        return places
    height = np.round((values[finite] - values[finite].min()) / np.ptp(values[finite]) * 22).astype(int)
    fullest = np.bincount(height).max()
    for level in np.unique(height):
        members = finite[height == level]
        members = members[np.argsort(values[members], kind="stable")]
        places[members] = (np.arange(members.size) - (members.size - 1) / 2) * min(width / fullest, width / 6)
    return places


def draw_individuals(
    ax: Axes,
    columns: Mapping[str, Floats],
    unit: str,
    *,
    joined: bool = False,
    zero: bool = False,
    first_colour: int = 0,
) -> Axes:
    """One column of dots a condition.

    Parameters
    ----------
    columns : mapping of label to (units,)
        With `joined`, in the same order of subjects: a line joins each subject's values.
    unit : str
    zero : bool
        Draw the line of zero.
    """
    labels = list(columns)
    # Means stand beside the dots, outwards, so that neither hides the other.
    beside = {place: (-0.24 if joined and place == 0 and len(labels) > 1 else 0.24) for place in range(len(labels))}
    if zero:
        ax.axhline(0.0, color=MUTED, linewidth=0.7, linestyle=(0, (3, 2)), zorder=1)
    many = max((values.size for values in columns.values()), default=0)
    if joined and len(labels) > 1 and many <= MOST_WITH_LINES:
        stacked = np.stack([columns[label] for label in labels])
        ax.plot(np.arange(len(labels)), stacked, color=FRAME, linewidth=0.5, alpha=0.75, zorder=1.5)
    for place, label in enumerate(labels):
        values = columns[label]
        code = (place + first_colour) % len(CONDITION_COLOURS)
        across = place + (np.zeros(values.size) if joined and len(labels) > 1 else spread_out(values, 0.36) - 0.1)
        ax.plot(across, values, linestyle="none", marker=CONDITION_MARKERS[code], markersize=3.2 if many <= 60 else 2.2,
                markerfacecolor=CONDITION_COLOURS[code], markeredgecolor="white", markeredgewidth=0.3, alpha=0.85,
                zorder=2)  # fmt: skip
        _draw_interval(ax, place + beside[place], *mean_interval(values))
    _finish(ax, labels, unit)
    return ax


def draw_estimate(ax: Axes, row: Any, unit: str, label: str) -> Axes:
    """Difference of two groups with its interval, for designs in which no unit has a difference of its own."""
    ax.axhline(0.0, color=MUTED, linewidth=0.7, linestyle=(0, (3, 2)), zorder=1)
    _draw_interval(ax, 0.0, row.estimate, row.estimate_low, row.estimate_high)
    ends = [value for value in (row.estimate_low, row.estimate_high, 0.0) if np.isfinite(value)]
    pad = 0.25 * (max(ends) - min(ends) or 1.0)
    ax.set_ylim(min(ends) - pad, max(ends) + pad)
    _finish(ax, [label], unit)
    return ax


def _draw_interval(ax: Axes, place: float, mean: float, low: float, high: float) -> None:
    if np.isfinite(low) and np.isfinite(high):
        ax.plot([place, place], [low, high], color=INK, linewidth=1.4, solid_capstyle="butt", zorder=3)
    ax.plot([place], [mean], marker="D", markersize=4.4, markerfacecolor=INK, markeredgecolor="white", markeredgewidth=0.6,
            zorder=3.1)  # fmt: skip


def _finish(ax: Axes, labels: list[str], unit: str) -> None:
    ax.set_xlim(-0.55, len(labels) - 0.45)
    ax.margins(y=0.08)
    most = max(7, 24 // max(1, len(labels)))
    name_axes(ax, across="", up=plain(unit))
    ax.set_xticks(range(len(labels)), [shortened(label, most) for label in labels])
    ax.tick_params(axis="x", length=0, pad=3)
    ax.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 2.5, 5, 10]))
    for side in ("top", "right", "bottom"):
        ax.spines[side].set_visible(False)


def condition_axis_words(result: ContrastResult) -> str:
    """What the dots of the conditions mean, with unit."""
    return f"mean over the cluster ({result.estimate_unit.removesuffix(result.contrast.per)})"
