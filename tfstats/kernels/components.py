"""Connected parts of one map, and the number that a map contributes to a null distribution.

Two points are neighbours when they are next to each other along frequency or along time (no diagonals), or lie at the
same frequency and time in two channels that `edges` joins; they belong to one component when they also have the same
sign.  A map is (channels, frequencies, times); `edges` is (edges, 2) int64.

Codes.  tail: 0 either sign, 1 greater, 2 less.  summary: 0 largest |statistic|, 1 cluster mass, 2 cluster extent,
3 largest threshold-free enhanced value (`enhancement.py`).
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled
from tfstats.kernels.enhancement import enhancement_workspace, largest_enhanced

__all__ = ["label_components", "map_workspace", "mark_beyond", "summarise_map"]

MAXIMUM, MASS, EXTENT, ENHANCED = 0, 1, 2, 3
EITHER, GREATER, LESS = 0, 1, 2


@compiled
def _root(parent, point):
    while parent[point] != point:
        parent[point] = parent[parent[point]]
        point = parent[point]
    return point


@compiled
def _join(parent, a, b):
    """Unite two components; the earlier point becomes the root of both."""
    a = _root(parent, a)
    b = _root(parent, b)
    if a < b:
        parent[b] = a
    else:
        parent[a] = b


@compiled
def connect(beyond, edges, parent):
    """Fill parent (points,) so that following it leads from each point beyond to the first point of its component."""
    channels, frequencies, times = beyond.shape
    flat = beyond.reshape(-1)
    plane = frequencies * times
    for c in range(channels):
        for f in range(frequencies):
            start = c * plane + f * times
            for t in range(times):
                here = start + t
                sign = flat[here]
                if sign == 0:
                    continue
                parent[here] = here
                if t > 0 and flat[here - 1] == sign:
                    parent[here] = parent[here - 1]
                if f > 0 and flat[here - times] == sign:
                    _join(parent, here - times, here)
    for e in range(edges.shape[0]):
        first = edges[e, 0] * plane
        second = edges[e, 1] * plane
        met_before = False
        for k in range(plane):
            sign = flat[first + k]
            meet = sign != 0 and flat[second + k] == sign
            # Along a run of meeting points one join is enough; a new row starts a new run.
            if meet and not (met_before and k % times != 0 and flat[first + k - 1] == sign):
                _join(parent, first + k, second + k)
            met_before = meet


@compiled
def mark_beyond(statistic, critical, tail, beyond):
    """Fill beyond (int8) with +1, -1 or 0: points strictly beyond the critical value in the tail that is tested."""
    flat = statistic.reshape(-1)
    limit = critical.reshape(-1)
    out = beyond.reshape(-1)
    for k in range(flat.shape[0]):
        sign = 0
        if tail != 2 and flat[k] > limit[k]:
            sign = 1
        elif tail != 1 and -flat[k] > limit[k]:
            sign = -1
        out[k] = sign


@compiled
def label_components(statistic, beyond, edges):
    """Number the connected components of a map.

    Parameters
    ----------
    statistic : (channels, frequencies, times) float
        Only its shape is used; where it is NaN, `beyond` must be 0.
    beyond : (channels, frequencies, times) int8
        +1 or -1 for a point beyond the threshold with that sign, else 0.
    edges : (edges, 2) int64
        Channels that are joined.

    Returns
    -------
    labels : (channels, frequencies, times) int32, 0 outside, components numbered from 1 by their first point in C order
    number : int
    """
    flat = beyond.reshape(-1)
    parent = np.zeros(flat.shape[0], np.int64)
    connect(beyond, edges, parent)
    labels = np.zeros(beyond.shape, np.int32)
    out = labels.reshape(-1)
    number = 0
    for k in range(flat.shape[0]):
        if flat[k] != 0:
            root = _root(parent, k)
            if root == k:
                number += 1
                out[k] = number
            else:
                out[k] = out[root]
    return labels, number


@compiled
def largest_statistic(statistic, tail):
    """Largest extremeness of a map: |value|, value or -value by the tail; 0 when nothing is above 0."""
    flat = statistic.reshape(-1)
    best = 0.0
    for k in range(flat.shape[0]):
        value = np.float64(flat[k])
        if tail == 2 or (tail == 0 and value < 0):
            value = -value
        if value > best:
            best = value
    return best


@compiled
def largest_component(statistic, beyond, edges, by_extent, parent, total):
    """Largest mass (sum of |statistic|) or extent (number of points) of a component; 0 without one.

    parent (points,) int64 and total (points,) float64 are working space.
    """
    connect(beyond, edges, parent)
    flat = beyond.reshape(-1)
    value = statistic.reshape(-1)
    best = 0.0
    for k in range(flat.shape[0]):
        if flat[k] != 0:
            part = 1.0 if by_extent else abs(np.float64(value[k]))
            root = _root(parent, k)
            # A root is the first point of its component, so it is reached before the others.
            if root == k:
                total[k] = part
            else:
                total[root] += part
            if total[root] > best:
                best = total[root]
    return best


@compiled
def summarise_map(
    statistic, critical, tail, summary, edges, extent_power, height_power, parent, total, beyond, enhancing
):
    """The one number by which a map enters the null distribution.

    Parameters
    ----------
    statistic : (channels, frequencies, times) float, NaN where untested
    critical : (channels, frequencies, times) float64
        Cluster-forming critical value of each point, strict; NaN or infinity where untested.  Not used by
        the maximum and the enhanced value.
    tail, summary : int
        Codes, see the module.
    edges : (edges, 2) int64
    extent_power, height_power : float
        E and H of the enhanced value.
    parent, total, beyond, enhancing
        Working space, overwritten (`map_workspace`).
    """
    if summary == 0:
        return largest_statistic(statistic, tail)
    if summary == 3:
        return largest_enhanced(statistic, tail, extent_power, height_power, edges, enhancing)
    mark_beyond(statistic, critical, tail, beyond)
    return largest_component(statistic, beyond, edges, summary == 2, parent, total)


def map_workspace(shape: tuple[int, int, int]) -> tuple[object, ...]:
    """Working space of `summarise_map` for maps of one shape: parent, total, beyond, and that of the enhancement."""
    points = int(np.prod(shape))
    return np.empty(points, np.int64), np.empty(points), np.empty(shape, np.int8), enhancement_workspace(shape)
