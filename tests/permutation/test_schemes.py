"""Rows of relabellings: what is counted, what is drawn, and what they do not depend on."""

import math

import numpy as np
import pytest

from tfstats.contrasts.contrast import CIRCULAR_SHIFT, POOLED_T, SHUFFLE, SIGN_FLIPS, WELCH_SCORE, Contrast, Relabelling
from tfstats.foundations.random_streams import name_key, raw_words
from tfstats.permutation.schemes import distinct_relabellings, planned_rows, smallest_p


def contrast(kind, units=6, labels=None, blocks=None, statistic="one_sample_t", names=None):
    return Contrast(
        design="test", values=np.ones((units, 1, 1, 1)), unit_names=names or tuple(f"S{i}" for i in range(units)),
        unit_kind="subject", channels=("Fz",), frequencies=np.array([6.0]), times=np.array([0.0]), unit="decibel",
        statistic=statistic, relabelling=Relabelling(kind, blocks, tuple("ab"[: 1 if blocks is None else max(blocks) + 1])),
        null_hypothesis="", alternatives={}, difference="", labels=None if labels is None else np.array(labels, np.uint8),
    )  # fmt: skip


@pytest.mark.parametrize("units", [2, 3, 7])
def test_sign_flips_are_enumerated_once_each(units):
    one = contrast(SIGN_FLIPS, units)
    for alternative, expected in (("two-sided", 2 ** (units - 1)), ("greater", 2**units)):
        rows = planned_rows(one, alternative, 10_000, 0)
        codes = rows(0, rows.count)
        assert rows.count == rows.distinct == expected and rows.enumerated and rows.exact
        assert len({row.tobytes() for row in codes}) == expected
        assert not codes[0].any()
        if alternative == "two-sided":  # no row is another's mirror image
            assert len({min(row.tobytes(), (1 - row).tobytes()) for row in codes}) == expected
        # p from arithmetic: 2^-n one-sided, 2^-(n - 1) two-sided
        assert rows.smallest_p == 1 / expected


@pytest.mark.parametrize("pieces", [1, 3, 7])
def test_panels_join_to_the_same_rows(pieces):
    for one in (
        contrast(SIGN_FLIPS, 40),
        contrast(SHUFFLE, 40, [1] * 15 + [0] * 25),
        contrast(CIRCULAR_SHIFT, 40, [1, 0] * 20),
    ):
        rows = planned_rows(one, "two-sided", 30, 5)
        edges = np.linspace(0, rows.count, pieces + 1).astype(int)
        joined = np.concatenate([rows(a, b) for a, b in zip(edges, edges[1:])])
        assert np.array_equal(joined, rows(0, rows.count))


def test_drawn_signs_are_the_lowest_bits_of_philox():
    # Salmon et al. 2011 (Philox); the key rule is the project's contract.
    names = tuple(f"S{i}" for i in range(30))
    codes = planned_rows(contrast(SIGN_FLIPS, 30, names=names), "two-sided", 50, 7)(0, 50)
    for column, name in enumerate(names):
        words = np.random.Philox(key=np.array([7, name_key(name)], dtype=np.uint64)).random_raw(49)
        assert np.array_equal(codes[1:, column], words & np.uint64(1))


def test_leaving_out_a_subject_leaves_the_other_signs():
    names = tuple(f"S{i}" for i in range(30))
    whole = planned_rows(contrast(SIGN_FLIPS, 30, names=names), "two-sided", 200, 3)(0, 200)
    fewer = planned_rows(contrast(SIGN_FLIPS, 29, names=names[:11] + names[12:]), "two-sided", 100, 3)(0, 100)
    assert np.array_equal(np.delete(whole[:100], 11, axis=1), fewer)


def test_words_by_position():
    full = raw_words(1, "S01", 0, 41)
    for first in range(0, 40, 3):
        assert np.array_equal(raw_words(1, "S01", first, 41), full[first:])


def test_shuffles_enumerated_and_lady_tasting_tea():
    # Fisher 1935, The Design of Experiments: 8 cups, 4 and 4: 1/70 one-sided.
    tea = contrast(SHUFFLE, 8, [1, 0, 1, 1, 0, 0, 0, 1], statistic=POOLED_T)
    rows = planned_rows(tea, "greater", 1000, 0)
    codes = rows(0, rows.count)
    assert rows.count == 70 and rows.smallest_p == 1 / 70 and rows.exact
    assert np.array_equal(codes[0], tea.labels) and len({row.tobytes() for row in codes}) == 70
    assert (codes.sum(axis=1) == 4).all()
    assert smallest_p(tea, "two-sided") == 2 / 70


def test_welch_and_shifts_are_never_exact():
    assert not planned_rows(contrast(SHUFFLE, 6, [1, 1, 0, 0, 0, 0], statistic=WELCH_SCORE), "two-sided", 99, 0).exact
    assert not planned_rows(
        contrast(CIRCULAR_SHIFT, 6, [1, 1, 0, 0, 0, 0], statistic=POOLED_T), "two-sided", 99, 0
    ).exact


def test_blocks_multiply():
    labels = [1, 1, 0, 0, 1, 0, 0]
    blocks = (0, 0, 0, 0, 1, 1, 1)
    shuffled = contrast(SHUFFLE, 7, labels, blocks)
    assert distinct_relabellings(shuffled) == math.comb(4, 2) * math.comb(3, 1)
    codes = planned_rows(shuffled, "two-sided", 10_000, 0)
    rows = codes(0, codes.count)
    assert (rows[:, :4].sum(axis=1) == 2).all() and (rows[:, 4:].sum(axis=1) == 1).all()
    drawn = planned_rows(shuffled, "two-sided", 10, 0)(0, 10)
    assert (drawn[:, :4].sum(axis=1) == 2).all() and np.array_equal(drawn[0], labels)
    assert distinct_relabellings(contrast(CIRCULAR_SHIFT, 7, labels, blocks)) == 12


def test_shifts_turn_the_whole_sequence():
    labels = [1, 1, 1, 0, 0]
    rows = planned_rows(contrast(CIRCULAR_SHIFT, 5, labels), "greater", 100, 0)
    assert sorted(row.tolist() for row in rows(0, 5)) == sorted(np.roll(labels, k).tolist() for k in range(5))
    assert rows.smallest_p == 1 / 5
    # A sequence that repeats itself has fewer distinct labellings than shifts.
    assert smallest_p(contrast(CIRCULAR_SHIFT, 6, [1, 0] * 3), "greater") == 0.5
