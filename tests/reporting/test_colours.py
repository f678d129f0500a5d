"""The diverging map: even, symmetric in lightness, and told apart with each colour vision deficiency."""

import numpy as np
import pytest
from matplotlib import colormaps

from tfstats.reporting.colours import CONDITION_COLOURS, STEPS, diverging_colours, faded

# Machado, Oliveira & Fernandes 2009, IEEE Trans. Vis. Comput. Graph. 15:1291, severity 1, on linear RGB (from memory).
DEFICIENCIES = {
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "tritan": [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]],
}


def linear(rgb):
    """IEC 61966-2-1."""
    rgb = np.asarray(rgb, dtype=float)
    return np.where(rgb <= 0.04045, rgb / 12.92, ((rgb + 0.055) / 1.055) ** 2.4)


def lab(linear_rgb):
    """CIE 1976 L*a*b*, white D65 (CIE 15)."""
    matrix = [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
    xyz = np.clip(linear_rgb, 0, 1) @ np.transpose(matrix) / [0.95047, 1.0, 1.08883]
    f = np.where(xyz > (6 / 29) ** 3, np.cbrt(xyz), xyz / (3 * (6 / 29) ** 2) + 4 / 29)
    x, y, z = np.moveaxis(f, -1, 0)
    return np.stack([116 * y - 16, 500 * (x - y), 200 * (y - z)], axis=-1)


@pytest.fixture
def colours():
    return diverging_colours()(np.linspace(0, 1, STEPS))[:, :3]


def test_lightness_falls_evenly_and_alike_on_both_sides(colours):
    lightness = lab(linear(colours))[:, 0]
    middle = STEPS // 2
    assert lightness[middle] == lightness.max() > 95
    below, above = lightness[: middle + 1][::-1], lightness[middle:]
    for arm in (below, above):
        steps = -np.diff(arm)
        assert steps.min() > 0
        assert steps.max() < 2 * steps.mean()
    assert np.abs(below - above).max() < 6


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
def test_both_sides_differ_for_everyone(colours, deficiency):
    matrix = np.array(DEFICIENCIES[deficiency])
    assert matrix.sum(axis=1) == pytest.approx(np.ones(3), abs=1e-4)  # white stays white
    seen = lab(linear(colours) @ matrix.T)
    quarter = STEPS // 4
    assert np.linalg.norm(seen[0] - seen[-1]) > 30
    assert np.linalg.norm(seen[quarter] - seen[-1 - quarter]) > 20


def test_nothing_is_registered():
    assert diverging_colours().name not in colormaps


def test_faded_is_lighter_and_opaque(colours):
    opaque = np.concatenate([colours, np.ones((STEPS, 1))], axis=1)
    assert np.all(faded(opaque)[:, :3] >= colours)
    assert np.all(faded(opaque)[:, 3] == 1)


def test_condition_colours_are_readable_on_white():
    for colour in CONDITION_COLOURS:
        red, green, blue = (linear(int(colour[place : place + 2], 16) / 255) for place in (1, 3, 5))
        luminance = 0.2126 * red + 0.7152 * green + 0.0722 * blue
        assert 1.05 / (luminance + 0.05) >= 3.0  # WCAG 2.2, 1.4.11: graphics
