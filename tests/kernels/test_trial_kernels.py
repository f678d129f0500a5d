"""Sums and products over trials, median lines and folded bands against their plain twins; the same bits for any cut."""

from __future__ import annotations

import numpy as np
import pytest

from tests.plain_versions import trial_averages as plain
from tfstats.kernels import pair_slopes, spectral_bands, trial_products, trial_sums
from tfstats.kernels.value_counts import counts_of_values

WIDTH, LINES, TRIALS = 7, 9, 23
CELLS = np.array([0, 1, 2, 0, 1, -1] * 4)[:TRIALS]
ORDER = np.concatenate([np.flatnonzero(cell == CELLS) for cell in range(3)])
STARTS = np.concatenate([[0], np.cumsum([np.count_nonzero(cell == CELLS) for cell in range(3)])])


def made(missing=0.0, dtype=np.float64, seed=0, spread=1.0):
    random = np.random.default_rng(seed)
    values = np.exp(spread * random.normal(size=(TRIALS, LINES * WIDTH)))
    values[random.random(values.shape) < missing] = np.nan
    shift, scale = random.normal(size=(TRIALS, LINES)), np.exp(random.normal(size=(TRIALS, LINES)))
    return np.clip(values, 1e-38, 1e38).astype(dtype), shift, scale


def by_cell(function, values):
    return np.array(
        [[function(values[cell == CELLS, k].tolist()) for k in range(values.shape[1])] for cell in range(3)]
    )


def summed(values, shift=None, scale=None, piece=3, order=ORDER, starts=STARTS, sums=None):
    """Through the kernels as the package calls them; also how many pieces went the slow way."""
    sums = np.zeros((3, values.shape[1])) if sums is None else sums
    missing = np.zeros(sums.shape, np.int64)
    if shift is None:
        shift = scale = np.empty((len(values), 0))
        points = piece * WIDTH
        flagged = np.zeros((3, -(-values.shape[1] // points)), bool)
        trial_sums.plain_sums(values, order, starts, points, sums, flagged, 0, flagged.shape[1])
    else:
        points = piece * WIDTH
        flagged = np.zeros((3, -(-LINES // piece)), bool)
        trial_sums.scaled_sums(values, shift, scale, WIDTH, order, starts, piece, sums, flagged, 0, flagged.shape[1])
    trial_sums.present_sums(values, shift, scale, WIDTH, order, starts, points, flagged, sums, missing)
    return sums, missing, int(flagged.sum())


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("missing", [0.0, 0.05])
@pytest.mark.parametrize("scaled", [False, True])
def test_sums_equal_their_plain_twin(dtype, missing, scaled):
    values, shift, scale = made(missing, dtype)
    exact = values.astype(np.float64)
    if scaled:
        sums, absent, slow = summed(values, shift, scale)
        exact = (exact - np.repeat(shift, WIDTH, axis=1)) * np.repeat(scale, WIDTH, axis=1)
    else:
        sums, absent, slow = summed(values)
    expected = by_cell(plain.sum_in_order, exact)
    if scaled:
        # The compiler may fuse a product and a sum.
        np.testing.assert_allclose(sums, expected, rtol=1e-13, atol=1e-13)
    else:
        assert np.array_equal(sums, expected)
    assert np.array_equal(absent, by_cell(lambda numbers: sum(number != number for number in numbers), exact))
    assert (slow > 0) == (missing > 0)


@pytest.mark.parametrize("piece", [1, 2, 5, 9])
def test_sums_have_the_same_bits_for_any_cut(piece):
    values, shift, scale = made(0.02, np.float32)
    for arguments in ((), (shift, scale)):
        whole, _, _ = summed(values, *arguments)
        cut = np.zeros_like(whole)
        for rows in (slice(0, 1), slice(1, 10), slice(10, 11), slice(11, TRIALS)):
            codes = CELLS[rows]
            order = np.concatenate([np.flatnonzero(codes == cell) for cell in range(3)])
            starts = np.concatenate([[0], np.cumsum([np.count_nonzero(codes == cell) for cell in range(3)])])
            some = [np.ascontiguousarray(one[rows]) for one in (values, *arguments)]
            summed(*some, piece=piece, order=order, starts=starts, sums=cut)
        assert np.array_equal(whole, cut)


def multiplied(values, scale, totals=None, piece=2, order=ORDER, starts=STARTS, state=None):
    if state is None:
        state = np.ones((3, values.shape[1])), np.zeros((3, values.shape[1]), np.int64)
    mantissas, exponents = state
    missing = np.zeros(mantissas.shape, np.int64)
    flagged = np.zeros((3, -(-LINES // piece)), bool)
    whole = np.empty((3, 0)) if totals is None else totals
    if totals is None:
        trial_products.products(
            values, scale, WIDTH, order, starts, piece, mantissas, exponents, flagged, 0, flagged.shape[1]
        )
    else:
        trial_products.products_left_out(
            values, scale, WIDTH, totals, order, starts, piece, mantissas, exponents, flagged, 0, flagged.shape[1]
        )
    trial_products.present_products(
        values,
        scale,
        WIDTH,
        whole,
        totals is not None,
        order,
        starts,
        piece * WIDTH,
        flagged,
        mantissas,
        exponents,
        missing,
    )
    return mantissas, exponents, missing, int(flagged.sum())


def logarithms(mantissas, exponents):
    return (np.log2(mantissas) + exponents) * np.log10(2.0)


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("missing", [0.0, 0.05])
@pytest.mark.parametrize("spread", [1.0, 30.0])
def test_products_are_sums_of_logarithms(dtype, missing, spread):
    values, _, scale = made(missing, dtype, spread=spread)
    values = np.clip(values, 1e-30, 1e30).astype(dtype)
    mantissas, exponents, absent, slow = multiplied(values, scale)
    exact = values.astype(np.float64) * np.repeat(scale, WIDTH, axis=1)
    np.testing.assert_allclose(
        logarithms(mantissas, exponents), by_cell(plain.sum_of_logarithms, exact), rtol=1e-13, atol=1e-12
    )
    assert np.array_equal(absent, by_cell(lambda numbers: sum(number != number for number in numbers), exact))
    assert np.all((mantissas >= 1) & (mantissas < 2))
    assert (slow > 0) == (missing > 0)


@pytest.mark.parametrize("size", [1e-308, 1e-160, 1e160, 1e300])
def test_products_that_leave_the_range_go_the_slow_way(size):
    values, _, scale = made()
    mantissas, exponents, _, slow = multiplied(values * size, np.ones_like(scale))
    assert slow > 0
    expected = by_cell(plain.sum_of_logarithms, values * size)
    np.testing.assert_allclose(logarithms(mantissas, exponents), expected, rtol=1e-12)


@pytest.mark.parametrize("missing", [0.0, 0.05])
def test_products_of_what_is_left_without_each_trial(missing):
    values, _, _ = made(missing)
    ones = np.ones((TRIALS, LINES))
    totals = by_cell(plain.sum_in_order, values)
    mantissas, exponents, _, slow = multiplied(values, ones, totals)
    expected = by_cell(plain.sum_of_left_out_logarithms, values)
    np.testing.assert_allclose(logarithms(mantissas, exponents), expected, rtol=1e-12, atol=1e-12)
    assert (slow > 0) == (missing > 0)


def test_products_have_the_same_bits_for_any_cut_and_with_gaps_elsewhere():
    values, _, scale = made(0.0, np.float32)
    mantissas, exponents, _, _ = multiplied(values, scale)
    for holes in (False, True):
        holed = values.copy()
        if holes:
            holed[:, ::WIDTH] = np.nan  # every piece goes the slow way
        state = np.ones_like(mantissas), np.zeros_like(exponents)
        for rows in (slice(0, 2), slice(2, 9), slice(9, TRIALS)):
            codes = CELLS[rows]
            order = np.concatenate([np.flatnonzero(codes == cell) for cell in range(3)])
            starts = np.concatenate([[0], np.cumsum([np.count_nonzero(codes == cell) for cell in range(3)])])
            multiplied(holed[rows].copy(), scale[rows].copy(), piece=4, order=order, starts=starts, state=state)
        there = np.ones(values.shape[1], bool)
        there[::WIDTH] = not holes
        assert np.array_equal(state[0][:, there], mantissas[:, there])
        assert np.array_equal(state[1][:, there], exponents[:, there])


def test_mean_logarithms_of_lines():
    values, _, _ = made(0.2, spread=80.0)
    values[:, :WIDTH] = np.nan
    values[0, 1] = 1e300
    means = np.full((TRIALS, LINES), -7.0)
    trial_products.line_means(values, WIDTH, 1, 6, means)
    for row, line in np.ndindex(means.shape):
        there = plain.known(values[row, line * WIDTH + 1 : line * WIDTH + 6].tolist())
        if there:
            assert means[row, line] == pytest.approx(sum(np.log2(there)) / len(there), rel=1e-12, abs=1e-12)
        else:
            assert np.isnan(means[row, line])


@pytest.mark.parametrize("count", [3, 4, 5, 11, 30])
def test_median_lines_equal_their_plain_twin(count):
    random = np.random.default_rng(count)
    places = np.sort(random.normal(size=count))
    rows = np.concatenate([random.normal(size=(20, count)), random.integers(-2, 3, size=(20, count)).astype(float)])
    slopes, heights = np.full(len(rows), np.nan), np.full(len(rows), np.nan)
    pair_slopes.median_lines(rows, places, slopes, heights)
    expected = np.array([plain.median_line(places.tolist(), row.tolist()) for row in rows])
    np.testing.assert_allclose(slopes, expected[:, 0], rtol=1e-12, atol=1e-13)
    np.testing.assert_allclose(heights, expected[:, 1], rtol=1e-12, atol=1e-12)


@pytest.mark.parametrize("kind", ["spread", "ties", "signs", "huge"])
def test_the_median_is_exact(kind):
    random = np.random.default_rng(1)
    for count in range(1, 60):
        values = random.normal(size=count)
        if kind == "ties":
            values = random.integers(0, 4, size=count).astype(float)
        if kind == "signs":
            values = np.round(values) * np.where(random.random(count) < 0.5, 0.0, 1.0)
        if kind == "huge":
            values = values * 10.0 ** random.integers(-300, 300, size=count)
        assert pair_slopes.median_of(values.copy()) == np.median(values)


@pytest.mark.parametrize("first", [-5, 0, 3, 13, 22])
@pytest.mark.parametrize("bins", [1, 6, 24])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_bands_are_weighted_and_folded(first, bins, dtype):
    length, short = 24, 8
    random = np.random.default_rng(bins)
    spectra = np.fft.rfft(random.normal(size=(3, length)))
    weights = random.normal(size=bins)
    kind = np.complex64 if dtype == np.float32 else np.complex128
    folded = np.full((3, short), np.nan, dtype=kind)
    spectral_bands.folded_bands(
        spectra.astype(kind).view(dtype), first, np.repeat(weights, 2).astype(dtype), length, folded.view(dtype)
    )
    expected = [plain.folded_band(row, first, weights, length, short) for row in spectra]
    np.testing.assert_allclose(folded, expected, rtol=0, atol=2e-5 if dtype == np.float32 else 1e-13)
    power = np.full((3, 2, 5), np.nan, dtype=dtype)
    spectral_bands.squared_magnitudes(folded.view(dtype), 1, power)
    np.testing.assert_allclose(power[:, 1], np.abs(folded[:, :5]) ** 2, rtol=1e-5 if dtype == np.float32 else 1e-13)
    assert np.isnan(power[:, 0]).all()


def test_counts_of_what_is_no_ordinary_power():
    values = np.array([1.0, 0.0, -1.0, np.inf, -np.inf, np.nan, 1e-300])
    assert counts_of_values(values) == (2, 1)
    assert counts_of_values(values.astype(np.float32)) == (1, 1)
