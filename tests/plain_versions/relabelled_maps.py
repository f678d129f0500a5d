"""Slow twins of the engine: statistics of one relabelling, components, enhancement and null, written from the formulas.

numpy and scipy only; nothing of tfstats.
"""

from __future__ import annotations

import numpy as np
from scipy import ndimage, sparse, stats
from scipy.sparse.csgraph import connected_components

LARGEST_T = 1e6


def capped(numerator: np.ndarray, denominator: np.ndarray, most: float) -> np.ndarray:
    """numerator / denominator, at most `most` in size, 0 where the numerator is 0."""
    out = np.zeros(numerator.shape)
    there = numerator != 0
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        ratio = np.abs(numerator) / denominator
    ratio = np.where((ratio >= 0) & (ratio < most), ratio, most)
    out[there] = np.copysign(ratio, numerator)[there]
    return out


def one_sample_t(values: np.ndarray, flips: np.ndarray, counts: np.ndarray | None = None) -> np.ndarray:
    """t of flipped values (units, ...): mean / (SD / sqrt(n)), SD with ddof 1; missing units are 0 and not counted."""
    x = np.where(flips != 0, -1.0, 1.0).reshape(-1, *[1] * (values.ndim - 1)) * values.astype(np.float64)
    n = np.full(values.shape[1:], float(len(values))) if counts is None else counts.astype(np.float64)
    n = np.maximum(n, 1.0)
    mean = x.sum(axis=0) / n
    missing = len(values) - n
    # Each missing unit is a 0 that is `mean` away from the mean: taken out again.
    deviations = ((x - mean) ** 2).sum(axis=0) - missing * mean**2
    with np.errstate(divide="ignore", invalid="ignore"):
        error = np.sqrt(np.maximum(deviations, 0.0) / np.where(n > 1, n - 1, np.nan) / n)
    return np.where(n > 1, capped(mean, error, LARGEST_T), 0.0)


def pooled_t(values: np.ndarray, members: np.ndarray) -> np.ndarray:
    x = values.astype(np.float64)
    one, two = x[members != 0], x[members == 0]
    n1, n2 = len(one), len(two)
    within = ((one - one.mean(axis=0)) ** 2).sum(axis=0) + ((two - two.mean(axis=0)) ** 2).sum(axis=0)
    error = np.sqrt(within / (n1 + n2 - 2) * (1 / n1 + 1 / n2))
    return capped(one.mean(axis=0) - two.mean(axis=0), error, LARGEST_T)


def welch_score(values: np.ndarray, members: np.ndarray) -> np.ndarray:
    """Normal score of Welch's t under its Welch-Satterthwaite degrees of freedom."""
    x = values.astype(np.float64)
    one, two = x[members != 0], x[members == 0]
    e1, e2 = one.var(axis=0, ddof=1) / len(one), two.var(axis=0, ddof=1) / len(two)
    t = capped(one.mean(axis=0) - two.mean(axis=0), np.sqrt(e1 + e2), LARGEST_T)
    with np.errstate(divide="ignore", invalid="ignore"):
        df = (e1 + e2) ** 2 / (e1**2 / (len(one) - 1) + e2**2 / (len(two) - 1))
    df = np.where(np.isfinite(df), df, len(x) - 2.0)
    return np.copysign(stats.norm.isf(stats.t.sf(np.abs(t), df)), t)


def f_of_flips(values: np.ndarray, flips: np.ndarray) -> np.ndarray:
    """F of k conditions from the k - 1 orthonormal contrasts (units, components, ...) of each unit, one sign a unit."""
    x = np.where(flips != 0, -1.0, 1.0).reshape(-1, *[1] * (values.ndim - 1)) * values.astype(np.float64)
    n, components = x.shape[:2]
    mean = x.mean(axis=0)
    between = n * (mean**2).sum(axis=0) / components
    left = ((x - mean) ** 2).sum(axis=(0, 1)) / ((n - 1) * components)
    return capped(between, left, LARGEST_T**2)


def f_of_labels(values: np.ndarray, labels: np.ndarray) -> np.ndarray:
    """One-way F."""
    x = values.astype(np.float64)
    groups = [x[labels == g] for g in range(int(labels.max()) + 1)]
    grand = x.mean(axis=0)
    between = sum(len(g) * (g.mean(axis=0) - grand) ** 2 for g in groups) / (len(groups) - 1)
    within = sum(((g - g.mean(axis=0)) ** 2).sum(axis=0) for g in groups) / (len(x) - len(groups))
    return capped(between, within, LARGEST_T**2)


def components(beyond: np.ndarray, edges: np.ndarray) -> tuple[np.ndarray, int]:
    """Labels from 1 in order of first points: connected parts of the graph of neighbouring points of one sign."""
    number = np.arange(beyond.size).reshape(beyond.shape)
    pairs = [(number[:, :, 1:], number[:, :, :-1]), (number[:, 1:], number[:, :-1])]
    pairs += [(number[a], number[b]) for a, b in edges]
    first = np.concatenate([a.ravel() for a, _ in pairs])
    second = np.concatenate([b.ravel() for _, b in pairs])
    sign = beyond.ravel()
    joined = (sign[first] != 0) & (sign[first] == sign[second])
    graph = sparse.coo_matrix((np.ones(joined.sum()), (first[joined], second[joined])), shape=(beyond.size,) * 2)
    part = connected_components(graph, directed=False)[1]
    labels = np.zeros(beyond.size, int)
    there = np.flatnonzero(sign)
    _, start, inverse = np.unique(part[there], return_index=True, return_inverse=True)
    order = np.argsort(np.argsort(start))
    labels[there] = order[inverse] + 1
    return labels.reshape(beyond.shape), len(start)


def components_by_image_labelling(beyond: np.ndarray) -> list[set[int]]:
    """The parts of channels that are not joined, by scipy.ndimage.label of each channel and sign."""
    number = np.arange(beyond.size).reshape(beyond.shape)
    parts = []
    for channel in range(len(beyond)):
        for sign in (1, -1):
            labels, count = ndimage.label(beyond[channel] == sign)
            parts += [set(number[channel][labels == i + 1].tolist()) for i in range(count)]
    return parts


def beyond_map(statistic: np.ndarray, critical: np.ndarray | float, tail: str) -> np.ndarray:
    with np.errstate(invalid="ignore"):
        up = (statistic > critical) & (tail != "less")
        down = (-statistic > critical) & (tail != "greater")
    return up.astype(int) - down.astype(int)


def enhanced(
    statistic: np.ndarray, tail: str, extent_power: float, height_power: float, edges: np.ndarray
) -> np.ndarray:
    """The integral of e^E * h^H over the heights that occur, signs apart; NaN stays."""
    out = np.zeros(statistic.shape)
    for sign in (1, -1):
        if tail == ("less" if sign == 1 else "greater"):
            continue
        height = np.where(np.isnan(statistic), 0.0, np.maximum(sign * statistic, 0.0))
        low = 0.0
        for high in np.unique(height[height > 0]):
            labels, _ = components((height >= high).astype(int), edges)
            extent = np.bincount(labels.ravel())[labels].astype(float)
            step = (high ** (height_power + 1) - low ** (height_power + 1)) / (height_power + 1)
            out += np.where(labels > 0, sign * extent**extent_power * step, 0.0)
            low = high
    return np.where(np.isnan(statistic), np.nan, out)


def summary_of_map(
    statistic: np.ndarray,
    summary: str,
    tail: str,
    critical: np.ndarray | float,
    edges: np.ndarray,
    exponents: tuple[float, float] = (0.5, 2.0),
) -> float:
    if summary == "maximum":
        size = {"two-sided": np.abs(statistic), "greater": statistic, "less": -statistic}[tail]
        return max(0.0, float(np.nanmax(size, initial=0.0)))
    if summary == "enhanced":
        return float(np.nanmax(np.abs(enhanced(statistic, tail, *exponents, edges)), initial=0.0))
    labels, count = components(beyond_map(statistic, critical, tail), edges)
    if count == 0:
        return 0.0
    weight = None if summary == "extent" else np.abs(np.nan_to_num(statistic)).ravel()
    return float(np.bincount(labels.ravel(), weights=weight, minlength=count + 1)[1:].max())


def counts_at_least(maps: list[np.ndarray], tail: str, tolerance: float) -> np.ndarray:
    size = [{"two-sided": np.abs(m), "greater": m, "less": -m}[tail] for m in maps]
    limit = size[0] - tolerance * np.abs(size[0])
    return np.sum([m >= limit for m in size], axis=0)
