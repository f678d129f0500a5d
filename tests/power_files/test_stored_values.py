"""Views of stored arrays: the same numbers as numpy's own indexing, whatever lies where in the file."""

import itertools
import pickle

import h5py
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from tfstats.power_files import stored_values
from tfstats.power_files.hdf5_files import Hdf5Array
from tfstats.power_files.stored_values import JoinedValues, PickedValues, StoredValues, block_places, storage_order


class Counting:
    """An array that notes the largest piece that was asked of it."""

    def __init__(self, array):
        self.array, self.shape, self.dtype, self.largest, self.reads = array, array.shape, array.dtype, 0, 0
        self.storage_order = storage_order(array)

    def __getitem__(self, key):
        piece = self.array[key]
        self.largest, self.reads = max(self.largest, piece.size), self.reads + 1
        return piece


shapes = st.tuples(*(st.integers(1, 5) for _ in range(4)))


@settings(deadline=None, max_examples=200)
@given(shapes, st.permutations(range(4)), st.integers(1, 80), st.one_of(st.none(), shapes))
def test_blocks_cover_everything_once(shape, order, values_a_block, chunk):
    seen = np.zeros(shape, dtype=int)
    before = stored_values.BLOCK_BYTES
    stored_values.BLOCK_BYTES = 8 * values_a_block
    try:
        for place in block_places(shape, order, 8, chunk):
            seen[place] += 1
            if chunk is None:
                assert seen[place].size <= values_a_block
    finally:
        stored_values.BLOCK_BYTES = before
    assert np.all(seen == 1)


def test_a_block_runs_along_the_slowest_axis(monkeypatch):
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 2 * 3 * 4 * 5)
    places = list(block_places((7, 3, 4, 5), (0, 1, 2, 3), 8))
    assert [place[0] for place in places] == [slice(0, 2), slice(2, 4), slice(4, 6), slice(6, 7)]
    assert all(place[1:] == (slice(0, 3), slice(0, 4), slice(0, 5)) for place in places)
    assert list(block_places((2, 0, 4, 5), (0, 1, 2, 3), 8)) == []


def test_a_block_takes_whole_chunks(monkeypatch):
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 2 * 60)
    places = list(block_places((7, 3, 4, 5), (0, 1, 2, 3), 8, chunk=(3, 1, 1, 5)))
    assert [place[0] for place in places] == [slice(0, 3), slice(3, 6), slice(6, 7)]


@settings(deadline=None, max_examples=150)
@given(st.data(), st.permutations(range(4)), shapes)
def test_views_index_as_numpy_does(data, axes, shape):
    ours = np.random.default_rng(1).exponential(size=shape)
    stored = np.ascontiguousarray(ours.transpose(axes))
    view = StoredValues(stored, [list(axes).index(axis) for axis in range(4)])
    assert view.shape == ours.shape and view.nbytes == ours.nbytes and len(view) == shape[0]
    np.testing.assert_array_equal(np.asarray(view), ours)
    keys = []
    for length in shape:
        kind = data.draw(st.sampled_from(["all", "number", "slice"]))
        low, high = sorted(data.draw(st.tuples(st.integers(0, length), st.integers(0, length))))
        keys.append({"all": slice(None), "number": max(low - 1, 0), "slice": slice(low, high)}[kind])
    np.testing.assert_array_equal(view[tuple(keys)], ours[tuple(keys)])
    axis = data.draw(st.integers(0, 3))
    rows = data.draw(st.lists(st.integers(0, shape[axis] - 1), min_size=1, max_size=6))
    keys = [slice(None)] * 4
    keys[axis] = rows
    np.testing.assert_array_equal(view[tuple(keys)], ours[tuple(keys)])
    np.testing.assert_array_equal(view[..., 0], ours[..., 0])
    picks = [np.array(data.draw(st.lists(st.integers(0, n - 1), min_size=1, max_size=6))) for n in shape]
    picked = PickedValues(view, picks)
    np.testing.assert_array_equal(picked[:], ours[np.ix_(*picks)])
    joined = JoinedValues([view, picked]) if picked.shape[1:] == view.shape[1:] else JoinedValues([view, view])
    both = np.concatenate([ours, picked[:] if picked.shape[1:] == view.shape[1:] else ours])
    np.testing.assert_array_equal(joined[:], both)
    rows = data.draw(st.lists(st.integers(0, len(both) - 1), min_size=1, max_size=8))
    np.testing.assert_array_equal(joined[rows], both[rows])


def test_two_lists_of_positions_are_not_guessed_at():
    view = StoredValues(np.ones((2, 2, 2, 2)))
    with pytest.raises(IndexError, match="one list of positions"):
        view[[0], [1]]
    with pytest.raises(ValueError, match="without being read"):
        np.asarray(view, copy=False)


def test_missing_axes_have_length_one():
    stored = np.random.default_rng(2).exponential(size=(4, 1, 3))
    view = StoredValues(stored, (None, None, 2, 0))
    np.testing.assert_array_equal(view[:], stored[:, 0].T[None, None])


def test_sparse_trials_are_not_read_through():
    source = Counting(np.random.default_rng(3).exponential(size=(1000, 2, 2, 2)))
    view = PickedValues(StoredValues(source), [np.array([999, 0, 500, 3]), *(np.arange(2) for _ in range(3))])
    np.testing.assert_array_equal(view[:], source.array[[999, 0, 500, 3]])
    assert source.reads == 3 and source.largest == 4 * 8


@pytest.mark.parametrize(
    ("contents", "convert"),
    [("linear_power", lambda x: x), ("amplitude", lambda x: x**2), ("decibel", lambda x: 10 ** (x / 10))],
)
@pytest.mark.parametrize("kind", [np.float32, np.float64, np.int16])
def test_contents_become_linear_power(contents, convert, kind):
    stored = (np.random.default_rng(4).exponential(size=(2, 3, 4, 5)) * 9 + 1).astype(kind)
    view = StoredValues(stored, contents=contents)
    expected = np.float32 if kind == np.float32 else np.float64
    assert view.dtype == expected and view[:].dtype == expected
    np.testing.assert_allclose(view[:], convert(stored.astype(np.float64)), rtol=1e-6 if kind == np.float32 else 1e-14)


@pytest.mark.parametrize("kind", [np.complex64, np.complex128, "pair"])
def test_complex_values_become_their_squared_modulus(kind):
    rng = np.random.default_rng(5)
    values = rng.normal(size=(2, 3, 4, 5)) + 1j * rng.normal(size=(2, 3, 4, 5))
    if kind == "pair":
        stored = np.empty(values.shape, dtype=[("real", "<f8"), ("imag", "<f8")])
        stored["real"], stored["imag"] = values.real, values.imag
    else:
        stored = values.astype(kind)
    view = StoredValues(stored, contents="complex")
    assert view.dtype == (np.float32 if kind == np.complex64 else np.float64) and view[:].dtype == view.dtype
    np.testing.assert_allclose(view[:], np.abs(values) ** 2, rtol=1e-5 if kind == np.complex64 else 1e-14)


@pytest.mark.parametrize("order", list(itertools.permutations(range(4)))[::5])
@pytest.mark.parametrize("turned", [False, True])
def test_datasets_are_read_in_their_own_order(tmp_path, order, turned, monkeypatch):
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 60)
    ours = np.random.default_rng(6).exponential(size=(9, 3, 4, 5))
    logical = ours.transpose(order)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        # The array as a program would store it whose first axis is the fastest.
        dataset = file.create_dataset("power", data=logical.T if turned else logical)
        stored = Hdf5Array(tmp_path / "a.h5", dataset, turned=turned)
    view = StoredValues(stored, [order.index(axis) for axis in range(4)])
    slowest = order[-1] if turned else order[0]
    assert view.storage_order[0] == slowest
    places = list(block_places(view.shape, view.storage_order, 8, view.chunk))
    assert len(places) > 3
    for place in places:
        np.testing.assert_array_equal(view[place], ours[place])
    again = pickle.loads(pickle.dumps(view))  # to another process: the file is opened there anew
    np.testing.assert_array_equal(again[:], ours)
