"""Relabelling schemes: how many relabellings there are, and the rows of a null distribution, a panel at a time.

Row 0 is the observed labelling.  When the distinct relabellings are no more than the rows asked for, the rows are all
of them, each once; otherwise rows 1, 2, ... are drawn with replacement, row r from the (r - 1)-th random word of each
unit (0-based).
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tfstats.contrasts.contrast import CIRCULAR_SHIFT, POOLED_T, SHUFFLE, SIGN_FLIPS, Contrast
from tfstats.foundations.random_streams import raw_words, sign_flips, stable_orders

__all__ = ["Rows", "distinct_relabellings", "planned_rows", "smallest_p"]

Codes = NDArray[np.uint8]
TWO_SIDED = "two-sided"


@dataclass(frozen=True)
class Rows:
    """The relabellings of one test: call with (first, last) for uint8 codes (rows, units).

    For sign flips code 1 flips the unit; for labels it is membership of the first group.
    """

    count: int
    distinct: int
    enumerated: bool
    exact: bool
    smallest_p: float
    make: Callable[[int, int], Codes] = field(repr=False)

    def __call__(self, first: int, last: int) -> Codes:
        return self.make(first, last)


def _blocks_of(contrast: Contrast) -> list[NDArray[np.intp]]:
    blocks = contrast.relabelling.blocks
    if blocks is None:
        return [np.arange(len(contrast.unit_names))]
    codes = np.asarray(blocks)
    return [np.flatnonzero(codes == code) for code in range(int(codes.max()) + 1)]


def distinct_relabellings(contrast: Contrast, alternative: str = TWO_SIDED) -> int:
    """How many relabellings differ: 2^(n - 1) two-sided sign flips (a global flip changes no |t|), 2^n one-sided,
    n!/(n1! n2!) shuffles, the product of the block lengths for circular shifts; blocks multiply."""
    units = len(contrast.unit_names)
    kind = contrast.relabelling.kind
    if kind == SIGN_FLIPS:
        return 1 << (units - 1 if alternative == TWO_SIDED else units)
    blocks = _blocks_of(contrast)
    if kind == CIRCULAR_SHIFT:
        return math.prod(len(block) for block in blocks)
    return int(math.prod(math.comb(block.size, int(_labels(contrast)[block].sum())) for block in blocks))


def smallest_p(contrast: Contrast, alternative: str = TWO_SIDED) -> float:
    """The smallest p that any data of this size can reach when all relabellings are visited.

    It comes from the multiplicity of the observed labelling: with two equal groups the exchange of the two gives
    the same |t|, so a two-sided test cannot go below 2 / C(n, n/2).
    """
    least = 1.0 / distinct_relabellings(contrast, alternative)
    if contrast.relabelling.kind == SHUFFLE and alternative == TWO_SIDED:
        labels = _labels(contrast)
        if all(2 * int(labels[block].sum()) == block.size for block in _blocks_of(contrast)):
            least *= 2
    if contrast.relabelling.kind == CIRCULAR_SHIFT:
        shifts = np.array([_shifted(contrast, shift) for shift in itertools.islice(_all_shifts(contrast), 5000)])
        same = np.all(shifts == _labels(contrast), axis=1).sum()
        mirrored = np.all(shifts == 1 - _labels(contrast), axis=1).sum() if alternative == TWO_SIDED else 0
        least *= int(same + mirrored)
    return min(least, 1.0)


def planned_rows(contrast: Contrast, alternative: str, permutations: int, seed: int) -> Rows:
    """The rows of a test of `permutations` relabellings, or of all distinct ones if they are no more."""
    distinct = distinct_relabellings(contrast, alternative)
    enumerated = distinct <= permutations
    count = distinct if enumerated else permutations
    kind = contrast.relabelling.kind
    makers = {SIGN_FLIPS: _sign_rows, SHUFFLE: _shuffled_rows, CIRCULAR_SHIFT: _shifted_rows}
    make = makers[kind](contrast, alternative, enumerated, seed)
    # Welch scores and shifts of an autocorrelated sequence are valid only asymptotically, however many are visited.
    exchangeable = kind == SIGN_FLIPS or (kind == SHUFFLE and contrast.statistic == POOLED_T)
    least = smallest_p(contrast, alternative)
    return Rows(
        count=count,
        distinct=distinct,
        enumerated=enumerated,
        exact=enumerated and exchangeable,
        smallest_p=least if enumerated else max(least, 1.0 / permutations),
        make=make,
    )


def _labels(contrast: Contrast) -> Codes:
    if contrast.labels is None:
        raise TypeError("a relabelling of labels needs labels")
    return contrast.labels


def _drawn(first: int, last: int, observed: Codes, draw: Callable[[int, int], Codes]) -> Codes:
    """Row 0 is the observed labelling, row r uses random word r - 1."""
    drawn = draw(max(first, 1) - 1, last - 1) if last > 1 else np.empty((0, observed.size), np.uint8)
    return np.concatenate([observed[None], drawn]) if first == 0 else drawn


def _sign_rows(contrast: Contrast, alternative: str, enumerated: bool, seed: int) -> Callable[[int, int], Codes]:
    units = len(contrast.unit_names)
    if not enumerated:
        observed = np.zeros(units, np.uint8)
        names = contrast.unit_names
        return lambda first, last: _drawn(first, last, observed, lambda a, b: sign_flips(seed, names, a, b))

    def enumerate_signs(first: int, last: int) -> Codes:
        # Row r flips the units of its set bits; two-sided the last unit never flips, since flipping all changes no |t|.
        rows = np.arange(first, last, dtype=np.uint64)[:, None]
        free = units - 1 if alternative == TWO_SIDED else units
        codes = np.zeros((last - first, units), np.uint8)
        codes[:, :free] = (rows >> np.arange(free, dtype=np.uint64)) & np.uint64(1)
        return codes

    return enumerate_signs


def _shuffled_rows(contrast: Contrast, alternative: str, enumerated: bool, seed: int) -> Callable[[int, int], Codes]:
    labels = _labels(contrast)
    blocks = _blocks_of(contrast)
    if enumerated:
        every = _all_allocations(labels, blocks)
        return lambda first, last: every[first:last]
    names = contrast.unit_names

    def draw(first: int, last: int) -> Codes:
        codes = np.empty((last - first, labels.size), np.uint8)
        for block in blocks:
            orders = stable_orders(seed, [names[unit] for unit in block], first, last)
            codes[:, block] = labels[block][orders]
        return codes

    return lambda first, last: _drawn(first, last, labels, draw)


def _all_allocations(labels: Codes, blocks: list[NDArray[np.intp]]) -> Codes:
    """Every distinct allocation, the observed one first."""
    choices = [list(itertools.combinations(block.tolist(), int(labels[block].sum()))) for block in blocks]
    every = np.zeros((math.prod(len(choice) for choice in choices), labels.size), np.uint8)
    for row, chosen in enumerate(itertools.product(*choices)):
        every[row, [unit for members in chosen for unit in members]] = 1
    observed = int(np.flatnonzero(np.all(every == labels, axis=1))[0])
    every[[0, observed]] = every[[observed, 0]]
    return every


def _all_shifts(contrast: Contrast) -> itertools.product[tuple[int, ...]]:
    return itertools.product(*(range(block.size) for block in _blocks_of(contrast)))


def _shifted(contrast: Contrast, shift: tuple[int, ...]) -> Codes:
    labels = _labels(contrast)
    shifted = np.empty_like(labels)
    for block, steps in zip(_blocks_of(contrast), shift):
        shifted[block] = np.roll(labels[block], steps)
    return shifted


def _shifted_rows(contrast: Contrast, alternative: str, enumerated: bool, seed: int) -> Callable[[int, int], Codes]:
    if enumerated:
        every = np.array([_shifted(contrast, shift) for shift in _all_shifts(contrast)], dtype=np.uint8)
        return lambda first, last: every[first:last]
    lengths = [block.size for block in _blocks_of(contrast)]
    names = contrast.relabelling.block_names

    def draw(first: int, last: int) -> Codes:
        steps = np.stack(
            [raw_words(seed, name, first, last) % np.uint64(length) for name, length in zip(names, lengths)], axis=1
        )
        return np.array([_shifted(contrast, tuple(int(step) for step in row)) for row in steps], dtype=np.uint8)

    return lambda first, last: _drawn(first, last, _labels(contrast), draw)
