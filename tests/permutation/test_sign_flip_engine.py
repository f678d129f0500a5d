"""The sign-flip engine against its plain twin; the same bytes whatever the threads, panels and vectors."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage, stats

from tests.plain_versions import relabelled_maps as plain
from tfstats.permutation import flip_job, relabelling_job, sign_flip_engine
from tfstats.permutation.sign_flip_engine import LARGEST_T, counts_at_least, null_of_sign_flips, statistic_of_flips

TAILS = ["two-sided", "greater", "less"]
SUMMARIES = ["maximum", "mass", "extent", "enhanced"]
TOLERANCE = {np.float32: 5e-6, np.float64: 1e-10}


def smooth_study(units=12, shape=(1, 12, 90), kind=np.float32, seed=0, rows=40):
    generator = np.random.default_rng(seed)
    values = ndimage.gaussian_filter(generator.standard_normal((units, *shape)), (0, 0, 1, 3)).astype(kind)
    flips = generator.integers(0, 2, (rows, units)).astype(np.uint8)
    flips[0] = 0
    return values, flips


def expected_null(values, flips, summary, tail, critical, edges, counts=None):
    return np.array(
        [plain.summary_of_map(plain.one_sample_t(values, row, counts), summary, tail, critical, edges) for row in flips]
    )


@st.composite
def studies(draw):
    """Few units, rough maps with points left out, ties, gaps; channels joined at random."""
    units = draw(st.integers(2, 13))
    shape = draw(st.tuples(st.integers(1, 3), st.integers(1, 5), st.integers(1, 40)))
    generator = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    values = generator.standard_normal((units, *shape))
    if draw(st.booleans()):
        values = np.round(values * 2) / 2
    values[:, generator.random(shape) < draw(st.sampled_from([0.0, 0.2]))] = 0.0
    counts = None
    if draw(st.booleans()):
        missing = generator.random(values.shape) < 0.15
        values[missing] = 0.0
        counts = units - missing.sum(axis=0)
    flips = generator.integers(0, 2, (draw(st.integers(1, 12)), units)).astype(np.uint8)
    flips[0] = 0
    edges = np.array([(a, b) for b in range(shape[0]) for a in range(b) if generator.random() < 0.5]).reshape(-1, 2)
    return values.astype(draw(st.sampled_from([np.float32, np.float64]))), flips, counts, edges


@settings(deadline=None, max_examples=200)
@given(studies(), st.sampled_from(SUMMARIES), st.sampled_from(TAILS), st.booleans())
def test_null_is_that_of_the_twin(study, summary, tail, wide):
    values, flips, counts, edges = study
    # A critical value between two ties would be decided by rounding; this one is not a t of halves.
    by_count = 1.2345 + 0.1 * np.arange(len(values) + 1)
    critical = by_count if counts is not None else 1.2345
    limit = by_count[counts] if counts is not None else 1.2345
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(flip_job, "wide_vectors", lambda: wide)
        patch.setattr(relabelling_job, "wide_vectors", lambda: wide)
        got = null_of_sign_flips(
            values, flips, summary=summary, tail=tail, critical=critical, edges=edges, unit_counts=counts, threads=1
        )
    expected = expected_null(values, flips, summary, tail, limit, edges, counts)
    # Where all values of a point are alike, nothing but rounding is left below the line of t: both are cut at
    # LARGEST_T.
    np.testing.assert_allclose(got, expected, rtol=1e-5, atol=1e-9)


@settings(deadline=None, max_examples=100)
@given(studies(), st.sampled_from(TAILS))
def test_counts_and_maps_are_those_of_the_twin(study, tail):
    values, flips, counts, _edges = study
    maps = [plain.one_sample_t(values, row, counts) for row in flips]
    np.testing.assert_allclose(
        statistic_of_flips(values, flips[-1], unit_counts=counts), maps[-1], rtol=1e-8, atol=1e-9
    )
    got = counts_at_least(values, flips, tail=tail, tolerance=1e-7, unit_counts=counts)
    assert got.dtype == np.int64
    # Observed values of 0 up to rounding are ties that rounding decides in the twin.
    sure = np.abs(maps[0]) > 1e-9
    np.testing.assert_array_equal(got[sure], plain.counts_at_least(maps, tail, 1e-7)[sure])
    assert (got >= 1).all()


@pytest.mark.parametrize("kind", [np.float32, np.float64])
@pytest.mark.parametrize("summary", SUMMARIES)
@pytest.mark.parametrize("tail", TAILS)
def test_smooth_maps(kind, summary, tail):
    # The twin of the enhanced value goes through every height that occurs.
    shape, rows = ((2, 6, 30), 4) if summary == "enhanced" else ((2, 10, 150), 25)
    values, flips = smooth_study(kind=kind, shape=shape, rows=rows)
    edges = np.array([[0, 1]])
    got = null_of_sign_flips(values, flips, summary=summary, tail=tail, critical=2.2, edges=edges, threads=2)
    np.testing.assert_allclose(got, expected_null(values, flips, summary, tail, 2.2, edges), rtol=TOLERANCE[kind])


def test_the_quick_way_ran(monkeypatch):
    calls = []
    real = flip_job.flip_chunk
    monkeypatch.setattr(flip_job, "flip_chunk", lambda *a: calls.append(1) or real(*a))
    monkeypatch.setattr(sign_flip_engine, "job_null", None)
    values, flips = smooth_study()
    for summary in ("mass", "extent"):
        assert np.isfinite(null_of_sign_flips(values, flips, summary=summary, tail="two-sided", critical=2.0)).all()
    assert len(calls) == 2


@pytest.mark.parametrize("kind", [np.float32, np.float64])
@pytest.mark.parametrize("summary", SUMMARIES)
def test_same_bytes_for_threads_panels_order_and_vectors(monkeypatch, kind, summary):
    values, flips = smooth_study(units=17, shape=(2, 7, 75), kind=kind, rows=230)
    edges = np.array([[0, 1]])

    def null(rows=flips, **more):
        return null_of_sign_flips(values, rows, summary=summary, tail="two-sided", critical=2.0, edges=edges, **more)

    reference = null(threads=1)
    assert np.unique(reference).size > (100 if summary != "extent" else 20)
    for threads in (2, 3, 7):
        assert null(threads=threads).tobytes() == reference.tobytes()
    # In another order, and a part of them.
    shuffled = np.random.default_rng(2).permutation(len(flips))
    assert null(flips[shuffled], threads=2).tobytes() == reference[shuffled].tobytes()
    assert null(flips[:50], threads=2).tobytes() == reference[:50].tobytes()
    # Another size of panels and of lists, and lists that turn out too short.
    for panel, most, list_bytes in ((16, 5, 10_000), (64, 1000, 2**20), (1000, 16, 1)):
        with monkeypatch.context() as patch:
            patch.setattr(flip_job, "_PANEL", panel)
            patch.setattr(flip_job, "_LIST_BYTES", list_bytes)
            patch.setattr(relabelling_job, "_LIST_BYTES", list_bytes)
            patch.setattr(relabelling_job, "_MOST_ROWS", most)
            assert null(threads=2).tobytes() == reference.tobytes()
    # The leading groups of units looked up as one, and the other vector width.
    with monkeypatch.context() as patch:
        patch.setattr(flip_job, "_ROWS_FOR_MERGED_LEAD", 100)
        assert null(threads=2).tobytes() == reference.tobytes()
        patch.setattr(flip_job, "wide_vectors", lambda: False)
        patch.setattr(relabelling_job, "wide_vectors", lambda: False)
        assert null(threads=2).tobytes() == reference.tobytes()
    # Rows made panel by panel.
    made = null(lambda first, last: flips[first:last], number_of_rows=len(flips), threads=2)
    assert made.tobytes() == reference.tobytes()


def test_same_counts_for_threads_and_panels(monkeypatch):
    values, flips = smooth_study(rows=300)
    reference = counts_at_least(values, flips, tail="two-sided", tolerance=1e-6)
    assert counts_at_least(values, flips, tail="two-sided", tolerance=1e-6, threads=3).tobytes() == reference.tobytes()
    monkeypatch.setattr(relabelling_job, "_MOST_ROWS", 16)
    made = counts_at_least(
        values, lambda a, b: flips[a:b], tail="two-sided", tolerance=1e-6, threads=2, number_of_rows=len(flips)
    )
    assert made.tobytes() == reference.tobytes()


def test_a_row_and_its_negative_mirror_each_other():
    values, flips = smooth_study()
    for summary in SUMMARIES:
        up = null_of_sign_flips(values, flips, summary=summary, tail="greater", critical=2.0)
        down = null_of_sign_flips(values, 1 - flips, summary=summary, tail="less", critical=2.0)
        assert up.tobytes() == down.tobytes()


@pytest.mark.parametrize("kind", [np.float32, np.float64])
def test_a_mean_ten_thousand_times_the_spread(kind):
    generator = np.random.default_rng(4)
    values = (1e4 + generator.standard_normal((9, 1, 4, 30))).astype(kind)
    flips = np.zeros((6, 9), np.uint8)
    flips[1:] = generator.integers(0, 2, (5, 9))
    for summary in SUMMARIES:  # one-sample: the mean is the effect, so t itself is far out
        got = null_of_sign_flips(values, flips, summary=summary, tail="two-sided", critical=2.3)
        np.testing.assert_allclose(got, expected_null(values, flips, summary, "two-sided", 2.3, []), rtol=1e-5)
    np.testing.assert_allclose(
        statistic_of_flips(values, flips[0]), stats.ttest_1samp(values.astype(float), 0).statistic, rtol=1e-5
    )


def test_values_without_spread_have_the_largest_t():
    values = np.ones((6, 1, 1, 3))
    values[:, 0, 0, 2] = 0.0
    flips = np.array([[0] * 6, [1] * 6, [1, 0, 0, 0, 0, 0]], np.uint8)
    np.testing.assert_array_equal(statistic_of_flips(values, flips[0]), [[[LARGEST_T, LARGEST_T, 0.0]]])
    np.testing.assert_array_equal(statistic_of_flips(values, flips[1]), [[[-LARGEST_T, -LARGEST_T, 0.0]]])
    null = null_of_sign_flips(values, flips, summary="mass", tail="two-sided", critical=2.5)
    assert stats.ttest_1samp([-1, 1, 1, 1, 1, 1], 0).statistic < 2.5
    np.testing.assert_array_equal(null, [2 * LARGEST_T, 2 * LARGEST_T, 0.0])
    np.testing.assert_array_equal(counts_at_least(values, flips, tail="two-sided", tolerance=1e-9), [[[2, 2, 3]]])


def test_strict_threshold_on_a_tie():
    # Signed sums of 8 ones and minus ones: t = Z * sqrt(7 / (64 - Z^2)) with Z = 8 - 2 * flips, exactly a few values.
    values = np.ones((8, 1, 1, 200), np.float32)
    flips = np.array([[0] * 8, [1, 1] + [0] * 6, [1] + [0] * 7], np.uint8)
    t = stats.ttest_1samp([-1, -1, 1, 1, 1, 1, 1, 1], 0).statistic
    at = null_of_sign_flips(values, flips, summary="extent", tail="greater", critical=np.nextafter(t, 10))
    below = null_of_sign_flips(values, flips, summary="extent", tail="greater", critical=t * (1 - 1e-12))
    assert at[1] == 0
    assert below[1] == 200
    assert at[2] == below[2] == 200


def test_progress_counts_all_rows():
    values, flips = smooth_study(rows=100)
    for threads in (1, 2):
        seen = []
        null_of_sign_flips(
            values, flips, summary="mass", tail="two-sided", critical=2.0, threads=threads, progress=seen.append
        )
        assert seen == sorted(seen)
        assert seen[-1] == 100


def test_a_callable_needs_the_number_of_rows():
    values, flips = smooth_study()
    with pytest.raises(TypeError, match="number_of_rows"):
        null_of_sign_flips(values, lambda a, b: flips[a:b], summary="mass", tail="two-sided", critical=2.0)


def test_one_unit_and_no_point_tested():
    one = np.ones((1, 1, 2, 3))
    assert null_of_sign_flips(one, np.zeros((1, 1), np.uint8), summary="mass", tail="two-sided", critical=2.0)[0] == 0.0
    none = np.zeros((5, 1, 2, 3))
    for summary in SUMMARIES:
        null = null_of_sign_flips(none, np.zeros((3, 5), np.uint8), summary=summary, tail="two-sided", critical=2.0)
        np.testing.assert_array_equal(null, 0.0)


@pytest.mark.slow
def test_a_map_of_more_than_two_to_the_sixteen_points():
    values, flips = smooth_study(units=10, shape=(3, 60, 700), rows=6)
    edges = np.array([[0, 2], [1, 2]])
    for summary in ("mass", "enhanced"):
        got = null_of_sign_flips(values, flips, summary=summary, tail="two-sided", critical=2.2, edges=edges, threads=2)
        maps = [plain.one_sample_t(values, row) for row in flips]
        if summary == "mass":
            expected = [plain.summary_of_map(m, summary, "two-sided", 2.2, edges) for m in maps]
            np.testing.assert_allclose(got, expected, rtol=5e-6)
        assert got.shape == (6,)
