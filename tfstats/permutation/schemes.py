"""Relabelling schemes: how many relabellings there are, and the rows of a null distribution, a panel at a time.

Row 0 is the observed labelling.  When the distinct relabellings are no more than the rows asked for, the rows are all
of them, each once; otherwise rows 1, 2, ... are drawn with replacement, row r from the (r - 1)-th random word of each
unit (0-based).

What a row holds depends on what the statistic needs: flips (1 flips the unit), group codes, an order of the units
(place i takes the predictor of unit order[i]), or for each unit an order of its conditions.
"""

from __future__ import annotations

import itertools
import math
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.contrasts.contrast import (
    CIRCULAR_SHIFT,
    F_OF_GROUPS,
    POOLED_T,
    REGRESSION_STATISTICS,
    SHUFFLE,
    SHUFFLED_CONDITIONS,
    SIGN_FLIPS,
    WELCH_SCORE,
    Contrast,
)
from tfstats.foundations.random_streams import raw_words, sign_flips, stable_orders

__all__ = ["Rows", "distinct_relabellings", "planned_rows", "smallest_p"]

Codes = NDArray[Any]
Draw = Callable[[int, int], Codes]
TWO_SIDED = "two-sided"
MOST_SHIFTS_COMPARED = 5000
UNCOUNTABLE = 10**300


@dataclass(frozen=True)
class Rows:
    """The relabellings of one test: call with (first, last) for the codes of those rows."""

    count: int
    distinct: int | float
    """How many differ; infinite stands for more than a float can hold."""
    enumerated: bool
    exact: bool
    smallest_p: float
    make: Draw = field(repr=False)

    def __call__(self, first: int, last: int) -> Codes:
        return self.make(first, last)


def _blocks_of(contrast: Contrast) -> list[NDArray[np.intp]]:
    blocks = contrast.relabelling.blocks
    if blocks is None:
        return [np.arange(len(contrast.unit_names))]
    codes = np.asarray(blocks)
    return [np.flatnonzero(codes == code) for code in range(int(codes.max()) + 1)]


def _labels(contrast: Contrast) -> NDArray[np.uint8]:
    if contrast.labels is None:
        raise TypeError("a relabelling of labels needs labels")
    return contrast.labels


def _by_allocation(contrast: Contrast) -> bool:
    """Whether only who carries which group label matters; with nuisance covariates the whole order does."""
    return contrast.labels is not None and contrast.nuisance is None


def distinct_relabellings(contrast: Contrast, alternative: str = TWO_SIDED) -> int:
    """How many relabellings differ.

    Sign flips 2^(n - 1) two-sided or F (a global flip changes neither), 2^n one-sided; groups n! / prod n_g!; slopes n!;
    labels of k conditions (k!)^(n - 1); circular shifts the product of the block lengths; blocks multiply.
    """
    units = len(contrast.unit_names)
    kind = contrast.relabelling.kind
    if kind == SIGN_FLIPS:
        return 1 << (units - 1 if alternative == TWO_SIDED else units)
    if kind == SHUFFLED_CONDITIONS:
        return int(math.factorial(len(contrast.conditions))) ** (units - 1)
    blocks = _blocks_of(contrast)
    if kind == CIRCULAR_SHIFT:
        return math.prod(len(block) for block in blocks)
    if not _by_allocation(contrast):
        return math.prod(math.factorial(len(block)) for block in blocks)
    return math.prod(_allocations(_labels(contrast)[block]) for block in blocks)


def _allocations(labels: NDArray[np.uint8]) -> int:
    counts = Counter(labels.tolist()).values()
    return math.factorial(len(labels)) // math.prod(math.factorial(count) for count in counts)


def smallest_p(contrast: Contrast, alternative: str = TWO_SIDED) -> float:
    """The smallest p that any data of this size can reach when all relabellings are visited.

    It comes from the multiplicity of the observed labelling: with two equal groups the exchange of the two gives
    the same |t|, so a two-sided test cannot go below 2 / C(n, n/2).
    """
    same = 1
    kind = contrast.relabelling.kind
    if kind == CIRCULAR_SHIFT and contrast.nuisance is None:
        same = _same_shifts(contrast, alternative)
    elif kind == SHUFFLE and _by_allocation(contrast):
        if contrast.is_f or alternative == TWO_SIDED:
            same = _exchangeable_groups(contrast)
    elif kind == SHUFFLE and contrast.nuisance is None:
        same = _same_orders(contrast, alternative)
    # Whole numbers first: the count of relabellings of thousands of trials is beyond any float.
    return min(same / distinct_relabellings(contrast, alternative), 1.0)


def _exchangeable_groups(contrast: Contrast) -> int:
    """In how many ways whole groups can change places, which no two-sided statistic or F notices."""
    labels = _labels(contrast)
    sizes = Counter(
        tuple(int(np.sum(labels[block] == code)) for block in _blocks_of(contrast)) for code in np.unique(labels)
    )
    return math.prod(math.factorial(count) for count in sizes.values())


def _same_orders(contrast: Contrast, alternative: str) -> int:
    """Orders that leave the predictor as it is (ties), and those that mirror it where the sign does not count."""
    predictor = _predictor(contrast)
    ties, mirrored = 1, True
    for block in _blocks_of(contrast):
        values = np.sort(predictor[block])
        ties *= math.prod(math.factorial(count) for count in Counter(values.tolist()).values())
        centred = values - values.mean()
        mirrored &= bool(
            np.allclose(centred, -centred[::-1], atol=1e-12 * max(np.abs(centred).max(initial=0.0), 1e-300))
        )
    return ties * (2 if mirrored and alternative == TWO_SIDED else 1)


def _same_shifts(contrast: Contrast, alternative: str) -> int:
    sequence = _predictor(contrast)
    shifted = np.array(
        [sequence[order] for order in itertools.islice(_all_shift_orders(contrast), MOST_SHIFTS_COMPARED)]
    )
    same = int(np.all(shifted == sequence, axis=1).sum())
    if alternative == TWO_SIDED and not contrast.is_f:
        # A sequence turned upside down about its block means has the opposite t.
        means = np.empty_like(sequence)
        for block in _blocks_of(contrast):
            means[block] = sequence[block].mean()
        mirrored = 2.0 * means - sequence
        same += int(np.all(np.isclose(shifted, mirrored, rtol=0.0, atol=1e-12 * np.ptp(sequence)), axis=1).sum())
    return same


def _predictor(contrast: Contrast) -> NDArray[np.float64]:
    if contrast.predictor is None:
        return _labels(contrast).astype(np.float64)
    if contrast.rank:
        from scipy import stats

        # Ranks can be a mirror image of themselves where the values are not.
        return np.asarray(stats.rankdata(contrast.predictor), dtype=np.float64)
    return np.asarray(contrast.predictor)


def planned_rows(
    contrast: Contrast, alternative: str, permutations: int, seed: int, *, enumerate_all: bool = True
) -> Rows:
    """The rows of a test of `permutations` relabellings, or of all distinct ones if they are no more.

    Without `enumerate_all` they are always drawn, as a test that may stop at any time needs.
    """
    distinct = distinct_relabellings(contrast, alternative)
    enumerated = enumerate_all and distinct <= permutations
    kind = contrast.relabelling.kind
    if kind == SIGN_FLIPS:
        make = _sign_rows(contrast, alternative, enumerated, seed)
    elif kind == SHUFFLED_CONDITIONS:
        make = _condition_rows(contrast, enumerated, seed)
    else:
        make = _order_rows(contrast, enumerated, seed)
        if contrast.statistic not in REGRESSION_STATISTICS:
            labels, orders = _labels(contrast), make
            make = lambda first, last: labels[orders(first, last)]  # noqa: E731
    least = smallest_p(contrast, alternative)
    return Rows(
        count=distinct if enumerated else permutations,
        distinct=distinct if distinct < UNCOUNTABLE else math.inf,
        enumerated=enumerated,
        exact=enumerated and _exchangeable(contrast),
        smallest_p=least if enumerated else max(least, 1.0 / permutations),
        make=make,
    )


def _exchangeable(contrast: Contrast) -> bool:
    """Whether the null makes relabellings exchangeable: never with nuisance covariates, unequal variances or shifts."""
    kind = contrast.relabelling.kind
    if kind in (SIGN_FLIPS, SHUFFLED_CONDITIONS):
        return True
    unequal = contrast.statistic in (WELCH_SCORE, "adjusted_welch_score")
    if kind == SHUFFLE and contrast.nuisance is None and not unequal:
        return contrast.statistic in (POOLED_T, F_OF_GROUPS, *REGRESSION_STATISTICS)
    return False


def _drawn(first: int, last: int, observed: Codes, draw: Draw) -> Codes:
    """Row 0 is the observed labelling, row r uses random word r - 1."""
    if last <= max(first, 1):
        return observed[None] if first == 0 and last == 1 else np.empty((0, *observed.shape), observed.dtype)
    drawn = draw(max(first, 1) - 1, last - 1)
    return np.concatenate([observed[None], drawn]) if first == 0 else drawn


def _sign_rows(contrast: Contrast, alternative: str, enumerated: bool, seed: int) -> Draw:
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


def _order_rows(contrast: Contrast, enumerated: bool, seed: int) -> Draw:
    """Orders of the units, within blocks."""
    units = len(contrast.unit_names)
    blocks = _blocks_of(contrast)
    shifts = contrast.relabelling.kind == CIRCULAR_SHIFT
    observed = np.arange(units)
    if enumerated:
        if shifts:
            every = np.array(list(_all_shift_orders(contrast)))
        elif _by_allocation(contrast):
            every = _orders_of_allocations(_labels(contrast), blocks)
        else:
            every = _orders_of_blocks(blocks, units, [list(itertools.permutations(block.tolist())) for block in blocks])
        return lambda first, last: every[first:last]
    draw = _drawn_shifts(contrast, blocks, seed) if shifts else _drawn_shuffles(contrast.unit_names, blocks, seed)
    return lambda first, last: _drawn(first, last, observed, draw)


def _drawn_shuffles(names: Sequence[str], blocks: list[NDArray[np.intp]], seed: int) -> Draw:
    def draw(first: int, last: int) -> Codes:
        orders = np.empty((last - first, len(names)), np.int64)
        for block in blocks:
            orders[:, block] = block[stable_orders(seed, [names[unit] for unit in block], first, last)]
        return orders

    return draw


def _drawn_shifts(contrast: Contrast, blocks: list[NDArray[np.intp]], seed: int) -> Draw:
    names = contrast.relabelling.block_names

    def draw(first: int, last: int) -> Codes:
        orders = np.empty((last - first, len(contrast.unit_names)), np.int64)
        for block, name in zip(blocks, names):
            steps = (raw_words(seed, name, first, last) % np.uint64(len(block))).astype(np.int64)
            orders[:, block] = block[(np.arange(len(block)) - steps[:, None]) % len(block)]
        return orders

    return draw


def _all_shift_orders(contrast: Contrast) -> Iterator[Codes]:
    blocks = _blocks_of(contrast)
    order = np.arange(len(contrast.unit_names))
    for steps in itertools.product(*(range(len(block)) for block in blocks)):
        shifted = order.copy()
        for block, step in zip(blocks, steps):
            shifted[block] = np.roll(block, step)
        yield shifted


def _orders_of_blocks(
    blocks: list[NDArray[np.intp]], units: int, choices: list[list[tuple[int, ...]]]
) -> NDArray[np.int64]:
    """Every combination of one order a block; the first order of each block must be the observed one."""
    every = np.empty((math.prod(len(choice) for choice in choices), units), np.int64)
    for row, chosen in enumerate(itertools.product(*choices)):
        for block, order in zip(blocks, chosen):
            every[row, block] = order
    return every


def _orders_of_allocations(labels: NDArray[np.uint8], blocks: list[NDArray[np.intp]]) -> NDArray[np.int64]:
    """One order for each distinct allocation of the group labels, the observed one first."""
    choices = []
    for block in blocks:
        observed = labels[block]
        members = {code: block[observed == code].tolist() for code in np.unique(observed).tolist()}
        orders = []
        for allocation in _distinct_sequences(observed.tolist()):
            waiting = {code: iter(units) for code, units in members.items()}
            orders.append(tuple(next(waiting[code]) for code in allocation))
        orders.remove(tuple(block.tolist()))
        choices.append([tuple(block.tolist()), *orders])
    return _orders_of_blocks(blocks, labels.size, choices)


def _distinct_sequences(codes: list[int]) -> Iterator[tuple[int, ...]]:
    """Distinct arrangements of a multiset, in lexical order."""
    counts = Counter(codes)
    kinds = sorted(counts)

    def extend(so_far: tuple[int, ...]) -> Iterator[tuple[int, ...]]:
        if len(so_far) == len(codes):
            yield so_far
            return
        for kind in kinds:
            if counts[kind]:
                counts[kind] -= 1
                yield from extend((*so_far, kind))
                counts[kind] += 1

    return extend(())


def _condition_rows(contrast: Contrast, enumerated: bool, seed: int) -> Draw:
    """For each unit an order of its conditions: (rows, units, conditions)."""
    conditions = len(contrast.conditions)
    units = len(contrast.unit_names)
    observed = np.tile(np.arange(conditions), (units, 1))
    if enumerated:
        orders = np.array(list(itertools.permutations(range(conditions))))
        number = len(orders)

        def every(first: int, last: int) -> Codes:
            # The last unit keeps its labels: one order applied to all units changes no F.
            rows = np.arange(first, last)[:, None]
            digits = rows // number ** np.arange(units - 1) % number
            kept = np.zeros((last - first, 1), np.int64)
            return orders[np.concatenate([digits, kept], axis=1)]

        return every

    names = contrast.unit_names

    def draw(first: int, last: int) -> Codes:
        parts = [
            stable_orders(seed, [f"{name}/{condition}" for condition in contrast.conditions], first, last)
            for name in names
        ]
        return np.stack(parts, axis=1)

    return lambda first, last: _drawn(first, last, observed, draw)
