"""Data, and the yardsticks that a user without the engine would have."""

from __future__ import annotations

import numpy as np
from scipy import ndimage, stats
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import Delaunay


def smooth_maps(units: int, channels: int = 1, frequencies: int = 64, times: int = 256, seed: int = 0) -> np.ndarray:
    """Smooth Gaussian maps (units, channels, frequencies, times), float32, unit variance."""
    generator = np.random.default_rng(seed)
    values = np.empty((units, channels, frequencies, times), np.float32)
    for unit in range(units):
        noise = generator.standard_normal((channels, frequencies, times), dtype=np.float32)
        smoothed = ndimage.gaussian_filter(noise, (0, 2, 4))
        values[unit] = smoothed / smoothed.std()
    return values


def flips(rows: int, units: int, seed: int = 1) -> np.ndarray:
    drawn = np.random.default_rng(seed).integers(0, 2, (rows, units), dtype=np.uint8)
    drawn[0] = 0
    return drawn


def memberships(rows: int, units: int, ones: int, seed: int = 2) -> np.ndarray:
    generator = np.random.default_rng(seed)
    first = (np.arange(units) < ones).astype(np.uint8)
    return np.array([first, *(generator.permutation(first) for _ in range(rows - 1))])


def neighbours(channels: int = 64, seed: int = 3) -> np.ndarray:
    """Pairs of channels that a Delaunay triangulation of random places joins."""
    triangles = Delaunay(np.random.default_rng(seed).random((channels, 2))).simplices
    pairs = {tuple(sorted((int(a), int(b)))) for tri in triangles for a, b in (tri[:2], tri[1:], tri[::2])}
    return np.array(sorted(pairs), np.int64)


def critical_t(units: int, p: float) -> float:
    return float(stats.t.isf(p / 2, units - 1))


def products(matrices: list[np.ndarray], data: list[np.ndarray], panel: int = 32) -> None:
    """The bare products of relabelling matrices with flat data, float32, in panels of rows."""
    buffer = np.empty((panel, data[0].shape[1]), np.float32)
    for matrix, flat in zip(matrices, data, strict=True):
        for first in range(0, len(matrix), panel):
            part = matrix[first : first + panel]
            np.dot(part, flat, out=buffer[: len(part)])


def t_maps(values: np.ndarray, signs: np.ndarray):
    """The t map of each row of signs, by numpy."""
    units = len(values)
    flat = values.reshape(units, -1)
    squares = (flat * flat).sum(axis=0)
    for row in signs:
        mean = (row @ flat) / np.float32(units)
        yield (mean / np.sqrt((squares / np.float32(units) - mean * mean) / np.float32(units - 1))).reshape(
            values.shape[1:]
        )


def loop_of_masses(
    values: np.ndarray, signs: np.ndarray, critical: float, edges: np.ndarray | None = None
) -> np.ndarray:
    """The ordinary loop: t map, label, sum, largest, for each relabelling."""
    structure = np.zeros((3, 3, 3), int)
    structure[1, 1, :] = structure[1, :, 1] = 1
    null = []
    for t in t_maps(values, signs):
        best = 0.0
        for beyond in (t > critical, t < -critical):
            labels, number = ndimage.label(beyond, structure)
            if number == 0:
                continue
            part = labels.ravel()
            if edges is not None:
                first, second = [], []
                for a, b in edges:
                    both = beyond[a] & beyond[b]
                    first.append(labels[a][both])
                    second.append(labels[b][both])
                pairs = (np.concatenate(first), np.concatenate(second))
                graph = coo_matrix((np.ones(len(pairs[0])), pairs), shape=(number + 1,) * 2)
                part = connected_components(graph, directed=False)[1][part]
            best = max(best, np.abs(np.bincount(part, weights=np.where(beyond, t, 0).ravel())).max())
        null.append(best)
    return np.array(null)


def loop_of_enhancement(values: np.ndarray, signs: np.ndarray, steps: int = 100) -> np.ndarray:
    """The sum over 100 heights with scipy.ndimage.label, for each relabelling; E = 0.5, H = 2."""
    null = []
    for t in t_maps(values, signs):
        t = t[0]
        best = 0.0
        for height in (np.maximum(t, 0), np.maximum(-t, 0)):
            total = np.zeros(t.shape)
            step = height.max() / steps
            for k in range(1, steps + 1):
                labels, _ = ndimage.label(height >= k * step)
                extent = np.bincount(labels.ravel()).astype(float)
                extent[0] = 0.0
                total += np.sqrt(extent)[labels] * (k * step) ** 2 * step
            best = max(best, total.max())
        null.append(best)
    return np.array(null)
