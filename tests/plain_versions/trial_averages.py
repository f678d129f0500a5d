"""Averages over trials, jackknife and robust lines from the formulas, one number at a time; shares nothing with the package."""

from __future__ import annotations

import math

import numpy as np


def known(numbers):
    return [number for number in numbers if not math.isnan(number)]


def sum_in_order(numbers):
    total = 0.0
    for number in known(numbers):
        total += number
    return total


def sum_of_logarithms(numbers):
    return math.fsum(math.log10(number) for number in known(numbers))


def sum_of_left_out_logarithms(numbers):
    """log10 of the sum without each number in turn, summed."""
    there = known(numbers)
    return math.fsum(math.log10(math.fsum(there[:place] + there[place + 1 :])) for place in range(len(there)))


def jackknife_decibel(numbers):
    """n T - (n - 1) mean of T without each, T = 10 log10 of the mean (Quenouille 1956)."""
    there = known(numbers)
    count = len(there)

    def decibel(some):
        return 10 * math.log10(math.fsum(some) / len(some))

    without = [decibel(there[:place] + there[place + 1 :]) for place in range(count)]
    return count * decibel(there) - (count - 1) * math.fsum(without) / count


def middle(numbers):
    ordered = sorted(numbers)
    half = len(ordered) // 2
    return ordered[half] if len(ordered) % 2 else (ordered[half - 1] + ordered[half]) / 2


def median_line(places, values):
    """Median of all pairwise slopes, median of what is left (Theil 1950)."""
    points = [(x, y) for x, y in zip(places, values) if not math.isnan(y)]
    slopes = [(b - d) / (a - c) for n, (a, b) in enumerate(points) for c, d in points[:n]]
    slope = middle(slopes)
    return slope, middle([y - slope * x for x, y in points])


def folded_band(spectrum, first, weights, length, short):
    """Bins of the whole circle (spectrum of a real signal), weighted and added onto a shorter circle."""
    half = len(spectrum)
    folded = np.zeros(short, dtype=complex)
    for step, weight in enumerate(weights):
        place = (first + step) % length
        value = spectrum[place] if place < half else np.conj(spectrum[length - place])
        folded[(first + step) % short] += value * weight
    return folded
