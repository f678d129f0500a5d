"""xarray in and out: names, labels and units, in any order of axes."""

from __future__ import annotations

import sys

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

xarray = pytest.importorskip("xarray", reason="xarray comes with the extra labelled")


@pytest.fixture
def power():
    rng = np.random.default_rng(1)
    return tfs.TrialPower(
        rng.exponential(size=(5, 2, 3, 4)).astype(np.float32), frequencies=[4, 8, 16], times=[-0.1, 0.0, 0.1, 0.2],
        channels=["Fz", "Cz"],
        trials=pd.DataFrame({"memory": ["recalled", "missed"] * 2 + ["recalled"], "rt": [0.5, 0.7, np.nan, 1.0, 2.0]}),
        subject="S1", power_unit="µV²", wavelet_cycles=[3, 5, 7], scaling="amplitude", notes=["One.", "Two."],
    )  # fmt: skip


def test_power_and_back(power):
    array = tfs.as_labelled(power)
    assert array.dims == ("trial", "channel", "frequency", "time") and array.dtype == np.float32
    assert (
        array.coords["frequency"].attrs["units"] == "Hz"
        and array.coords["time"].attrs["units"] == "s"
        and array.attrs["units"] == "µV²"
    )
    assert array.sel(channel="Cz", frequency=8, time=0.1).shape == (5,)
    again = tfs.from_labelled(array.transpose("time", "trial", "frequency", "channel"))
    assert again.values.tobytes() == power.values.tobytes()
    assert (again.subject, again.channels, again.power_unit, again.scaling, again.notes) == (
        "S1",
        ("Fz", "Cz"),
        "µV²",
        "amplitude",
        power.notes,
    )
    assert again.wavelet_cycles.tolist() == [3, 5, 7]
    pd.testing.assert_frame_equal(again.trials, power.trials, check_dtype=False)


def test_power_that_lies_in_a_file(tmp_path, power):
    tfs.write_power(tmp_path / "S1.h5", power)
    array = tfs.as_labelled(tfs.read_power(tmp_path / "S1.h5"))
    np.testing.assert_array_equal(array.values, power.values)


def test_maps_and_back():
    rng = np.random.default_rng(2)
    maps = tfs.ConditionMaps(
        rng.normal(size=(3, 2, 1, 2, 3)), subjects=["a", "b", "c"], conditions=["x", "y"], channels=["Fz"], frequencies=[4, 8],
        times=[0.0, 0.1, 0.2], unit="percent_change", trial_counts=np.arange(6).reshape(3, 2) + 10, history=["Done."],
        baseline=tfs.Baseline((-0.5, -0.2), "percent_change"),
        participants=pd.DataFrame({"participant_id": ["a", "b", "c"], "age": [1, 2, 3]}),
    )  # fmt: skip
    array = tfs.as_labelled(maps)
    assert array.attrs["units"] == "%" and array.sel(subject="b", condition="y").shape == (1, 2, 3)
    again = tfs.from_labelled(array.transpose("time", "channel", "subject", "frequency", "condition"))
    assert (
        again.values.tobytes() == maps.values.tobytes()
        and again.baseline == maps.baseline
        and again.history == maps.history
    )
    pd.testing.assert_frame_equal(again.trial_counts, maps.trial_counts)
    pd.testing.assert_frame_equal(again.participants, maps.participants)
    part = tfs.from_labelled(array.isel(subject=[2, 0], condition=[1]).drop_vars([]).assign_attrs(about=""))
    assert part.subjects == ("c", "a") and part.trial_counts.to_numpy().tolist() == [[15], [11]]


@pytest.mark.parametrize(
    ("change", "text"),
    [
        (
            lambda array: array.rename(frequency="freq"),
            'from_labelled: expected dimensions among "channel", "frequency", "time", "trial", all but '
            '"channel", "frequency", "trial" '
            'needed, got "channel", "freq", "time", "trial"; rename the dimensions.',
        ),
        (
            lambda array: array.drop_vars("channel"),
            'from_labelled, channel: expected a coordinate "channel", got "frequency", "memory", "rt", "time", "trial", '
            '"wavelet_cycles"; give the dimension its labels.',
        ),
        (
            lambda array: array.assign_attrs(subject=None),
            'from_labelled: expected a subject, got none in attrs["subject"]; give subject=.',
        ),
        (lambda array: array.values, "from_labelled: expected an xarray.DataArray, got ndarray; take one variable of a Dataset."),
        (
            lambda array: array.rename(trial="subject", channel="condition"),
            'from_labelled: expected the dimensions "channel", "condition", "frequency", "subject", "time", got '
            '"condition", "frequency", '
            '"subject", "time"; rename the dimensions.',
        ),
    ],
)  # fmt: skip
def test_refused_arrays(power, change, text):
    with pytest.raises(tfs.InputError) as caught:
        tfs.from_labelled(change(tfs.as_labelled(power)))
    assert caught.value.problems == (text,)


def test_maps_without_a_unit_are_refused():
    maps = tfs.ConditionMaps(
        np.zeros((1, 1, 1, 1, 1)),
        subjects=["a"],
        conditions=["x"],
        channels=["Fz"],
        frequencies=[4],
        times=[0.0],
        unit="ratio",
    )
    with pytest.raises(tfs.InputError) as caught:
        tfs.from_labelled(tfs.as_labelled(maps).assign_attrs(unit=""))
    assert caught.value.problems == (
        'from_labelled: expected the unit in attrs["unit"], such as "decibel" or "power", got none; add it.',
    )


def test_refused_objects(power, monkeypatch):
    with pytest.raises(tfs.InputError) as caught:
        tfs.as_labelled(power.values)
    assert caught.value.problems == (
        "as_labelled: expected TrialPower or ConditionMaps, got ndarray; give one of them.",
    )
    clashing = power._changed(trials=power.trials.rename(columns={"rt": "time"}))
    with pytest.raises(tfs.InputError) as caught:
        tfs.as_labelled(clashing)
    assert caught.value.problems == (
        'as_labelled, subject S1: expected trial columns that are no names of axes, got "time"; rename the columns.',
    )
    monkeypatch.setitem(sys.modules, "xarray", None)
    with pytest.raises(tfs.InputError) as caught:
        tfs.as_labelled(power)
    assert caught.value.problems == (
        'as_labelled, power: expected xarray and h5netcdf for netCDF files, got no xarray; run: python -m pip '
        'install "tfstats[labelled]".',
    )
