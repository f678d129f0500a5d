"""Condition maps in open formats: round trips, shapes as MATLAB and Octave load them, arrays of others."""

from __future__ import annotations

import shutil
import subprocess

import h5py
import numpy as np
import pandas as pd
import pytest
import scipy.io

import tfstats as tfs


@pytest.fixture(params=[np.float32, np.float64])
def maps(request):
    rng = np.random.default_rng(3)
    values = rng.normal(size=(3, 2, 4, 5, 6)).astype(request.param)
    values[0, 0, 0, 0] = np.nan
    return tfs.ConditionMaps(
        values, subjects=["01", "02", "3"], conditions=["recalled", "missed"], channels=["Fz", "Cz", "Pz", "Öz"],
        frequencies=[4, 6, 9, 13.5, 20], times=np.arange(6) / 10 - 0.2, unit="decibel",
        trial_counts=[[40, 35], [31, 28], [44, 44]],
        participants=pd.DataFrame({"participant_id": ["01", "02", "3"], "age": [20, 31, 28], "group": ["a", "b", "a"]}),
        baseline=tfs.Baseline((-0.2, -0.1)), history=["First this.", "Then “that”."], cautions=["Mind µ."],
        wavelet_cycles=np.arange(5) + 3.0, scaling="density", averaged_by=[("times", "units")],
    )  # fmt: skip


def assert_same(first, second):
    assert first.values.tobytes() == second.values.tobytes() and first.values.dtype == second.values.dtype
    for name in (
        "subjects",
        "conditions",
        "channels",
        "unit",
        "history",
        "cautions",
        "scaling",
        "averaged_by",
        "baseline",
        "of_differences",
    ):
        assert getattr(first, name) == getattr(second, name), name
    for name in ("frequencies", "times", "wavelet_cycles"):
        np.testing.assert_array_equal(getattr(first, name), getattr(second, name))
    pd.testing.assert_frame_equal(first.trial_counts, second.trial_counts)
    pd.testing.assert_frame_equal(first.participants, second.participants, check_dtype=False)


@pytest.mark.parametrize("ending", [".h5", ".hdf5", ".mat", ".nc"])
def test_round_trip(tmp_path, maps, ending):
    if ending == ".nc":
        pytest.importorskip("h5netcdf", reason="netCDF needs the extra labelled")
    tfs.write_maps(tmp_path / f"maps{ending}", maps)
    assert_same(tfs.read_maps(tmp_path / f"maps{ending}"), maps)


def test_what_save_wrote_is_read_too(tmp_path, maps):
    maps.save(tmp_path / "maps.npz")
    assert_same(tfs.read_maps(tmp_path / "maps.npz"), maps)


@pytest.mark.parametrize("ending", [".h5", ".mat", ".nc"])
def test_axes_of_length_one_and_parts_that_are_not_known(tmp_path, ending):
    if ending == ".nc":
        pytest.importorskip("h5netcdf", reason="netCDF needs the extra labelled")
    small = tfs.ConditionMaps(
        np.arange(1.0, 3.0).reshape(2, 1, 1, 1, 1), subjects=[1, 2], conditions=["effect"], channels=["Fz"], frequencies=[6],
        times=[0.0], unit="power", wavelet_cycles=[7.0],
    )  # fmt: skip
    tfs.write_maps(tmp_path / f"maps{ending}", small)
    again = tfs.read_maps(tmp_path / f"maps{ending}")
    assert again.values.tolist() == small.values.tolist() and again.subjects == ("1", "2")
    assert (
        again.trial_counts is None
        and again.participants is None
        and again.baseline is None
        and again.wavelet_cycles.tolist() == [7.0]
    )


def test_matlab_arrays_have_the_natural_shape(tmp_path, maps):
    tfs.write_maps(tmp_path / "maps.mat", maps)
    loaded = scipy.io.loadmat(tmp_path / "maps.mat")
    np.testing.assert_array_equal(loaded["values"], maps.values)
    assert loaded["values"].shape == (3, 2, 4, 5, 6) and loaded["trial_counts"].tolist() == [
        [40, 35],
        [31, 28],
        [44, 44],
    ]
    assert [cell[0] for cell in loaded["channels"].ravel()] == list(maps.channels)


def test_netcdf_has_dimension_names_and_units(tmp_path, maps):
    xarray = pytest.importorskip("xarray", reason="netCDF needs the extra labelled")
    pytest.importorskip("h5netcdf", reason="netCDF needs the extra labelled")
    tfs.write_maps(tmp_path / "maps.nc", maps)
    with xarray.open_dataset(tmp_path / "maps.nc", engine="h5netcdf", decode_times=False) as found:
        assert found["values"].dims == ("subject", "condition", "channel", "frequency", "time")
        assert (found["values"].attrs["units"], found["frequencies"].attrs["units"], found["times"].attrs["units"]) == (
            "dB",
            "Hz",
            "s",
        )
        assert found["channels"].values.tolist() == list(maps.channels)


def test_power_in_netcdf_has_units(tmp_path):
    xarray = pytest.importorskip("xarray", reason="netCDF needs the extra labelled")
    pytest.importorskip("h5netcdf", reason="netCDF needs the extra labelled")
    power = tfs.TrialPower(
        np.ones((2, 1, 3, 4)), frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], channels=["Fz"], subject="S1",
        trials=pd.DataFrame({"memory": [1, 0]}), power_unit="µV²/Hz", notes=["Something was done.", "And more."],
    )  # fmt: skip
    for ending in (".nc", ".h5", ".mat", ".npz", ".npy"):
        tfs.write_power(tmp_path / f"S1{ending}", power)
        assert tfs.read_power(tmp_path / f"S1{ending}").notes == power.notes, ending
    with xarray.open_dataset(tmp_path / "S1.nc", engine="h5netcdf", decode_times=False) as found:
        assert found["power"].dims == ("trial", "channel", "frequency", "time")
        assert (found["power"].attrs["units"], found["frequencies"].attrs["units"], found["times"].attrs["units"]) == (
            "µV²/Hz",
            "Hz",
            "s",
        )


OCTAVE = """
maps = load("from_here.mat");
size_of_values = size(maps.values);
one = maps.values(2, 1, 3, 4, 5);
name = maps.channels{3};
save("-v7", "answer.mat", "size_of_values", "one", "name");
values = reshape(1:48, 2, 2, 1, 3, 4); subjects = {"01"; "02"}; conditions = {"a", "b"}; channels = {"Fz"};
frequencies = [4 6 8]; times = [0 0.1 0.2 0.3]; unit = "power"; trial_counts = [10 11; 12 13];
save("-v7", "v7.mat", "values", "subjects", "conditions", "channels", "frequencies", "times", "unit", "trial_counts");
save("-v6", "v5.mat", "values", "subjects", "conditions", "channels", "frequencies", "times", "unit", "trial_counts");
"""


@pytest.mark.skipif(shutil.which("octave-cli") is None, reason="GNU Octave is absent")
def test_octave_reads_ours_and_we_read_octaves(tmp_path, maps):
    tfs.write_maps(tmp_path / "from_here.mat", maps)
    done = subprocess.run(
        ["octave-cli", "--no-gui", "--quiet", "--no-init-file", "--eval", OCTAVE], cwd=tmp_path, capture_output=True, text=True,
        timeout=120,
    )  # fmt: skip
    assert (tmp_path / "v5.mat").exists(), done.stderr
    answer = scipy.io.loadmat(tmp_path / "answer.mat")
    assert answer["size_of_values"].ravel().tolist() == [3, 2, 4, 5, 6]
    assert answer["one"].item() == maps.values[1, 0, 2, 3, 4] and answer["name"].item() == "Pz"
    expected = np.arange(1.0, 49).reshape((2, 2, 1, 3, 4), order="F")
    for name in ("v5.mat", "v7.mat"):
        read = tfs.read_maps(tmp_path / name)
        np.testing.assert_array_equal(read.values, expected)
        assert read.subjects == ("01", "02") and read.unit == "power" and read.trial_counts.loc["02", "b"] == 13


def test_arrays_of_others(tmp_path):
    parts = {
        "values": np.ones((2, 1, 1, 2, 3)), "subjects": [1, 2], "conditions": ["a"], "channels": ["Fz"], "frequencies": [4, 8],
        "times": [0.0, 0.1, 0.2],
    }  # fmt: skip
    with h5py.File(tmp_path / "maps.h5", "w") as file:
        for name, value in parts.items():
            file[name] = value
    assert tfs.read_maps(tmp_path / "maps.h5", unit="ratio").unit == "ratio"
    with pytest.raises(tfs.InputError) as caught:
        tfs.read_maps(tmp_path / "maps.h5")
    assert caught.value.problems == (
        f'read_maps, {tmp_path / "maps.h5"}, unit: expected the unit of the values, such as "decibel" or "power", '
        f'got none in the '
        "file; add it to the file, or give unit=.",
    )
    np.savez(tmp_path / "bad.npz", values=parts["values"], channels=["Fz"], unit="decibel")
    with pytest.raises(tfs.InputError) as caught:
        tfs.read_maps(tmp_path / "bad.npz")
    assert caught.value.problems == (
        f'read_maps, {tmp_path / "bad.npz"}: expected arrays called "channels", "conditions", "frequencies", '
        f'"subjects", "times", '
        '"unit", "values", got none called "conditions", "frequencies", "subjects", "times" among "channels", '
        '"unit", "values"; write '
        "the maps with these names.",
    )


def test_refusals(tmp_path, maps):
    tfs.write_maps(tmp_path / "maps.h5", maps)
    with pytest.raises(tfs.InputError) as caught:
        tfs.read_maps(tmp_path / "maps.h5", unit="power")
    assert caught.value.problems == (
        f'read_maps, {tmp_path / "maps.h5"}, unit: expected "decibel", which the file says, got "power"; leave unit out.',
    )
    with pytest.raises(tfs.InputError) as caught:
        tfs.write_maps(tmp_path / "maps.xls", maps)
    assert caught.value.problems == (
        f'write_maps, {tmp_path / "maps.xls"}: expected a file that ends in one of ".h5", ".hdf5", ".mat", ".nc", '
        f'got ".xls"; change '
        "its ending; ConditionMaps.save writes .npz.",
    )
    with pytest.raises(tfs.InputError) as caught:
        tfs.write_maps(tmp_path / "maps.h5", maps.values)
    assert caught.value.problems == (
        f"write_maps, {tmp_path / 'maps.h5'}: expected ConditionMaps, got ndarray; make them with condition_maps.",
    )
