"""Threshold-free cluster enhancement, exact.

The enhanced value of a point is the integral over heights h from 0 to its own of e(h)^E * h^H dh, where e(h) is the
extent
of the component of points of at least height h that holds it (Smith & Nichols 2009, NeuroImage 44:83).  Between two
heights at
which the component changes e is constant, so the integral is a finite sum; no step size.

The points are visited once, from the highest |value| down, both signs in one go.  A point without a higher neighbour
of its sign is a peak and begins a component; any other joins the component of a higher neighbour, and where its higher
neighbours belong to different components they become one.  A component carries its extent, the height at which that
last
changed, and what its points have gathered since they joined.  Only peaks are nodes of the forest of components, so
the walk from a point to its component is short.
"""

from __future__ import annotations

import math

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined

__all__ = ["enhanced_map", "enhancement_workspace", "largest_enhanced"]

_DIGIT = 11  # bits of a radix pass
_BUCKETS = 1 << _DIGIT


def enhancement_workspace(shape: tuple[int, int, int]) -> tuple[np.ndarray, ...]:
    """Working space for maps of one shape: padded heights, order and its scratch, buckets, earlier neighbours,
    hills, components."""
    channels, frequencies, times = shape
    points = channels * frequencies * times
    padded = channels * (frequencies + 2) * (times + 2)
    return (
        np.zeros(padded),
        np.empty(points, np.uint64),
        np.empty(points, np.uint64),
        np.empty((2, _BUCKETS), np.int64),
        np.zeros(padded, np.uint8),
        np.zeros(padded, np.int32),
        np.empty(points, np.int32),
        np.empty((3, points)),
    )


@inlined
def _extent_to(extent, power):
    return math.sqrt(extent) if power == 0.5 else extent**power


@inlined
def _height_integral(height, power):
    """Integral of h^H from 0 to the height."""
    if power == 2.0:
        return height * height * height * (1.0 / 3.0)
    if power == 1.0:
        return height * height * 0.5
    return height ** (power + 1.0) / (power + 1.0)


@compiled
def _pad(statistic, tail, padded):
    """Copy the map into padded, with a border of 0 around each channel; what takes no part (NaN, the other tail)
    becomes 0."""
    channels, frequencies, times = statistic.shape
    pitch = times + 2
    for c in range(channels):
        for f in range(frequencies):
            row = (c * (frequencies + 2) + f + 1) * pitch + 1
            for t in range(times):
                value = np.float64(statistic[c, f, t])
                if tail == 1:
                    value = value if value > 0 else 0.0
                elif tail == 2:
                    value = value if value < 0 else 0.0
                else:
                    value = value if value == value else 0.0
                padded[row + t] = value


@compiled
def _highest(padded, pitch):
    """Largest |value|; column by column first, which needs no order of comparisons."""
    best = np.zeros(pitch, np.float64)
    for row in range(padded.shape[0] // pitch):
        for t in range(pitch):
            value = abs(padded[row * pitch + t])
            best[t] = value if value > best[t] else best[t]
    highest = 0.0
    for t in range(pitch):
        highest = max(highest, best[t])
    return highest


@compiled
def _sort_by_height(shape, padded, order, scratch, buckets):
    """Fill order with the padded places of all points that are not 0, highest |value| first, ties by place; returns
    how many.

    A key of 22 bits that falls as |value| grows, nearly evenly filled: the upper bits of the float32 of |value| + a
    part of the
    highest.  Two radix passes over the keys, then an insertion sort by the values themselves, which finds next to
    nothing to move.
    """
    channels, frequencies, times = shape
    pitch = times + 2
    highest = _highest(padded, pitch)
    lift = min(1.0, 0.125 * highest)
    one = np.empty(1, np.float32)
    bits = one.view(np.int32)
    one[0] = highest + lift
    top = np.int64(bits[0])
    one[0] = lift
    span = top - np.int64(bits[0])
    shift = 0
    while span >> shift >= _BUCKETS * _BUCKETS:
        shift += 1
    lifted = np.empty(times, np.float32)
    keys = lifted.view(np.int32)
    buckets[:] = 0
    number = 0
    for c in range(channels):
        for f in range(frequencies):
            row = (c * (frequencies + 2) + f + 1) * pitch + 1
            for t in range(times):
                lifted[t] = abs(padded[row + t]) + lift
            for t in range(times):
                key = (top - np.int64(keys[t])) >> shift
                scratch[number] = np.uint64((key << 32) | (row + t))
                taken = padded[row + t] != 0
                buckets[0, key & (_BUCKETS - 1)] += taken
                buckets[1, key >> _DIGIT] += taken
                number += taken
    for digit in range(2):
        begin = 0
        for b in range(_BUCKETS):
            size = buckets[digit, b]
            buckets[digit, b] = begin
            begin += size
    for i in range(number):
        entry = scratch[i]
        b = (entry >> np.uint64(32)) & np.uint64(_BUCKETS - 1)
        order[buckets[0, b]] = entry
        buckets[0, b] += 1
    for i in range(number):
        entry = order[i]
        b = entry >> np.uint64(32 + _DIGIT)
        scratch[buckets[1, b]] = entry
        buckets[1, b] += 1
    last = np.inf
    for i in range(number):
        entry = scratch[i]
        height = abs(padded[entry & np.uint64(0xFFFFFFFF)])
        k = i
        # Only values with the same key can be out of order.
        if height > last:
            while k > 0 and abs(padded[order[k - 1] & np.uint64(0xFFFFFFFF)]) < height:
                order[k] = order[k - 1]
                k -= 1
        else:
            last = height
        order[k] = entry
    return number


@compiled
def _mark_earlier(shape, padded, earlier):
    """Bits of earlier: the neighbour before (1) and after (2) in time, at the lower (4) and the higher (8) frequency
    has the
    same sign and comes earlier in the order: it is higher, or as high and at a lower place.
    """
    channels, frequencies, times = shape
    pitch = times + 2
    for c in range(channels):
        for f in range(frequencies):
            row = (c * (frequencies + 2) + f + 1) * pitch
            here = padded[row : row + pitch]
            lower = padded[row - pitch : row]
            higher = padded[row + pitch : row + 2 * pitch]
            out = earlier[row : row + pitch]
            for t in range(1, times + 1):
                value = here[t]
                sign = 1.0 if value > 0 else -1.0
                height = abs(value)
                mask = 1 * (sign * here[t - 1] >= height) + 2 * (sign * here[t + 1] > height)
                mask += 4 * (sign * lower[t] >= height) + 8 * (sign * higher[t] > height)
                out[t] = mask


@inlined
def _component(parent, peak):
    while parent[peak] != peak:
        peak = np.int64(parent[peak])
    return peak


@inlined
def _bring_down(component, now, power, extent, level, gathered):
    """What the points of a component gather between its last change and the height `now`."""
    gathered[component] += _extent_to(extent[component], power) * (level[component] - now)
    level[component] = now


@compiled
def _merge(a, b, now, power, keep_points, parent, extent, level, gathered):
    """Make two components one at the height `now`; returns which of them carries on.

    keep_points: what a point has gathered is the sum over its way to the root, so the difference stays with the one
    that ends.
    Otherwise only the most that any of its points has gathered is carried.
    """
    _bring_down(a, now, power, extent, level, gathered)
    _bring_down(b, now, power, extent, level, gathered)
    if extent[a] < extent[b]:
        a, b = b, a
    parent[b] = a
    if keep_points:
        gathered[b] -= gathered[a]
    elif gathered[b] > gathered[a]:
        gathered[a] = gathered[b]
    extent[a] += extent[b]
    return a


@compiled
def _walk_down(
    shape,
    number,
    extent_power,
    height_power,
    start,
    joined,
    keep_points,
    padded,
    order,
    earlier,
    hill,
    parent,
    components,
    since,
):
    """Visit the points from the highest down; returns the number of peaks.

    hill[place]: the peak whose component the point joined; components: extent, level and gathered of each peak.
    With keep_points, since[i] is what the component had gathered when the i-th point of the order joined it.
    """
    channels, frequencies, times = shape
    pitch = times + 2
    plane = pitch * (frequencies + 2)
    extent = components[0]
    level = components[1]
    gathered = components[2]
    steps = np.zeros(16, np.int64)
    for mask in range(1, 16):
        steps[mask] = -1 if mask & 1 else 1 if mask & 2 else -pitch if mask & 4 else pitch
    peaks = 0
    for i in range(number):
        at = np.int64(order[i] & np.uint64(0xFFFFFFFF))
        height = abs(padded[at])
        now = _height_integral(height, height_power)
        mask = earlier[at]
        own = -1
        if mask != 0:
            # Any earlier neighbour will do; looked up, as a branch would be mispredicted too often.
            own = np.int64(hill[at + steps[mask]])
        if start.shape[0] > 1:
            channel = at // plane
            for j in range(start[channel], start[channel + 1]):
                other = at + (joined[j] - channel) * plane
                value = padded[other]
                same = (value > 0) == (padded[at] > 0) and value != 0
                if same and (abs(value) > height or (abs(value) == height and other < at)):
                    if own < 0:
                        own = np.int64(hill[other])
                    elif hill[other] != own:
                        a = _component(parent, own)
                        b = _component(parent, np.int64(hill[other]))
                        if a != b:
                            _merge(a, b, now, extent_power, keep_points, parent, extent, level, gathered)
        if own < 0:
            parent[peaks] = peaks
            extent[peaks] = 1.0
            level[peaks] = now
            gathered[peaks] = 0.0
            hill[at] = peaks
            if keep_points:
                since[i] = 0.0
            peaks += 1
            continue
        root = _component(parent, own)
        different = (mask & 1 != 0) & (hill[at - 1] != own) & (hill[at - 1] != root)
        different |= (mask & 2 != 0) & (hill[at + 1] != own) & (hill[at + 1] != root)
        different |= (mask & 4 != 0) & (hill[at - pitch] != own) & (hill[at - pitch] != root)
        different |= (mask & 8 != 0) & (hill[at + pitch] != own) & (hill[at + pitch] != root)
        if different:
            for k in range(4):
                if mask & (1 << k):
                    step = pitch if k > 1 else 1
                    other = _component(parent, np.int64(hill[at + step if k & 1 else at - step]))
                    if other != root:
                        root = _merge(root, other, now, extent_power, keep_points, parent, extent, level, gathered)
        _bring_down(root, now, extent_power, extent, level, gathered)
        extent[root] += 1.0
        hill[at] = root
        if keep_points:
            since[i] = gathered[root]
    return peaks


@compiled
def _neighbour_lists(channels, edges):
    """Channels joined to each channel: start (channels + 1,) into joined; without edges an empty pair."""
    if edges.shape[0] == 0:
        return np.zeros(1, np.int64), np.zeros(0, np.int64)
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
def _prepare(statistic, tail, padded, order, scratch, buckets, earlier):
    _pad(statistic, tail, padded)
    number = _sort_by_height(statistic.shape, padded, order, scratch, buckets)
    _mark_earlier(statistic.shape, padded, earlier)
    return number


@compiled
def enhanced_map(statistic, tail, extent_power, height_power, edges, space):
    """The enhanced map of a statistic map (channels, frequencies, times), float64.

    Positive and negative points are enhanced apart and keep their sign; tail 0 both, 1 positive only, 2 negative only.
    Points of the other sign get 0, NaN stays NaN.  space: see `enhancement_workspace`.
    """
    padded, order, scratch, buckets, earlier, hill, parent, components = space
    channels, frequencies, times = statistic.shape
    number = _prepare(statistic, tail, padded, order, scratch, buckets, earlier)
    start, joined = _neighbour_lists(channels, edges)
    since = np.empty(number, np.float64)
    peaks = _walk_down(
        statistic.shape,
        number,
        extent_power,
        height_power,
        start,
        joined,
        True,
        padded,
        order,
        earlier,
        hill,
        parent,
        components,
        since,
    )
    extent = components[0]
    level = components[1]
    gathered = components[2]
    for peak in range(peaks):
        if parent[peak] == peak:
            _bring_down(peak, 0.0, extent_power, extent, level, gathered)
    result = np.zeros(statistic.shape, np.float64)
    pitch = times + 2
    for i in range(number):
        at = np.int64(order[i] & np.uint64(0xFFFFFFFF))
        node = np.int64(hill[at])
        value = gathered[node]
        while parent[node] != node:
            node = np.int64(parent[node])
            value += gathered[node]
        row = at // pitch
        channel = row // (frequencies + 2)
        frequency = row - channel * (frequencies + 2) - 1
        result[channel, frequency, at - row * pitch - 1] = math.copysign(value - since[i], padded[at])
    for c in range(channels):
        for f in range(frequencies):
            for t in range(times):
                if statistic[c, f, t] != statistic[c, f, t]:
                    result[c, f, t] = np.nan
    return result


@compiled
def largest_enhanced(statistic, tail, extent_power, height_power, edges, space):
    """Largest |enhanced value| of a map in the tail that is tested; 0 when there is none."""
    padded, order, scratch, buckets, earlier, hill, parent, components = space
    number = _prepare(statistic, tail, padded, order, scratch, buckets, earlier)
    start, joined = _neighbour_lists(statistic.shape[0], edges)
    since = np.empty(0, np.float64)
    peaks = _walk_down(
        statistic.shape,
        number,
        extent_power,
        height_power,
        start,
        joined,
        False,
        padded,
        order,
        earlier,
        hill,
        parent,
        components,
        since,
    )
    best = 0.0
    for peak in range(peaks):
        if parent[peak] == peak:
            _bring_down(peak, 0.0, extent_power, components[0], components[1], components[2])
            best = max(best, components[2][peak])
    return best
