"""Vector versions of the inner steps give the bytes of their plain versions."""

import numba
import numpy as np
import pytest

from tfstats.kernels import vector_instructions as vi

GROUPS, ROWS = 5, 11


@numba.njit
def both_beyond(table, entries, first, threshold, sums, flags, packed):
    wide = vi.beyond_words(table, entries, first, GROUPS, threshold)
    plainly = vi.beyond_words_plainly(table, entries, first, GROUPS, threshold, sums, flags, packed)
    return wide, plainly


@numba.njit
def both_windows(table, entries, first, offset, high, large, out, out_plainly, at, window):
    wide = vi.packed_window(table, entries, first, GROUPS, offset, high, large, out, at)
    plainly = vi.packed_window_plainly(table, entries, first, GROUPS, offset, high, large, out_plainly, at, window)
    return wide, plainly


@numba.njit
def both_sums(values, first, length, window):
    return vi.sum_of_first(values, first, length), vi.sum_of_first_plainly(values, first, length, window)


@numba.njit
def both_overlaps(starts, stops, first, low, high):
    return vi.overlapping_runs(starts, stops, first, low, high), vi.overlapping_runs_plainly(
        starts, stops, first, low, high
    )


@numba.njit
def zeros_below(word):
    return vi.trailing_zeros(word)


def test_candidates_of_128_points():
    generator = np.random.default_rng(0)
    table = generator.integers(-6000, 6001, ROWS * 128).astype(np.int16)
    entries = generator.integers(0, ROWS, 60).astype(np.int32)
    flags = np.zeros(128, np.uint8)
    space = (np.empty(128, np.int16), flags, flags.view(np.uint64))
    for first in range(0, 50, 5):
        sums = table.reshape(ROWS, 128)[entries[first : first + GROUPS]].sum(axis=0)
        for threshold in (0, 5000, int(np.abs(sums).max())):
            wide, plainly = both_beyond(table, entries, first, threshold, *space)
            assert wide == plainly
            bits = np.array([(int(wide[k // 64]) >> (k % 64)) & 1 for k in range(128)], bool)
            np.testing.assert_array_equal(bits, np.abs(sums) > threshold)


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_windows_of_16_sums(kind):
    generator = np.random.default_rng(1)
    table = generator.standard_normal((ROWS + 1) * 128).astype(kind)
    entries = generator.integers(0, ROWS, 60).astype(np.int32)
    high = generator.uniform(0, 3, 128 + 16).astype(kind)
    for first, offset in ((0, 0), (7, 1), (30, 63), (50, 112), (55, 127)):
        out, out_plainly = np.full((2, 40), np.nan, kind)
        wide, plainly = both_windows(
            table, entries, first, offset, high, kind(4.0), out, out_plainly, 9, np.empty(16, kind)
        )
        assert wide == plainly
        assert out.tobytes() == out_plainly.tobytes()
        assert np.isfinite(out[9:25]).all() and np.isnan(out[25:]).all()
        places = entries[first : first + GROUPS].astype(int)[:, None] * 128 + offset + np.arange(16)
        total = table[places[0]]
        for row in places[1:]:
            total = total + table[row]
        np.testing.assert_array_equal(out[9:25], np.abs(total))
        inside = (np.abs(total) > high[offset : offset + 16]) & (np.abs(total) <= 4)
        assert wide[0] == sum(1 << k for k in np.flatnonzero(inside))
        assert wide[1] == sum(1 << k for k in np.flatnonzero(total < 0))


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_sums_of_up_to_16_values(kind):
    values = np.random.default_rng(2).standard_normal(100).astype(kind)
    for length in range(1, 17):
        wide, plainly = both_sums(values, length, length, np.empty(16, kind))
        assert kind(wide).tobytes() == kind(plainly).tobytes()
        assert wide == pytest.approx(values[length : 2 * length].sum(dtype=float), rel=1e-5, abs=1e-5)


def test_overlaps_of_32_runs():
    generator = np.random.default_rng(3)
    starts = np.sort(generator.integers(-500, 500, 80)).astype(np.int32)
    stops = (starts + generator.integers(1, 65, 80)).astype(np.int32)
    for first in (0, 17, 48):
        for low, high in ((-600, 600), (-10, 4), (0, 1), (700, 800)):
            wide, plainly = both_overlaps(starts, stops, first, low, high)
            assert wide == plainly
            some = slice(first, first + 32)
            assert wide == sum(1 << k for k in np.flatnonzero((starts[some] < high) & (stops[some] > low)).tolist())


def test_zero_bits_below_the_lowest():
    assert [zeros_below(np.uint64(word)) for word in (1, 8, 2**63, 2**64 - 1, 0)] == [0, 3, 63, 0, 64]
