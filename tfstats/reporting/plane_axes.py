"""What all figures share: sizes, type, the logarithmic frequency axis, marks of event and baseline, colour bars."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, LogNorm, Normalize
from matplotlib.figure import Figure
from matplotlib.ticker import FixedFormatter, FixedLocator, MaxNLocator, NullFormatter, NullLocator
from numpy.typing import NDArray

from tfstats.reporting.colours import FRAME, INK, MUTED, ON_MAP, diverging_colours, sequential_colours
from tfstats.reporting.plain_text import printable

__all__ = [
    "COLUMN_WIDTH",
    "PAGE_WIDTH",
    "ColourScale",
    "add_axes",
    "around_centre",
    "blank_figure",
    "cell_edges",
    "draw_colour_bar",
    "figure_style",
    "frequency_ticks",
    "from_floor",
    "mark_event",
    "name_axes",
    "plain",
    "shortened",
    "title",
]

Floats = NDArray[np.float64]

COLUMN_WIDTH = 85.0
"""mm, one column of a journal page."""
PAGE_WIDTH = 180.0
"""mm, both columns."""
MILLIMETRES_PER_INCH = 25.4
TEXT_SIZE = 7.5
# Titles differ by size alone: a second font, bold, would have to be embedded in every PDF, and doubles the time for it.
TITLE_SIZE = 8.2
SMALL_SIZE = 6.6
LONGEST_LABEL = 38

# Every setting that a user's own style could have changed and that would break a figure is named here.
STYLE = {
    "font.family": ["DejaVu Sans"],  # ships with matplotlib, so every machine draws the same
    "font.size": TEXT_SIZE,
    "text.usetex": False,
    "text.color": INK,
    "axes.edgecolor": FRAME,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.labelsize": TEXT_SIZE,
    "axes.labelpad": 2.0,
    "axes.spines.top": True,
    "axes.spines.right": True,
    "axes.grid": False,
    "axes.facecolor": "none",
    "axes.unicode_minus": True,
    "axes.formatter.use_locale": False,
    "axes.formatter.use_mathtext": False,
    "axes.xmargin": 0.0,
    "axes.ymargin": 0.0,
    "figure.facecolor": "white",
    "figure.autolayout": False,
    "figure.constrained_layout.use": False,
    "xtick.color": FRAME,
    "ytick.color": FRAME,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": SMALL_SIZE,
    "ytick.labelsize": SMALL_SIZE,
    "xtick.major.size": 2.2,
    "ytick.major.size": 2.2,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.pad": 2.0,
    "ytick.major.pad": 2.0,
    "hatch.color": "#9aa4af",
    "hatch.linewidth": 0.5,
    "pdf.fonttype": 42,
    "pdf.compression": 3,
    "ps.fonttype": 42,
    "svg.fonttype": "none",
    "savefig.bbox": None,
    "savefig.transparent": False,
}


@contextmanager
def figure_style(**more: Any) -> Iterator[None]:
    """The look of our figures while a block runs; matplotlib's settings are as before afterwards."""
    settings: Any = {**STYLE, **more}
    with matplotlib.rc_context(settings):
        yield


def blank_figure(width: float, height: float) -> Figure:
    """A figure of a size in mm, without pyplot and so without a display."""
    return Figure(figsize=(width / MILLIMETRES_PER_INCH, height / MILLIMETRES_PER_INCH))


def add_axes(figure: Figure, left: float, bottom: float, width: float, height: float) -> Axes:
    """Axes at a place in mm from the lower left corner: places that are known need no layout pass."""
    across, up = (float(size) * MILLIMETRES_PER_INCH for size in figure.get_size_inches())
    return figure.add_axes((left / across, bottom / up, width / across, height / up))


def plain(text: object) -> str:
    """Text as it stands: a label with dollar signs is no formula, and line ends are spaces."""
    return " ".join(printable(str(text)).split()).replace("$", r"\$")


def shortened(text: object, most: int = LONGEST_LABEL) -> str:
    """A label that fits its place; the caption has all of it."""
    whole = " ".join(printable(str(text)).split())
    return plain(whole if len(whole) <= most else whole[: most - 1].rstrip() + "…")


# -- colour scales -----------------------------------------------------------------------------------------------------
@dataclass(frozen=True)
class ColourScale:
    """Limits, colours and name of what a map shows."""

    low: float
    high: float
    label: str
    colours: Colormap
    logarithmic: bool = False
    clipped_below: bool = False
    clipped_above: bool = False

    @property
    def norm(self) -> Normalize:
        """Values to the range 0 to 1."""
        return (LogNorm if self.logarithmic else Normalize)(self.low, self.high, clip=False)

    def rgba(self, values: NDArray[np.floating]) -> Floats:
        """Colours of values, transparent where they are not finite."""
        shown = np.ma.masked_invalid(np.asarray(values, dtype=np.float64))
        return np.asarray(self.colours(np.ma.clip(self.norm(shown), 0.0, 1.0)), dtype=np.float64)


def _round_up(value: float) -> float:
    power = 10.0 ** np.floor(np.log10(value))
    steps = np.array([1.0, 1.2, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 6.0, 8.0, 10.0])
    return float(power * steps[np.searchsorted(steps, value / power - 1e-9)])


def around_centre(values: Sequence[NDArray[np.floating]], label: str, centre: float = 0.0) -> ColourScale:
    """A diverging scale with limits at the same distance on both sides of `centre`, shared by all the maps given.

    The limit is the largest distance, rounded up.  Where single points stick far out (beyond 4 times the distance that
    99.5 % stay within) it is twice that distance, and the colour bar says so by its arrows.
    """
    finite = [np.asarray(part, dtype=np.float64)[np.isfinite(part)] for part in values]
    distances = np.abs(np.concatenate([part.ravel() for part in finite] or [np.zeros(1)]) - centre)
    largest = float(distances.max(initial=0.0))
    if largest == 0.0:
        return ColourScale(centre - 1.0, centre + 1.0, label, diverging_colours())
    usual = float(np.quantile(distances, 0.995))
    limit = _round_up(2.0 * usual if 0.0 < usual * 4.0 < largest else largest)
    shown = np.concatenate([part.ravel() for part in finite])
    return ColourScale(
        centre - limit,
        centre + limit,
        label,
        diverging_colours(),
        clipped_below=bool(shown.min() < centre - limit),
        clipped_above=bool(shown.max() > centre + limit),
    )


def from_floor(values: Sequence[NDArray[np.floating]], label: str) -> ColourScale:
    """A sequential scale for power itself, logarithmic where all of it is positive."""
    shown = np.concatenate([np.asarray(part, dtype=np.float64)[np.isfinite(part)].ravel() for part in values])
    if not shown.size:
        return ColourScale(0.0, 1.0, label, sequential_colours())
    low, high = float(shown.min()), float(shown.max())
    if low == high:
        high = low + (abs(low) or 1.0)
    return ColourScale(low, high, label, sequential_colours(), logarithmic=low > 0)


def draw_colour_bar(ax: Axes, scale: ColourScale) -> Axes:
    """A colour bar with its label and unit, drawn into `ax`; pointed where values lie beyond its end."""
    # An image in axes coordinates: a tenth of the cost of a mesh, which a vector file would have to rasterise.
    ramp = scale.colours(np.linspace(0.0, 1.0, 256))[:, None, :]
    ax.imshow(ramp, extent=(0, 1, 0, 1), transform=ax.transAxes, origin="lower", aspect="auto", interpolation="nearest")
    ax.set_xlim(0, 1)
    ax.xaxis.set_major_locator(NullLocator())
    ax.yaxis.tick_right()
    ax.yaxis.set_label_position("right")
    if scale.logarithmic:
        ax.set_yscale("log")
        low, high = np.log10(scale.low), np.log10(scale.high)
        ticks = [10.0**power for power in range(int(np.ceil(low - 1e-9)), int(np.floor(high + 1e-9)) + 1)]
        ticks = ticks if len(ticks) >= 2 else [float(tick) for tick in np.geomspace(scale.low, scale.high, 3)]
        # Formulas as tick labels would be another font in every PDF.
        ax.yaxis.set_major_locator(FixedLocator(ticks))
        ax.yaxis.set_major_formatter(FixedFormatter([f"{tick:.3g}" for tick in ticks]))
        ax.yaxis.set_minor_locator(NullLocator())
    else:
        ax.yaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 2.5, 5, 10]))
    ax.set_ylim(scale.low, scale.high)
    ends = ((scale.clipped_below, 0.0, -0.05, 0.0), (scale.clipped_above, 1.0, 1.05, 1.0))
    for clipped, base, tip, place in ends:
        if clipped:
            ax.fill([0, 1, 0.5], [base, base, tip], facecolor=scale.colours(place), edgecolor=FRAME, linewidth=0.4,
                    transform=ax.transAxes, clip_on=False)  # fmt: skip
    for spine in ax.spines.values():
        spine.set_linewidth(0.4)
    ax.tick_params(size=1.8, pad=1.6)
    ax.set_ylabel(shortened(scale.label, 36), labelpad=2.5)
    return ax


# -- axes of the plane -------------------------------------------------------------------------------------------------
def cell_edges(axis: Floats, *, logarithmic: bool = False) -> Floats:
    """Edges of cells: midpoints of neighbours (geometric for frequencies), ends mirrored; a lone point gets some width."""
    places = np.log2(axis) if logarithmic else np.asarray(axis, dtype=np.float64)
    half = np.diff(places) / 2.0 if places.size > 1 else np.array([0.5 if logarithmic else 0.05])
    edges = np.concatenate([[places[0] - half[0]], places[:-1] + half[: places.size - 1], [places[-1] + half[-1]]])
    return np.asarray(2.0**edges if logarithmic else edges)


def frequency_ticks(low: float, high: float) -> list[float]:
    """Round frequencies in Hz between two edges, octaves apart where at least three of them fit."""
    octaves = [2.0**power for power in range(-6, 14) if low <= 2.0**power <= high]
    if len(octaves) >= 3:
        return octaves if len(octaves) <= 7 else octaves[::2]
    ticks = MaxNLocator(4, steps=[1, 2, 5, 10]).tick_values(low, high)
    inside = [float(tick) for tick in ticks if low <= tick <= high and tick > 0]
    return inside or [float(np.sqrt(low * high))]


def logarithmic_frequencies(ax: Axes, edges: Floats) -> None:
    """A logarithmic frequency axis with its ticks in Hz."""
    ax.set_yscale("log", base=2)
    ax.set_ylim(edges[0], edges[-1])
    ticks = frequency_ticks(float(edges[0]), float(edges[-1]))
    ax.yaxis.set_major_locator(FixedLocator(ticks))
    ax.yaxis.set_major_formatter(FixedFormatter([f"{tick:.4g}" for tick in ticks]))
    ax.yaxis.set_minor_locator(NullLocator())
    ax.yaxis.set_minor_formatter(NullFormatter())


def time_ticks(ax: Axes, edges: Floats, *, most: int = 5) -> None:
    """The time axis, with at most so many ticks."""
    ax.set_xlim(edges[0], edges[-1])
    ax.xaxis.set_major_locator(MaxNLocator(most, steps=[1, 2, 2.5, 5, 10]))


def name_axes(ax: Axes, *, across: str | None = "time from event (s)", up: str | None = "frequency (Hz)") -> None:
    """Axis labels; None leaves an axis without label and numbers (a neighbour has them)."""
    for axis, name in ((ax.xaxis, across), (ax.yaxis, up)):
        if name is None:
            axis.set_tick_params(labelleft=False, labelbottom=False)
        else:
            axis.set_label_text(plain(name))


def mark_event(ax: Axes, baseline_window: tuple[float, float] | None = None, *, named: bool = True) -> Axes:
    """The event at 0 s as a line, the baseline window as a bar along the lower edge, where the axis shows them."""
    low, high = ax.get_xlim()
    if low <= 0.0 <= high:
        ax.axvline(0.0, color="white", linewidth=1.5, alpha=0.7, zorder=2.4)
        ax.axvline(0.0, color=ON_MAP, linewidth=0.7, linestyle=(0, (4, 2.5)), zorder=2.5)
    if baseline_window is not None:
        start, stop = max(baseline_window[0], low), min(baseline_window[1], high)
        if start < stop:
            across = ax.get_xaxis_transform()
            ax.plot([start, stop], [0.035, 0.035], color="white", linewidth=4.0, transform=across, zorder=2.4,
                    solid_capstyle="butt")  # fmt: skip
            ax.plot([start, stop], [0.035, 0.035], color=ON_MAP, linewidth=1.8, transform=across, zorder=2.5,
                    solid_capstyle="butt")  # fmt: skip
            if named:
                ax.text((start + stop) / 2, 0.065, "baseline", transform=across, ha="center", va="bottom", color=ON_MAP,
                        fontsize=SMALL_SIZE - 0.8, zorder=2.6, clip_on=True)  # fmt: skip
    return ax


def title(ax: Axes, main: str, below: str = "") -> None:
    """A title with a muted second line, above the axes; plain text, so no layout pass is needed."""
    lift = 10.5 if below else 3.5
    ax.annotate(
        shortened(main), (0, 1), (0, lift), xycoords="axes fraction", textcoords="offset points",
        fontsize=TITLE_SIZE, va="bottom", annotation_clip=False,
    )  # fmt: skip
    if below:
        ax.annotate(
            shortened(below, 54), (0, 1), (0, 2.6), xycoords="axes fraction", textcoords="offset points", color=MUTED,
            fontsize=SMALL_SIZE, va="bottom", annotation_clip=False,
        )  # fmt: skip
