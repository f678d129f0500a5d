"""TrialPower: what is kept, what is selected, what is averaged, and when values are looked at."""

import h5py
import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.power_files import stored_values
from tfstats.power_files.stored_values import LazyPower


@pytest.fixture(params=["array", "memory map", "dataset"])
def stored(request, tmp_path, make_power):
    """The same power in memory, in a `.npy` and in a `.h5` file."""
    power = make_power(trials=7, table=pd.DataFrame({"memory": list("abcabca"), "load": [1.0, 2, 3, 1, 2, 3, 2]}))
    values = power.values
    if request.param == "memory map":
        np.save(tmp_path / "power.npy", values)
        values = np.load(tmp_path / "power.npy", mmap_mode="r")
    elif request.param == "dataset":
        file = h5py.File(tmp_path / "power.h5", "w")
        request.addfinalizer(file.close)
        values = file.create_dataset("power", data=values)
    made = tfs.TrialPower(
        values, frequencies=power.frequencies, times=power.times, channels=power.channels, trials=power.trials,
        subject=power.subject, wavelet_cycles=[3, 4, 5], scaling="density",
    )  # fmt: skip
    assert isinstance(made.values, LazyPower) == (request.param != "array")
    return made, power.values


def test_attributes(make_power):
    power = make_power(wavelet_cycles=7, scaling="amplitude", power_unit="µV²", source="a/S1.mat", notes="one.")
    assert power.channels == ("C0", "C1") and power.subject == "S1" and power.scaling == "amplitude"
    assert power.wavelet_cycles.tolist() == [7.0, 7.0, 7.0] and power.power_unit == "µV²"
    assert power.source == "a/S1.mat" and power.notes == ("one.",)
    assert isinstance(power.trials.index, pd.RangeIndex)
    assert repr(power) == "<TrialPower S1: 5 trials x 2 channels x 3 frequencies x 4 times>"


def test_trials_get_a_range_index(make_power):
    table = pd.DataFrame({"memory": list("abcde")}, index=[3, 1, 4, 1, 5])
    assert make_power(table=table).trials.index.tolist() == [0, 1, 2, 3, 4]


@pytest.mark.parametrize(("kind", "kept"), [("f4", "f4"), ("f8", "f8"), ("i2", "f8"), ("f2", "f8"), (">f4", "f8")])
def test_types(make_power, kind, kept):
    power = make_power()
    values = np.ones((5, 2, 3, 4), dtype=kind)
    made = tfs.TrialPower(
        values,
        frequencies=power.frequencies,
        times=power.times,
        channels=power.channels,
        trials=power.trials,
        subject=7.0,
    )
    assert made.values.dtype == np.dtype(kept) and made.subject == "7"
    assert (made.values is values) == (kind in ("f4", "f8"))


def test_blocks_are_the_values(stored, monkeypatch):
    power, values = stored
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 60)
    seen = np.zeros(values.shape)
    places = []
    for place, block in power.blocks():
        seen[place] += block
        places.append(place)
    np.testing.assert_array_equal(seen, values)
    assert len(places) == 4 and places[0] == (slice(0, 2), slice(0, 2), slice(0, 3), slice(0, 4))
    np.testing.assert_array_equal(power.as_array(), values)


def test_blocks_of_trials_last_run_along_the_last_axis(make_power, monkeypatch):
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 10)
    power = make_power()
    turned = tfs.TrialPower(
        np.asfortranarray(power.values), frequencies=power.frequencies, times=power.times, channels=power.channels,
        trials=power.trials, subject="S1",
    )  # fmt: skip
    place, block = next(turned.blocks())
    assert place == (slice(0, 5), slice(0, 2), slice(0, 1), slice(0, 1))
    np.testing.assert_array_equal(block, power.values[place])


@pytest.mark.parametrize(
    ("trials", "rows"),
    [
        (None, [0, 1, 2, 3, 4, 5, 6]),
        (np.array([True, False, False, True, False, False, True]), [0, 3, 6]),
        ([5, 2, 2], [5, 2, 2]),
        ({"memory": "b"}, [1, 4]),
        ({"load": 2}, [1, 4, 6]),
        ({"load": "2", "memory": ["a", "c"]}, [6]),
    ],
)
def test_select(stored, trials, rows):
    power, values = stored
    part = power.select(trials=trials, channels=["C1", "C0"], frequencies=(4, 8), times=(0.0, 0.1))
    np.testing.assert_array_equal(part.as_array(), values[np.ix_(rows, [1, 0], [1, 2], [1, 2])])
    assert part.channels == ("C1", "C0") and part.frequencies.tolist() == [4.0, 8.0]
    np.testing.assert_allclose(part.times, [0.0, 0.1], atol=1e-15)
    assert part.wavelet_cycles.tolist() == [4.0, 5.0]
    assert part.trials["memory"].tolist() == [power.trials["memory"][row] for row in rows]
    assert part.trials.index.tolist() == list(range(len(rows)))
    again = part.select(trials=[0], channels=["C0"])
    np.testing.assert_array_equal(again.as_array()[0, 0], values[rows[0], 0, 1:3, 1:3])


def test_selecting_from_a_file_reads_nothing(tmp_path, make_power):
    power = make_power()
    tfs.write_power(tmp_path / "S1.h5", power)
    part = tfs.read_power(tmp_path / "S1.h5").select(trials={"memory": "missed"})
    (tmp_path / "S1.h5").rename(tmp_path / "gone.h5")
    with pytest.raises(OSError):
        part.as_array()


@pytest.mark.parametrize("groups", [{"both": ["C0", "C1"], "second": ["C1"], "twice": ["C0", "C0"]}, None])
def test_mean_across_channels(stored, groups, monkeypatch):
    power, values = stored
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 5)  # the channels of a group come in different blocks
    mean = power.mean_across("channels", groups)
    if groups is None:
        assert mean.channels == ("mean of 2 channels",)
        np.testing.assert_allclose(mean.values, values.mean(axis=1, keepdims=True), rtol=1e-15)
    else:
        assert mean.channels == ("both", "second", "twice")
        np.testing.assert_allclose(mean.values[:, 0], values.mean(axis=1), rtol=1e-15)
        np.testing.assert_array_equal(mean.values[:, 1], values[:, 1])
        np.testing.assert_array_equal(mean.values[:, 2], values[:, 0])
        assert mean.notes == (
            "Power was averaged over channels (both: C0, C1; second: C1; twice: C0), each channel weighing the same.",
        )
    assert mean.values.dtype == np.float64 and isinstance(mean.values, np.ndarray)


def test_mean_across_never_changes_its_channels_between_trials(make_power):
    values = make_power(channels=3).values.copy()
    values[:, 2] = np.nan  # a channel that was never recorded
    values[1, 0, :, 0] = np.nan
    power = make_power(channels=3)
    power = tfs.TrialPower(
        values.astype(np.float32), frequencies=power.frequencies, times=power.times, channels=power.channels,
        trials=power.trials, subject="S1",
    )  # fmt: skip
    mean = power.mean_across("channels", {"all": ["C0", "C1", "C2"], "last": ["C2"]})
    assert mean.values.dtype == np.float32
    expected = (values[:, 0] + values[:, 1]) / 2
    np.testing.assert_allclose(mean.values[:, 0], expected, rtol=1e-6)
    assert np.isnan(mean.values[1, 0, :, 0]).all() and np.isnan(mean.values[:, 1]).all()
    assert mean.notes[1] == "In that mean channels without any power were left out: C2 (subject S1)."


def test_nan_is_welcome_where_power_is_not_known(make_power):
    values = make_power().values.copy()
    values[..., :2] = np.nan
    power = make_power()
    made = tfs.TrialPower(
        values,
        frequencies=power.frequencies,
        times=power.times,
        channels=power.channels,
        trials=power.trials,
        subject="S1",
    )
    made.check()
    np.testing.assert_array_equal(made.as_array(), values)


def test_values_in_a_file_are_checked_when_they_are_read(tmp_path, make_power):
    power = make_power()
    values = power.values.copy()
    values[3, 1, 2, 0] = 0.0
    values[4, 0, 0, 0] = -2.0
    with h5py.File(tmp_path / "S1.h5", "w") as file:
        file["power"], file["frequencies"], file["times"], file["channels"] = (
            values,
            [2, 4, 8],
            power.times,
            ["C0", "C1"],
        )
    lazy = tfs.read_power(tmp_path / "S1.h5")
    for read in (lazy.check, lazy.as_array, lambda: list(lazy.blocks()), lambda: lazy.mean_across("channels")):
        with pytest.raises(tfs.InputError, match="1 negative values .*first in trial 3, channel C1"):
            read()
    assert lazy.select(trials=[0, 1]).as_array().shape == (2, 2, 3, 4)


def test_a_block_is_checked_before_anyone_sees_it(tmp_path, make_power, monkeypatch):
    monkeypatch.setattr(stored_values, "BLOCK_BYTES", 8 * 24)
    power = make_power()
    values = power.values.copy()
    values[3] = np.inf
    np.save(tmp_path / "a.npy", values)
    lazy = tfs.TrialPower(
        np.load(tmp_path / "a.npy", mmap_mode="r"), frequencies=power.frequencies, times=power.times,
        channels=power.channels, trials=power.trials, subject="S1",
    )  # fmt: skip
    seen = []
    with pytest.raises(tfs.InputError, match="24 infinite values"):
        for _, block in lazy.blocks():
            assert np.isfinite(block).all()
            seen.append(block)
    assert len(seen) == 3


@pytest.mark.parametrize("level", [0.0, 30.0, 200.0])
def test_positive_decibels_are_told_by_their_shape(level):
    rng = np.random.default_rng(11)
    linear = rng.exponential(size=(60, 4, 10, 30)) * 10 ** (level / 10)
    axes = {
        "frequencies": np.arange(1, 11), "times": np.arange(30) / 100, "channels": list("abcd"), "subject": "S1",
        "trials": pd.DataFrame(index=range(60)),
    }  # fmt: skip
    tfs.TrialPower(linear, **axes)
    tfs.TrialPower(linear.astype(np.float32), **axes)
    decibels = 10 * np.log10(linear)
    with pytest.raises(tfs.InputError, match='spread like decibels|negative values.*contents = "decibel"'):
        tfs.TrialPower(decibels, **axes)
    shifted = decibels - decibels.min() + 1
    with pytest.raises(tfs.InputError, match="spread like decibels"):
        tfs.TrialPower(shifted, **axes)


@pytest.mark.parametrize("scale", [1e-12, 1.0, 3.0, 5.6, 10.0, 1e6])
@pytest.mark.parametrize("make", [
    lambda rng, size: rng.exponential(size=size),
    lambda rng, size: rng.gamma(5.0, size=size),
    lambda rng, size: rng.lognormal(size=size),
    lambda rng, size: rng.uniform(0.1, 4.0, size=size),
    lambda rng, size: np.ones(size),
])  # fmt: skip
def test_linear_power_is_never_taken_for_decibels(make, scale):
    values = make(np.random.default_rng(12), (40, 3, 5, 20)) * scale
    tfs.TrialPower(
        values, frequencies=np.arange(1, 6), times=np.arange(20) / 100, channels=list("abc"), subject="S1",
        trials=pd.DataFrame(index=range(40)),
    )  # fmt: skip
