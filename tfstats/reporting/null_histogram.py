"""The null distribution with the observed value marked."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from tfstats.corrections import FalseDiscoveryRate
from tfstats.corrections.p_values import p_of_null, tie_tolerance
from tfstats.reporting.colours import CONDITION_COLOURS, FRAME, INK, MUTED
from tfstats.reporting.plane_axes import SMALL_SIZE, name_axes, plain, title
from tfstats.results import ContrastResult
from tfstats.results.apa_numbers import p_text

__all__ = ["draw_null_histogram", "null_quantity", "p_of_observed"]

BINS = 40


def null_quantity(result: ContrastResult) -> str:
    """What each relabelling contributed to the null distribution, in words."""
    name = result.statistic_name.split(" ")[0]
    sign = {"two-sided": f"|{name}|", "greater": name, "less": f"-{name}"}[result.record.alternative]
    kind = result.record.correction.kind
    if kind == "cluster_mass":
        return f"largest cluster mass (sum of |{name}|)"
    if kind == "cluster_extent":
        return "largest cluster (points)"
    return f"largest {sign} of the plane"


def p_of_observed(result: ContrastResult) -> float:
    """Share of relabellings whose value is at least the observed one, which is among them."""
    return float(p_of_null(result.null[:1], result.null, tie_tolerance(result.subject_values.dtype))[0])


def draw_null_histogram(ax: Axes, result: ContrastResult) -> Axes:
    """How extreme is the observed labelling among all relabellings?

    A histogram of one value a relabelling; those at least as extreme as the observed one are hatched, the observed
    one is marked with its p, and the value that alpha asks for is dashed.
    """
    null = result.null[np.isfinite(result.null)]
    observed = float(result.null[0])
    edges = np.linspace(min(0.0, float(null.min())), max(float(null.max()), observed) * 1.04 or 1.0, BINS + 1)
    counts, _ = np.histogram(null, edges)
    beyond, _ = np.histogram(null[null >= observed * (1 - 1e-9)], edges)
    ax.stairs(counts, edges, fill=True, facecolor="#b9c4cf", edgecolor="white", linewidth=0, zorder=2)
    ax.stairs(counts, edges, color=FRAME, linewidth=0.5, zorder=2.05)
    ax.stairs(beyond, edges, fill=True, facecolor=CONDITION_COLOURS[1], edgecolor="white", linewidth=0, hatch="/////",
              zorder=2.1)  # fmt: skip
    ax.set_xlim(edges[0], edges[-1])
    top = float(counts.max()) * 1.22
    ax.set_ylim(0, top)
    critical = _critical_value(result)
    across = (edges[-1] - edges[0]) * 0.012
    if np.isfinite(critical):
        ax.plot([critical, critical], [0, top * 0.8], color=MUTED, linewidth=0.8, linestyle=(0, (3, 2)), zorder=3)
        level = f"{result.alpha:g}".replace("0.", ".", 1)
        near_end = critical > edges[0] + 0.75 * (edges[-1] - edges[0])
        ax.text(critical + (-across if near_end else across), top * 0.7, f"alpha {level}", color=MUTED, fontsize=SMALL_SIZE,
                ha="right" if near_end else "left", va="center", zorder=4)  # fmt: skip
    ax.plot([observed, observed], [0, top * 0.86], color=INK, linewidth=1.2, zorder=3.2)
    ax.plot([observed], [top * 0.86], marker="v", markersize=4.5, color=INK, zorder=3.3)
    to_left = observed > edges[0] + 0.5 * (edges[-1] - edges[0])
    ax.text(observed + (-across * 2 if to_left else across * 2), top * 0.9, f"observed, {p_text(p_of_observed(result))}",
            ha="right" if to_left else "left", va="center", zorder=4)  # fmt: skip
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    ax.spines["left"].set_color(FRAME)
    ax.yaxis.set_major_locator(MaxNLocator(4, integer=True))
    name_axes(ax, across=null_quantity(result), up="relabellings")
    # The rate of false discoveries is no family-wise rate: the picture is then about the largest statistic only.
    words = (
        "largest statistic; the mask is by false discovery rate"
        if isinstance(result.record.correction, FalseDiscoveryRate)
        else f"{result.record.rows} relabellings, the observed one included"
    )
    title(ax, "Null distribution", plain(words))
    return ax


def _critical_value(result: ContrastResult) -> float:
    """Smallest value of the null whose p is at most alpha."""
    ordered = np.sort(result.null)[::-1]
    allowed = int(np.floor(result.alpha * ordered.size + 1e-9))
    if allowed < 1:
        return float("nan")
    value = ordered[allowed - 1]
    # Ties with the next value would count as well: then only what lies above them is below alpha.
    ties = ordered[allowed] == value if allowed < ordered.size else False
    above = ordered[ordered > value]
    return float(value if not ties else above.min() if above.size else np.nan)
