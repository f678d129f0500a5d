"""Threshold-free cluster enhancement, exact.

The enhanced value of a point is the integral over heights h from 0 to its own of e(h)^E * h^H dh, where e(h) is the extent
of the component of points of at least height h that holds it (Smith & Nichols 2009, NeuroImage 44:83).  Between two heights at
which the component changes e is constant, so the integral is a finite sum; no step size.  The points are visited once,
from the highest down: each joins the components of its higher neighbours.  A component carries its extent,
the height at which that last changed, and what its points have gathered since they joined.  Signs are enhanced apart.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled

__all__ = ["enhanced_map", "largest_enhanced"]


@compiled
def _top(parent, point):
    while parent[point] != point:
        point = parent[point]
    return point


@compiled
def _height_integral(height, height_power):
    """Integral of h^H from 0 to the height."""
    if height_power == 2.0:
        return height * height * height / 3.0
    if height_power == 1.0:
        return height * height / 2.0
    return height ** (height_power + 1.0) / (height_power + 1.0)


@compiled
def _neighbour_lists(channels, edges):
    """Channels joined to each channel: start (channels + 1,) into joined."""
    start = np.zeros(channels + 1, np.int64)
    for e in range(edges.shape[0]):
        start[edges[e, 0] + 1] += 1
        start[edges[e, 1] + 1] += 1
    for c in range(channels):
        start[c + 1] += start[c]
    joined = np.empty(start[channels], np.int64)
    place = start[:channels].copy()
    for e in range(edges.shape[0]):
        a = edges[e, 0]
        b = edges[e, 1]
        joined[place[a]] = b
        place[a] += 1
        joined[place[b]] = a
        place[b] += 1
    return start, joined


@compiled
def _enhance_one_sign(statistic, sign, extent_power, height_power, edges, out):
    """Write the enhanced values of the points of one sign into out (points,), with that sign."""
    channels, frequencies, times = statistic.shape
    plane = frequencies * times
    flat = statistic.reshape(-1)
    points = flat.shape[0]
    height = np.zeros(points, np.float64)
    chosen = 0
    for k in range(points):
        value = sign * np.float64(flat[k])
        if value > 0:
            height[k] = value
            chosen += 1
    order = np.argsort(-height)
    start, joined = _neighbour_lists(channels, edges)
    parent = np.full(points, -1, np.int64)
    extent = np.zeros(points, np.int64)
    level = np.zeros(points, np.float64)
    gathered = np.zeros(points, np.float64)
    around = np.empty(4 + channels, np.int64)
    for i in range(chosen):
        here = order[i]
        channel = here // plane
        within = here - channel * plane
        time = within % times
        now = _height_integral(height[here], height_power)
        parent[here] = here
        extent[here] = 1
        level[here] = now
        gathered[here] = 0.0
        number = 0
        if time > 0:
            around[number] = here - 1
            number += 1
        if time < times - 1:
            around[number] = here + 1
            number += 1
        if within >= times:
            around[number] = here - times
            number += 1
        if within < plane - times:
            around[number] = here + times
            number += 1
        for j in range(start[channel], start[channel + 1]):
            around[number] = joined[j] * plane + within
            number += 1
        root = here
        for j in range(number):
            if parent[around[j]] < 0:
                continue
            other = _top(parent, around[j])
            if other == root:
                continue
            gathered[other] += extent[other] ** extent_power * (level[other] - now)
            level[other] = now
            if extent[other] > extent[root]:
                root, other = other, root
            # What `other` has gathered more than `root` stays with its points when the two go on as one.
            parent[other] = root
            gathered[other] -= gathered[root]
            extent[root] += extent[other]
    for i in range(chosen):
        here = order[i]
        root = _top(parent, here)
        value = gathered[root] + extent[root] ** extent_power * level[root]
        while here != root:
            value += gathered[here]
            here = parent[here]
        out[order[i]] = sign * value


@compiled
def enhanced_map(statistic, tail, extent_power, height_power, edges):
    """The enhanced map of a statistic map (channels, frequencies, times), float64.

    Positive and negative points are enhanced apart and keep their sign; tail 0 both, 1 positive only, 2 negative only.
    Points of the other sign get 0, NaN stays NaN.
    """
    result = np.zeros(statistic.shape, np.float64)
    out = result.reshape(-1)
    flat = statistic.reshape(-1)
    if tail != 2:
        _enhance_one_sign(statistic, 1.0, extent_power, height_power, edges, out)
    if tail != 1:
        _enhance_one_sign(statistic, -1.0, extent_power, height_power, edges, out)
    for k in range(flat.shape[0]):
        if np.isnan(flat[k]):
            out[k] = np.nan
    return result


@compiled
def largest_enhanced(statistic, tail, extent_power, height_power, edges):
    """Largest |enhanced value| of a map in the tail that is tested; 0 when there is none."""
    enhanced = enhanced_map(statistic, tail, extent_power, height_power, edges).reshape(-1)
    best = 0.0
    for k in range(enhanced.shape[0]):
        value = abs(enhanced[k])
        if value > best:
            best = value
    return best
