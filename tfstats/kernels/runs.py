"""Runs: stretches of neighbouring times beyond the threshold, the pieces of which components are made.

A map of points (channel, frequency, time in C order) has far fewer runs than points beyond, so components are found among
runs.  A run is `place` = start * 128 + length (length at most 64; a longer stretch is several runs that touch)
and `mass`, the sum of the signed statistic over its points; its sign is the sign of its points.  The runs of a row of
relabelling lie in one list by ascending start.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined
from tfstats.kernels.vector_instructions import trailing_zeros

__all__ = ["append_runs", "largest_of_runs", "packed_flags", "row_starts_word", "run_workspace"]

WORD = 64


@inlined
def packed_flags(flags):
    """One word from 64 flags of one byte, 0 or 1: bit k is flag k.  flags is their view as 8 uint64."""
    word = np.uint64(0)
    for j in range(8):
        # The product moves the lowest bit of byte k of the eight to bit 56 + k.
        byte = (flags[j] * np.uint64(0x0102040810204080)) >> np.uint64(56)
        word |= byte << np.uint64(8 * j)
    return word


@compiled
def row_starts_word(first, times):
    """Bits of the 64 points from `first` on at which a new row of times begins."""
    word = np.uint64(0)
    at = (times - first % times) % times
    while at < WORD:
        word |= np.uint64(1) << np.uint64(at)
        at += times
    return word


@compiled
def append_runs(word, row_starts, values, first, place, mass, number):
    """Append the runs of one word to a list; returns the new number of runs, also when the list is too short for them.

    word: bit k set where values[k], the statistic at point first + k, is beyond.
    """
    room = place.shape[0]
    while word != 0:
        start = trailing_zeros(word)
        negative = values[start] < 0
        total = values[start]
        stop = start + 1
        while stop < WORD:
            bit = np.uint64(1) << np.uint64(stop)
            if (word & bit) == 0 or (row_starts & bit) != 0 or (values[stop] < 0) != negative:
                break
            total += values[stop]
            stop += 1
        if number < room:
            place[number] = ((first + start) << 7) | (stop - start)
            mass[number] = total
        number += 1
        if stop == WORD:
            break
        word &= ~((np.uint64(1) << np.uint64(stop)) - np.uint64(1))
    return number


@inlined
def _root(parent, run):
    while parent[run] != run:
        run = parent[run]
    return run


@inlined
def _join(parent, a, b):
    a = _root(parent, a)
    b = _root(parent, b)
    if a < b:
        parent[b] = a
    elif b < a:
        parent[a] = b


def run_workspace(room: int, channels: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Working space of `largest_of_runs` for lists of up to `room` runs: start, stop, parent, total, first of channel."""
    return (
        np.empty(room, np.int64),
        np.empty(room, np.int64),
        np.empty(room, np.int64),
        np.empty(room, np.float64),
        np.empty(channels + 1, np.int64),
    )


@compiled
def largest_of_runs(place, mass, number, times, plane, edges, by_extent, start, stop, parent, total, channel_first):
    """Largest |mass| or extent of a component of runs; 0 without runs.

    times: points of a row; plane: points of a channel; edges (edges, 2) channels that are joined.
    """
    channels = channel_first.shape[0] - 1
    channel = 0
    channel_first[0] = 0
    next_channel = plane
    reached = 0
    for j in range(number):
        begin = place[j] >> 7
        end = begin + (place[j] & 127)
        start[j] = begin
        stop[j] = end
        parent[j] = j
        while begin >= next_channel:
            channel += 1
            channel_first[channel] = j
            next_channel += plane
        if j > 0 and stop[j - 1] == begin and begin % times != 0 and (mass[j - 1] < 0) == (mass[j] < 0):
            parent[j] = parent[j - 1]
        low = begin - times
        if low < next_channel - plane:
            continue
        high = end - times
        while stop[reached] <= low:
            reached += 1
        k = reached
        while start[k] < high:
            if (mass[k] < 0) == (mass[j] < 0):
                _join(parent, k, j)
            k += 1
    while channel < channels:
        channel += 1
        channel_first[channel] = number
    for e in range(edges.shape[0]):
        a = channel_first[edges[e, 0]]
        a_stop = channel_first[edges[e, 0] + 1]
        b = channel_first[edges[e, 1]]
        b_stop = channel_first[edges[e, 1] + 1]
        shift = (edges[e, 1] - edges[e, 0]) * plane
        while a < a_stop and b < b_stop:
            if start[a] + shift < stop[b] and start[b] < stop[a] + shift and (mass[a] < 0) == (mass[b] < 0):
                _join(parent, a, b)
            if stop[a] + shift < stop[b]:
                a += 1
            else:
                b += 1
    best = 0.0
    for j in range(number):
        total[j] = 0.0
        part = np.float64(stop[j] - start[j]) if by_extent else mass[j]
        root = _root(parent, j)
        parent[j] = root
        total[root] += part
        best = max(best, abs(total[root]))
    return best
