"""Colours of figures and report: a diverging map of our own, a sequential one, and the inks.

The diverging map runs in OKLab (Ottosson 2020, "A perceptual color space for image processing"), in which equal steps
look equal: lightness falls evenly and alike on both sides of a light centre, towards blue below and towards orange
brown above, a pair that the common colour vision deficiencies keep apart.
"""

from __future__ import annotations

from functools import cache

import matplotlib
import numpy as np
from matplotlib.colors import Colormap, ListedColormap
from numpy.typing import NDArray

__all__ = [
    "CONDITION_COLOURS",
    "CONDITION_MARKERS",
    "FRAME",
    "INK",
    "MUTED",
    "ON_MAP",
    "UNTESTED",
    "diverging_colours",
    "faded",
    "sequential_colours",
]

INK = "#1b2733"
MUTED = "#56626f"
FRAME = "#8b96a3"
ON_MAP = "#0c1118"
"""Lines on top of a map: they keep their colour on a dark page, as the map does."""
UNTESTED = "#d9dde2"

# Order and markers go together, so that colour is never the only difference (colours after Okabe & Ito 2008).
CONDITION_COLOURS = ("#0b6fb0", "#c8590a", "#007f5f", "#a8418a", "#7a6a00", "#4b5563")
CONDITION_MARKERS = ("o", "s", "^", "D", "v", "P")

STEPS = 257  # odd, so that zero has a colour of its own
FADED_SHARE = 0.38


def _oklab_to_rgb(lab: NDArray[np.float64]) -> NDArray[np.float64]:
    lightness, a, b = lab[..., 0], lab[..., 1], lab[..., 2]
    long = (lightness + 0.3963377774 * a + 0.2158037573 * b) ** 3
    middle = (lightness - 0.1055613458 * a - 0.0638541728 * b) ** 3
    short = (lightness - 0.0894841775 * a - 1.2914855480 * b) ** 3
    linear = np.stack(
        [
            4.0767416621 * long - 3.3077115913 * middle + 0.2309699292 * short,
            -1.2684380046 * long + 2.6097574011 * middle - 0.3413193965 * short,
            -0.0041960863 * long - 0.7034186147 * middle + 1.7076147010 * short,
        ],
        axis=-1,
    )
    linear = np.clip(linear, 0.0, 1.0)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * linear ** (1 / 2.4) - 0.055)


def _arm(hue_degrees: tuple[float, float], chroma: float, distance: NDArray[np.float64]) -> NDArray[np.float64]:
    """One side, from the centre (distance 0) to the end (1): lightness even, hue turning slightly, chroma rising early."""
    lightness = 0.975 - 0.565 * distance
    hue = np.deg2rad(hue_degrees[0] + (hue_degrees[1] - hue_degrees[0]) * distance)
    saturation = chroma * np.sin(np.minimum(distance * 1.35, 1.0) * np.pi / 2)
    return np.stack([lightness, saturation * np.cos(hue), saturation * np.sin(hue)], axis=-1)


@cache
def diverging_colours() -> Colormap:
    """Blue below, light at the centre, orange brown above; not registered anywhere."""
    distance = np.linspace(0.0, 1.0, STEPS // 2 + 1)
    below = _arm((228.0, 258.0), 0.115, distance)[::-1]
    above = _arm((72.0, 42.0), 0.118, distance)[1:]
    colours = _oklab_to_rgb(np.concatenate([below, above]))
    return ListedColormap(np.clip(colours, 0.0, 1.0), name="blue to orange")


def sequential_colours() -> Colormap:
    """For quantities with a floor: perceptually uniform, readable with colour vision deficiencies and in grey."""
    return matplotlib.colormaps["cividis"]


def faded(colours: NDArray[np.float64]) -> NDArray[np.float64]:
    """The same colours mixed with white, opaque, so that they look alike on every page."""
    mixed = np.array(colours, dtype=np.float64)
    mixed[..., :3] = 1.0 - FADED_SHARE * (1.0 - mixed[..., :3])
    return mixed
