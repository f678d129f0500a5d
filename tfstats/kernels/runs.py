"""Runs: stretches of neighbouring times beyond the threshold, the pieces of which components are made.

A map of points (channel, frequency, time in C order) has far fewer runs than points beyond, so components are found
among
runs.  A run is `place` = start * 128 + length (length at most 64; a longer stretch is several runs that touch)
and `mass`, the sum of the signed statistic over its points; its sign is the sign of its points.  The runs of a row of
relabelling lie in one list by ascending start, place and mass side by side: `places` int64 and `masses` float64 are
two views of
the same memory, entry 2 * j of the one and 2 * j + 1 of the other.
"""

from __future__ import annotations

import numpy as np

from tfstats.kernels.compile_policy import compiled, inlined
from tfstats.kernels.vector_instructions import LOOK_BACK, overlapping_runs, overlapping_runs_plainly, trailing_zeros

__all__ = ["append_runs", "largest_of_runs", "packed_flags", "row_starts_word", "run_lists", "run_workspace"]

WORD = 64
_APART = 1 << 30  # added to the places of negative runs, so that they meet no positive one; more points than a map has
_FAR = (1 << 31) - 1


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
def append_runs(word, row_starts, values, first, places, masses, number):
    """Append the runs of one word to a list; returns the new number of runs, also when the list is too short for them.

    word: bit k set where values[k], the statistic at point first + k, is beyond.
    """
    room = places.shape[0] // 2
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
            places[2 * number] = ((first + start) << 7) | (stop - start)
            masses[2 * number + 1] = total
        number += 1
        if stop == WORD:
            break
        word &= ~((np.uint64(1) << np.uint64(stop)) - np.uint64(1))
    return number


@inlined
def _root(parent, run):
    while parent[run] != run:
        run = np.int64(parent[run])
    return run


@inlined
def _join(parent, a, b):
    a = _root(parent, a)
    b = _root(parent, b)
    if a < b:
        parent[b] = a
    elif b < a:
        parent[a] = b


def run_lists(rows: int, room: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Lists of up to `room` runs for each row: places, masses (the same memory as float64) and numbers of runs."""
    places = np.empty((rows, 2 * room), np.int64)
    return places, places.view(np.float64), np.empty(rows, np.int64)


def run_workspace(room: int, shape: tuple[int, int, int]) -> tuple[np.ndarray, ...]:
    """Working space of `largest_of_runs` for lists of up to `room` runs of maps of one shape.

    start, stop, label, parent, total of the runs; the first run of each channel; bit maps of the points in positive
    and in
    negative runs and the first run of each of their words.
    """
    channels, frequencies, times = shape
    words = -(-frequencies * times // WORD) + 1 if channels > 1 else 0
    start = np.full(room + LOOK_BACK, _FAR, np.int32)
    stop = np.full(room + LOOK_BACK, -_FAR, np.int32)
    whole = [np.empty(room + LOOK_BACK, np.int32) for _ in range(2)]
    total = np.empty(room + LOOK_BACK, np.float64)
    bits = np.empty((channels, 2, words), np.uint64)
    return start, stop, *whole, total, np.empty(channels + 1, np.int64), bits, np.empty((channels, words), np.int32)


@compiled
def _unpack(places, masses, number, times, plane, start, stop, parent, total, channel_first):
    """Runs to their own arrays, from LOOK_BACK on; an empty row before each channel, and negative runs far from
    positive ones."""
    channel = 0
    channel_first[0] = LOOK_BACK
    next_channel = plane
    shift = np.int64(0)
    for j in range(number):
        begin = places[2 * j] >> 7
        while begin >= next_channel:
            channel += 1
            channel_first[channel] = LOOK_BACK + j
            next_channel += plane
            shift += times
        at = begin + shift + _APART * (masses[2 * j + 1] < 0)
        k = j + LOOK_BACK
        start[k] = at
        stop[k] = at + (places[2 * j] & 127)
        parent[k] = k
        total[k] = 0.0
    while channel < channel_first.shape[0] - 1:
        channel += 1
        channel_first[channel] = LOOK_BACK + number


@compiled
def _join_earlier(j, first, hits, times, start, stop, label, parent):
    """The uncommon cases: run j meets more than two runs, or its row and the one before hold more than LOOK_BACK
    runs."""
    while hits != 0:
        _join(parent, np.int64(label[first + trailing_zeros(hits)]), np.int64(label[j]))
        hits &= hits - np.uint64(1)
    low = start[j] - times
    high = stop[j] - times
    earliest = (np.int64(start[j]) & (_APART - 1)) - times - WORD
    i = first - 1
    while i >= LOOK_BACK and (start[i] & (_APART - 1)) >= earliest:
        if start[i] < high and stop[i] > low:
            _join(parent, np.int64(label[i]), np.int64(label[j]))
        i -= 1


@compiled
def _join_along_frequency(number, times, wide, start, stop, label, parent):
    """Give each run the label of the first run that it meets in the row before, and note which labels are one."""
    for j in range(LOOK_BACK, number + LOOK_BACK):
        first = j - LOOK_BACK
        low = np.int64(start[j]) - times
        high = np.int64(stop[j]) - times
        if wide:
            hits = overlapping_runs(start, stop, first, low, high)
        else:
            hits = overlapping_runs_plainly(start, stop, first, low, high)
        rest = hits & (hits - np.uint64(1))
        # Without a hit trailing_zeros is 64: cut to a place that can be read, and not used.
        met = np.int64(label[first + (trailing_zeros(hits) & 31)])
        own = met if hits != 0 else j
        met = np.int64(label[first + (trailing_zeros(rest) & 31)])
        other = met if rest != 0 else own
        label[j] = own
        if other != own:
            _join(parent, own, other)
        # A stretch of more than 64 points, or over the edge of a word, goes on in the next run of the same row.
        here = np.int64(start[j]) & (_APART - 1)
        if stop[j - 1] == start[j] and here % times != 0:
            _join(parent, np.int64(label[j - 1]), np.int64(label[j]))
        more = rest & (rest - np.uint64(1))
        far = (start[first] & (_APART - 1)) >= here - times - WORD
        if (more != 0) | (far & (first >= LOOK_BACK)):
            _join_earlier(j, first, more, times, start, stop, label, parent)


@compiled
def _draw_runs(plane, times, start, stop, channel_first, bits, word_first):
    """Draw the runs into the bit maps (channel, sign, word) of their channels, and note the first run of each word."""
    bits[:] = 0
    for c in range(bits.shape[0]):
        origin = c * (plane + times)
        for j in range(channel_first[c + 1] - 1, channel_first[c] - 1, -1):
            negative = np.int64(start[j]) >> 30
            at = (np.int64(start[j]) & (_APART - 1)) - origin
            length = np.int64(stop[j]) - np.int64(start[j])
            word = at >> 6
            shift = np.uint64(at & 63)
            ones = np.uint64(0xFFFFFFFFFFFFFFFF) >> np.uint64(64 - length)
            bits[c, negative, word] |= ones << shift
            # The part over the edge of the word; shifted in two steps, since a shift by 64 is undefined.
            bits[c, negative, word + 1] |= (ones >> np.uint64(1)) >> (np.uint64(63) - shift)
            word_first[c, word] = j
            if (at & 63) + length > WORD:
                word_first[c, word + 1] = j


@compiled
def _join_channels(edges, plane, times, start, stop, label, parent, bits, word_first):
    """Join the runs of neighbouring channels that have points in common: words of their bit maps with common bits."""
    for e in range(edges.shape[0]):
        a = edges[e, 0]
        b = edges[e, 1]
        shift = (b - a) * (plane + times)
        for sign in range(2):
            for word in range(bits.shape[2]):
                common = bits[a, sign, word] & bits[b, sign, word]
                while common != 0:
                    at = (sign << 30) + a * (plane + times) + (word << 6) + trailing_zeros(common)
                    i = np.int64(word_first[a, word])
                    while not (start[i] <= at < stop[i]):
                        i += 1
                    j = np.int64(word_first[b, word])
                    while not (start[j] <= at + shift < stop[j]):
                        j += 1
                    _join(parent, np.int64(label[i]), np.int64(label[j]))
                    # On to the next points: those that both runs go on with are joined now.
                    further = min(np.int64(stop[i]), np.int64(stop[j]) - shift) - at
                    bit = trailing_zeros(common)
                    if bit + further >= WORD:
                        break
                    common &= ~((np.uint64(1) << np.uint64(bit + further)) - np.uint64(1))


@compiled
def largest_of_runs(
    places,
    masses,
    number,
    times,
    plane,
    edges,
    by_extent,
    wide,
    start,
    stop,
    label,
    parent,
    total,
    channel_first,
    bits,
    word_first,
):
    """Largest |mass| or extent of a component of runs; 0 without runs.

    times: points of a row; plane: points of a channel; edges (edges, 2) channels that are joined; the rest is
    `run_workspace`.
    """
    _unpack(places, masses, number, times, plane, start, stop, parent, total, channel_first)
    _join_along_frequency(number, times, wide, start, stop, label, parent)
    if edges.shape[0] > 0:
        _draw_runs(plane, times, start, stop, channel_first, bits, word_first)
        _join_channels(edges, plane, times, start, stop, label, parent, bits, word_first)
    best = 0.0
    for j in range(number):
        part = np.float64(places[2 * j] & 127) if by_extent else abs(masses[2 * j + 1])
        root = _root(parent, np.int64(label[j + LOOK_BACK]))
        total[root] += part
        best = max(best, total[root])
    return best
