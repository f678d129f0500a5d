"""read_power and write_power: every format, every way in which real files differ."""

import importlib.util
import pickle

import h5py
import numpy as np
import pandas as pd
import pytest
import scipy.io

import tfstats as tfs
from tfstats.power_files import names_in_file
from tfstats.power_files.stored_values import LazyPower

labelled = pytest.mark.skipif(
    any(importlib.util.find_spec(name) is None for name in ("xarray", "h5netcdf")),
    reason="xarray or h5netcdf is absent",
)
ENDINGS = [".npz", ".npy", ".h5", ".hdf5", ".mat", pytest.param(".nc", marks=labelled)]


@pytest.mark.parametrize("ending", ENDINGS)
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_what_is_written_is_read_again(tmp_path, make_power, ending, dtype):
    table = pd.DataFrame({
        "memory": ["recalled", "missed", np.nan, "recalled", "mißed"], "load": [1, 2, 3, 4, 5],
        "reaction_time": [0.5, np.nan, 1.5, 2.0, 2.5], "correct": [True, False, True, True, False],
    })  # fmt: skip
    # 5 trials, 5 channels, 5 frequencies and times: lengths say nothing, the file's own axes must.
    power = make_power(
        channels=5, frequencies=5, times=5, dtype=dtype, table=table, power_unit="µV²/Hz", scaling="density",
        wavelet_cycles=[3, 4, 5, 6, 7.5],
    )  # fmt: skip
    path = tmp_path / f"any{ending}"
    tfs.write_power(path, power)
    again = tfs.read_power(path)
    assert again.subject == "S1" and again.channels == power.channels and again.source == str(path)
    assert again.power_unit == "µV²/Hz" and again.scaling == "density"
    np.testing.assert_array_equal(again.wavelet_cycles, power.wavelet_cycles)
    np.testing.assert_array_equal(again.frequencies, power.frequencies)
    np.testing.assert_array_equal(again.times, power.times)
    assert again.values.dtype == dtype
    np.testing.assert_array_equal(again.as_array(), power.values)
    assert isinstance(again.values, LazyPower) == (ending not in (".npz", ".mat"))
    assert again.trials["memory"].isna().tolist() == [False, False, True, False, False]
    assert again.trials["memory"].tolist()[4] == "mißed"
    np.testing.assert_array_equal(again.trials["reaction_time"], table["reaction_time"])
    assert [int(value) for value in again.trials["load"]] == [1, 2, 3, 4, 5]
    assert [bool(value) for value in again.trials["correct"]] == [True, False, True, True, False]
    assert {path.name for path in tmp_path.iterdir()} <= {f"any{ending}", "any.labels.npz"}


@pytest.mark.parametrize("ending", ENDINGS)
def test_unknown_parts_stay_unknown(tmp_path, make_power, ending):
    tfs.write_power(tmp_path / f"a{ending}", make_power(trials=1, channels=1, table=pd.DataFrame(index=range(1))))
    again = tfs.read_power(tmp_path / f"a{ending}", subject="other")
    assert again.wavelet_cycles is None and again.scaling is None and again.power_unit is None
    assert again.subject == "other" and again.trials.shape == (1, 0) and again.notes == ()


def write(path, *, order=("trial", "channel", "frequency", "time"), values, **parts):
    """A file of someone else: no word about its axes."""
    from tfstats.power_files.layout import DIMENSIONS

    values = np.asarray(values).transpose([DIMENSIONS.index(name) for name in order])
    if path.suffix == ".npz":
        np.savez(path, power=values, **parts)
    elif path.suffix == ".mat":
        scipy.io.savemat(path, {"power": values, **parts})
    else:
        with h5py.File(path, "w") as file:
            for name, value in {"power": values, **parts}.items():
                file[name.replace(".", "/")] = value


ORDERS = [
    ("trial", "channel", "frequency", "time"), ("channel", "frequency", "time", "trial"),
    ("time", "trial", "channel", "frequency"), ("frequency", "time", "trial", "channel"),
]  # fmt: skip


@pytest.mark.parametrize("ending", [".npz", ".h5", ".mat"])
@pytest.mark.parametrize("order", ORDERS)
def test_axes_told_by_their_lengths(tmp_path, make_power, ending, order):
    power = make_power(trials=5)
    path = tmp_path / f"S1{ending}"
    channels = ["C0", "C1"] if ending != ".mat" else np.array(["C0", "C1"], dtype=object)
    write(path, order=order, values=power.values, frequencies=power.frequencies, times=power.times, channels=channels)
    again = tfs.read_power(path)
    np.testing.assert_array_equal(again.as_array(), power.values)
    assert again.subject == "S1" and len(again.trials) == 5
    stated = tfs.read_power(path, axes=order)
    np.testing.assert_array_equal(stated.as_array(), power.values)


def test_trial_columns_tell_the_trials(tmp_path, make_power):
    # Without trial columns, 4 trials could be the 4 times; the order of the axes in the file decides nothing.
    power = make_power(trials=6, times=4, channels=4, frequencies=3)
    parts = {"frequencies": power.frequencies, "times": power.times, "channels": [f"C{n}" for n in range(4)]}
    write(tmp_path / "a.npz", values=power.values, **parts, **{"trials.memory": ["a"] * 6})
    with pytest.raises(tfs.InputError, match="axes that their lengths tell apart"):
        tfs.read_power(tmp_path / "a.npz")
    np.testing.assert_array_equal(
        tfs.read_power(tmp_path / "a.npz", axes=["trial", "channel", "frequency", "time"]).values, power.values
    )


def test_a_trial_table_tells_the_trials(tmp_path, make_power):
    power = make_power(trials=3, frequencies=5, times=4)
    values = power.values[:, :, :3]  # 3 trials, 2 channels, 3 frequencies, 4 times
    table = "memory\tload\nrecalled\t1\nmissed\t2\nn/a\t1\n"
    (tmp_path / "S1.tsv").write_text(table, encoding="utf-8")
    write(tmp_path / "S1.npz", values=values[:, :, :1], frequencies=[4.0], times=power.times, channels=["C0", "C1"])
    read = tfs.read_power(tmp_path / "S1.npz", subject="S1", trial_table=tmp_path / "{subject}.tsv")
    assert read.trials["memory"].isna().tolist() == [False, False, True] and read.trials["load"].tolist() == [1, 2, 1]


@pytest.mark.parametrize("ending", [".npz", ".h5", ".mat"])
def test_axes_of_length_one_may_be_missing(tmp_path, make_power, ending):
    power = make_power(trials=5, channels=1)
    path = tmp_path / f"S1{ending}"
    parts = {"frequencies": power.frequencies, "times": power.times, "channels": ["Fz"]}
    stored = power.values[:, 0].transpose(1, 2, 0)
    if ending == ".h5":
        with h5py.File(path, "w") as file:
            for name, value in {"power": stored, **parts}.items():
                file[name] = value
    elif ending == ".npz":
        np.savez(path, power=stored, **parts)
    else:
        scipy.io.savemat(path, {"power": stored, **parts})
    for axes in (None, ["frequency", "time", "trial"], ["frequency", "time", "trial", "channel"]):
        np.testing.assert_array_equal(tfs.read_power(path, axes=axes).as_array(), power.values)


def test_descending_frequencies_are_turned(tmp_path, make_power):
    power = make_power(frequencies=3)
    write(
        tmp_path / "a.h5", values=power.values[:, :, ::-1], frequencies=power.frequencies[::-1], times=power.times,
        channels=["C0", "C1"], wavelet_cycles=[7.0, 5.0, 3.0],
    )  # fmt: skip
    again = tfs.read_power(tmp_path / "a.h5")
    assert again.frequencies.tolist() == [2.0, 4.0, 8.0] and again.wavelet_cycles.tolist() == [3.0, 5.0, 7.0]
    np.testing.assert_array_equal(again.as_array(), power.values)


def test_milliseconds(tmp_path, make_power):
    power = make_power()
    parts = {"frequencies": power.frequencies, "channels": ["C0", "C1"], "values": power.values}
    write(tmp_path / "a.npz", times=[-500, 0, 500, 1000], **parts)
    with pytest.raises(tfs.InputError, match='probably milliseconds; set time_unit = "ms"'):
        tfs.read_power(tmp_path / "a.npz")
    assert tfs.read_power(tmp_path / "a.npz", time_unit="ms").times.tolist() == [-0.5, 0.0, 0.5, 1.0]
    write(tmp_path / "b.npz", times=[-0.5, 0, 0.5, 1], **parts)
    with pytest.raises(tfs.InputError, match="probably seconds"):
        tfs.read_power(tmp_path / "b.npz", time_unit="ms")


@pytest.mark.parametrize("ending", [".npz", ".h5", ".mat"])
def test_other_contents(tmp_path, make_power, ending):
    power = make_power(trials=40)
    parts = {"frequencies": power.frequencies, "times": power.times, "channels": ["C0", "C1"]}
    rng = np.random.default_rng(3)
    phase = np.exp(2j * np.pi * rng.random(power.values.shape))
    for contents, values in (
        ("decibel", 10 * np.log10(power.values)),
        ("amplitude", np.sqrt(power.values)),
        ("complex", np.sqrt(power.values) * phase),
    ):
        path = tmp_path / f"{contents}{ending}"
        write(path, values=values, **parts)
        again = tfs.read_power(path, contents=contents)
        np.testing.assert_allclose(again.as_array(), power.values, rtol=1e-12)
        assert len(again.notes) == 1 and again.notes[0].endswith(".")
        if contents != "amplitude":
            with pytest.raises(tfs.InputError, match=f'set contents = "{contents}"'):
                tfs.read_power(path).check()


def test_names_go_into_groups(tmp_path, make_power):
    power = make_power()
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["session/tf/pow"], file["session/f"], file["t.ms"] = power.values, power.frequencies, power.times * 1000
        file["session/sensors"] = np.array(["C0", "C1"], dtype=object)
        file["session/codes"] = np.array([1, 0, 1, 0, 1])
        file["session/events/run"] = 3.0
        file["session/events/deep/side"] = np.array([b"left"] * 5)
    names = {
        "power": "session.tf.pow", "frequencies": "session.f", "times": "t.ms", "channels": "session.sensors",
        "trials": {"memory": "session.codes"},
    }  # fmt: skip
    read = tfs.read_power(
        tmp_path / "a.h5", names=names, time_unit="ms", recode={"memory": {1: "recalled", "0": "missed"}}
    )
    np.testing.assert_array_equal(read.as_array(), power.values)
    assert read.trials["memory"].tolist() == ["recalled", "missed", "recalled", "missed", "recalled"]
    names = {**names, "trials": "session.events", "trials.memory": "session.codes"}
    read = tfs.read_power(tmp_path / "a.h5", names=names, time_unit="ms")
    assert list(read.trials) == ["deep.side", "run", "memory"]
    assert read.trials["run"].tolist() == [3.0] * 5 and read.trials["deep.side"].tolist() == ["left"] * 5
    listed = names_in_file(tmp_path / "a.h5")
    assert listed["session.tf.pow"] == ((5, 2, 3, 4), "number") and listed["session.sensors"] == ((2,), "text")


def test_keep_and_recode(tmp_path, make_power):
    table = pd.DataFrame({
        "artefact": [0.0, 1.0, 0.0, 0.0, 0.0], "reaction_time": [0.5, 0.5, 2.5, np.nan, 2.0],
        "memory": [True, True, True, True, False],
    })  # fmt: skip
    power = make_power(table=table)
    for ending in (".h5", ".npz"):
        tfs.write_power(tmp_path / f"S1{ending}", power)
        read = tfs.read_power(
            tmp_path / f"S1{ending}", recode={"memory": {"1": "recalled"}},
            keep={"artefact": 0, "reaction_time": {"at_most": 2.0, "at_least": 0.1}, "memory": {"one_of": ["recalled", 0]}},
        )  # fmt: skip
        np.testing.assert_array_equal(read.as_array(), power.values[[0, 4]])
        assert read.trials["memory"].tolist() == ["recalled", "0"]
        assert read.notes == (
            "Subject S1: 2 of 5 trials were kept (artefact 0, reaction_time at least 0.1, reaction_time at most 2, "
            "memory recalled or 0).",
        )
        assert tfs.read_power(tmp_path / f"S1{ending}", keep={"artefact": [0, 1]}).notes == ()


def test_a_bare_array(tmp_path, make_power):
    power = make_power()
    np.save(tmp_path / "S1.npy", power.values)
    read = tfs.read_power(
        tmp_path / "S1.npy", frequencies=power.frequencies, times=power.times, channels=["C0", "C1"], scaling="density",
        wavelet_cycles=5, power_unit="V²",
    )  # fmt: skip
    np.testing.assert_array_equal(read.as_array(), power.values)
    assert isinstance(read.values, LazyPower) and read.scaling == "density" and read.power_unit == "V²"
    assert read.wavelet_cycles.tolist() == [5.0] * 3


class Trap:
    """Would show itself if anything unpickled it."""

    def __reduce__(self):
        return (pytest.fail, ("a pickle was loaded",))


@pytest.mark.parametrize("where", ["channels", "power", "whole"])
def test_pickles_are_never_loaded(tmp_path, make_power, where):
    power = make_power()
    trap = np.array([Trap(), Trap()], dtype=object)
    parts = {"power": power.values, "frequencies": power.frequencies, "times": power.times, "channels": ["C0", "C1"]}
    if where == "whole":
        np.save(tmp_path / "a.npy", trap, allow_pickle=True)
        (tmp_path / "b.npz").write_bytes(pickle.dumps(Trap()))
        (tmp_path / "c.npy").write_bytes(pickle.dumps(Trap()))
        for name, text in (("a.npy", "never loaded"), ("b.npz", "cannot be read"), ("c.npy", "cannot be read")):
            with pytest.raises(tfs.InputError, match=text):
                tfs.read_power(tmp_path / name)
        return
    np.savez(tmp_path / "a.npz", allow_pickle=True, **{**parts, where: trap})
    with pytest.raises(tfs.InputError, match="pickled Python objects, which are never loaded"):
        tfs.read_power(tmp_path / "a.npz")


@pytest.mark.parametrize("ending", [".npz", ".npy", ".h5", ".mat", pytest.param(".nc", marks=labelled)])
@pytest.mark.parametrize("share", [0.0, 0.01, 0.5, 0.9])
def test_damaged_files_are_refused(tmp_path, make_power, ending, share):
    tfs.write_power(tmp_path / f"whole{ending}", make_power(trials=50))
    content = (tmp_path / f"whole{ending}").read_bytes()
    path = tmp_path / f"part{ending}"
    path.write_bytes(content[: int(share * len(content))])
    with pytest.raises(tfs.InputError) as refused:
        tfs.read_power(path).check()
    assert all(str(path) in problem for problem in refused.value.problems)


def test_a_failed_write_leaves_nothing(tmp_path, make_power, monkeypatch):
    power = make_power()
    monkeypatch.setattr(tfs.TrialPower, "blocks", lambda self: iter([((slice(0, 1),) * 4, "not numbers")]))
    with pytest.raises((TypeError, ValueError, OSError)):
        tfs.write_power(tmp_path / "S1.h5", power)
    assert list(tmp_path.iterdir()) == []


@labelled
def test_netcdf_dimensions_name_the_axes(tmp_path, make_power):
    import xarray

    power = make_power(trials=4, channels=4, frequencies=4, times=4)
    stored = xarray.Dataset(
        {
            "tf": (("channel", "frequency", "time", "trial"), power.values.transpose(1, 2, 3, 0)),
            "memory": ("trial", list("abcd")),
        },
        coords={"channel": list("wxyz"), "frequency": power.frequencies, "time": power.times},
    )  # fmt: skip
    stored.time.attrs["units"] = "seconds"
    names = {
        "power": "tf",
        "frequencies": "frequency",
        "times": "time",
        "channels": "channel",
        "trials.memory": "memory",
    }
    for path, group in ((tmp_path / "a.nc", None), (tmp_path / "b.nc", "deep/er")):
        stored.to_netcdf(path, engine="h5netcdf", group=group)
        here = {role: name if group is None else f"deep.er.{name}" for role, name in names.items()}
        read = tfs.read_power(path, names=here)
        np.testing.assert_array_equal(read.as_array(), power.values)
        assert read.channels == tuple("wxyz") and read.trials["memory"].tolist() == list("abcd")
        assert isinstance(read.values, LazyPower)
        np.testing.assert_array_equal(pickle.loads(pickle.dumps(read.values))[:], power.values)
    stored.to_netcdf(tmp_path / "classic.nc", engine="scipy")
    np.testing.assert_array_equal(tfs.read_power(tmp_path / "classic.nc", names=names).as_array(), power.values)


def test_packed_files(tmp_path, make_power):
    power = make_power(trials=30, channels=4, times=20)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file.create_dataset("power", data=power.values, chunks=(7, 1, 2, 20), compression="gzip", shuffle=True)
        file["frequencies"], file["times"], file["channels"] = power.frequencies, power.times, list("abcd")
    np.testing.assert_array_equal(tfs.read_power(tmp_path / "a.h5").as_array(), power.values)
