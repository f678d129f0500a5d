"""A whole permutation test as a plain loop: numpy, scipy and itertools only.  May not import tfstats."""

import itertools

import numpy as np
from scipy import ndimage, stats


def all_flips(units, two_sided):
    """Every distinct row of signs; two-sided a global flip changes nothing, so the last sign stays."""
    free = units - 1 if two_sided else units
    for signs in itertools.product((1, -1), repeat=free):
        yield np.array(signs + (1,) * (units - free), dtype=float)


def t_map(values):
    """One-sample t over axis 0, NaN where it is not defined."""
    n = len(values)
    with np.errstate(divide="ignore", invalid="ignore"):
        return values.mean(axis=0) / (values.std(axis=0, ddof=1) / np.sqrt(n))


def components(beyond, edges):
    """Labels of a (channels, frequencies, times) boolean map by repeated flooding along neighbours."""
    labels = np.zeros(beyond.shape, int)
    neighbours = {channel: set() for channel in range(beyond.shape[0])}
    for a, b in edges:
        neighbours[a].add(b)
        neighbours[b].add(a)
    number = 0
    for start in zip(*np.nonzero(beyond)):
        if labels[start]:
            continue
        number += 1
        stack = [start]
        labels[start] = number
        while stack:
            c, f, t = stack.pop()
            around = [(c, f - 1, t), (c, f + 1, t), (c, f, t - 1), (c, f, t + 1)] + [(o, f, t) for o in neighbours[c]]
            for point in around:
                inside = all(0 <= place < size for place, size in zip(point, beyond.shape))
                if inside and beyond[point] and not labels[point]:
                    labels[point] = number
                    stack.append(point)
    return labels, number


def largest(t, threshold, tail, weigh, edges):
    """Largest cluster mass or extent, or largest extremeness of a point."""
    if weigh == "maximum":
        signed = {"two-sided": np.abs(t), "greater": t, "less": -t}[tail]
        return np.nanmax(signed)
    best = 0.0
    for sign in {"two-sided": (1, -1), "greater": (1,), "less": (-1,)}[tail]:
        beyond = np.nan_to_num(sign * t, nan=-np.inf) > threshold
        labels, number = components(beyond, edges)
        for label in range(1, number + 1):
            inside = np.abs(t[labels == label])
            best = max(best, inside.sum() if weigh == "mass" else inside.size)
    return best


def sign_flip_null(values, threshold, tail, weigh, edges):
    """One extremeness for every distinct row of signs; the observed labelling first."""
    return np.array(
        [
            largest(t_map(values * signs[:, None, None, None]), threshold, tail, weigh, edges)
            for signs in all_flips(len(values), tail == "two-sided")
        ]
    )


def point_p(values, tail, tolerance=1e-9):
    """Uncorrected p of each point over every distinct row of signs."""
    rows = [t_map(values * signs[:, None, None, None]) for signs in all_flips(len(values), tail == "two-sided")]
    signed = {"two-sided": np.abs, "greater": lambda t: t, "less": lambda t: -t}[tail]
    rows = np.array([signed(t) for t in rows])
    return (rows >= rows[0] - tolerance * np.abs(rows[0])).mean(axis=0)


def largest_by_ndimage(t, threshold):
    """Two-sided cluster mass of one channel (frequencies, times) with scipy.ndimage.label."""
    best = 0.0
    for sign in (1, -1):
        labels, number = ndimage.label(sign * t > threshold)
        if number:
            best = max(best, np.abs(ndimage.sum_labels(t, labels, np.arange(1, number + 1))).max())
    return best


def t_quantile(p, df):
    return stats.t.isf(p, df)
