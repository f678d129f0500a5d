"""The band table as a picture: every estimate with its interval, against zero."""

from __future__ import annotations

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.ticker import FixedFormatter, FixedLocator

from tfstats.reporting.colours import CONDITION_COLOURS, INK, MUTED
from tfstats.reporting.plane_axes import PAGE_WIDTH, SMALL_SIZE, add_axes, blank_figure, name_axes, shortened, title
from tfstats.reporting.report_pictures import Picture

__all__ = ["band_figure", "band_picture", "draw_band_estimates"]

MOST_ROWS = 60
ALPHA = 0.05


def draw_band_estimates(ax: Axes, rows: pd.DataFrame, alpha: float = ALPHA) -> Axes:
    """Estimates of one unit with their 95 % intervals, one row each; filled where the corrected p is at most alpha."""
    places = np.arange(len(rows))
    ax.axvline(0.0, color=MUTED, linewidth=0.7, linestyle=(0, (3, 2)), zorder=1)
    for place, row in zip(places, rows.itertuples()):
        firm = row.p_corrected <= alpha
        colour = CONDITION_COLOURS[0] if firm else MUTED
        ax.plot([row.low, row.high], [place, place], color=colour, linewidth=1.5 if firm else 1.0, zorder=2,
                solid_capstyle="butt")  # fmt: skip
        ax.plot([row.estimate], [place], marker="o", markersize=4.2, color=colour, zorder=3,
                markerfacecolor=colour if firm else "white", markeredgewidth=0.9)  # fmt: skip
    ax.set_ylim(len(rows) - 0.4, -0.6)
    ax.margins(x=0.06)
    names = [shortened(f"{row.band}, {row.window}, {row.channels}", 42) for row in rows.itertuples()]
    ax.yaxis.set_major_locator(FixedLocator(list(places)))
    ax.yaxis.set_major_formatter(FixedFormatter(names))
    ax.tick_params(axis="y", length=0, labelsize=SMALL_SIZE, labelcolor=INK)
    for side in ("top", "right", "left"):
        ax.spines[side].set_visible(False)
    name_axes(ax, across=f"estimate ({rows['unit'].iloc[0]})", up="")
    return ax


def band_figure(bands: pd.DataFrame, alpha: float = ALPHA) -> Figure:
    """One block a test (and unit), under each other."""
    shown = bands.head(MOST_ROWS)
    blocks = [part for _, part in shown.groupby(["test", "unit"], sort=False)]
    heights = [len(part) * 4.6 + 2.0 for part in blocks]
    figure = blank_figure(PAGE_WIDTH, sum(heights) + 20.0 * len(blocks))
    top = sum(heights) + 20.0 * len(blocks)
    for part, height in zip(blocks, heights):
        top -= 9.5 + height
        ax = add_axes(figure, 62.0, top, 110.0, height)
        draw_band_estimates(ax, part, alpha)
        title(ax, str(part["test"].iloc[0]), "filled: corrected p up to .05 over the whole table")
        top -= 10.5
    return figure


def band_picture(bands: pd.DataFrame) -> Picture:
    """The band figure with its words."""
    rest = f" The first {MOST_ROWS} of {len(bands)} rows." if len(bands) > MOST_ROWS else ""
    return Picture(
        "bands",
        "bands",
        "Each row of the band table: estimate with its 95 % t interval, unadjusted. Filled dots: p corrected over the whole "
        f"table at most .05.{rest}",
        f"Estimates with intervals of {min(len(bands), MOST_ROWS)} rows of the band table; "
        f"{int((bands['p_corrected'] <= ALPHA).sum())} have a corrected p of at most .05.",
        lambda _: band_figure(bands),
        wide=True,
    )
