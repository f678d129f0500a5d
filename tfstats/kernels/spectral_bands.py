"""Bands of spectra: times a real weight and folded onto a shorter circle of bins, and squared magnitudes."""

from __future__ import annotations

from tfstats.kernels.compile_policy import compiled

__all__ = ["folded_bands", "squared_magnitudes"]


@compiled
def folded_bands(spectra, first, weights, length, folded):
    """Write the bins first, first + 1, ... of each spectrum, times their weights, folded onto the bins of `folded`.

    spectra : (rows, 2 x half) real and imaginary parts in turn, of the bins 0 ... half - 1 of a real signal's spectrum; the
        rest of the circle of `length` bins is the mirrored conjugate
    first : any whole number; weights : (2 x bins,), each twice, so that plain products of neighbours are taken
    folded : (rows, 2 x short)
    """
    half = spectra.shape[1] // 2
    short = folded.shape[1] // 2
    bins = weights.size // 2
    for row in range(spectra.shape[0]):
        source, target = spectra[row], folded[row]
        target[:] = 0.0
        done = 0
        while done < bins:
            # As far as neither circle comes round, nor the mirror is reached.
            here = (first + done) % length
            there = (first + done) % short
            size = min(bins - done, short - there)
            if here < half:
                size = min(size, half - here)
                part = target[2 * there : 2 * (there + size)]
                given, weight = source[2 * here : 2 * (here + size)], weights[2 * done : 2 * (done + size)]
                for k in range(2 * size):
                    part[k] += given[k] * weight[k]
            else:
                size = min(size, length - here)
                for k in range(size):
                    place = 2 * (length - here - k)
                    target[2 * (there + k)] += source[place] * weights[2 * (done + k)]
                    target[2 * (there + k) + 1] -= source[place + 1] * weights[2 * (done + k)]
            done += size


@compiled
def squared_magnitudes(transforms, number, power):
    """Write |transform|^2 of each row's first points to power[row, number]; transforms as real and imaginary parts in turn."""
    for row in range(transforms.shape[0]):
        source, target = transforms[row], power[row, number]
        for k in range(target.size):
            target[k] = source[2 * k] * source[2 * k] + source[2 * k + 1] * source[2 * k + 1]
