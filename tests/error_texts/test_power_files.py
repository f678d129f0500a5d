"""The exact text of each refusal of power files, TrialPower, morlet_power and the tables of a study."""
# ruff: noqa: E501 - a sentence is compared whole

import os
from pathlib import Path

import h5py
import numpy as np
import pandas as pd
import pytest
import scipy.io

import tfstats as tfs
from tfstats.power_files import read_electrodes, read_participants


def power_values():
    return np.random.default_rng(0).exponential(size=(5, 2, 3, 4)) + 1e-3


def build(values=None, **changes):
    parts = {
        "frequencies": [2, 4, 8], "times": [-0.1, 0.0, 0.1, 0.2], "channels": ["Fz", "Cz"],
        "trials": pd.DataFrame({"memory": ["recalled", "missed", "recalled", "missed", "missed"]}), "subject": "S1",
    }  # fmt: skip
    return tfs.TrialPower(power_values() if values is None else values, **{**parts, **changes})


def spoiled(*changes):
    values = power_values()
    for place, value in changes:
        values[place] = value
    return values


def decibels():
    values = 10 * np.log10(np.random.default_rng(1).exponential(size=(40, 2, 3, 4))) + 60
    return build(values, trials=pd.DataFrame(index=range(40)))


def file_of(name="S1.npz", **changes):
    parts = {
        "power": power_values(), "frequencies": [2.0, 4.0, 8.0], "times": [-0.1, 0.0, 0.1, 0.2], "channels": ["Fz", "Cz"],
        "trials.memory": ["recalled", "missed", "recalled", "missed", "missed"], **changes,
    }  # fmt: skip
    np.savez(name, allow_pickle=True, **{key: np.asarray(value) for key, value in parts.items() if value is not None})
    return name


def read(name="S1.npz", layout=None, **changes):
    return tfs.read_power(file_of(name, **changes), subject="S1", **(layout or {}))


def text_file(name, text):
    Path(name).write_text(text, encoding="utf-8")
    return name


def files(*names, table=None, **layout):
    for name in names:
        file_of(name)
    if table is not None:
        text_file(*table)
    return tfs.PowerFiles(**{"pattern": "S{subject}.npz", **layout})


def signals(**changes):
    parts = {
        "signals": np.random.default_rng(2).normal(size=(4, 2, 300)), "sampling_rate": 100, "start": -1.0,
        "frequencies": [10, 20], "wavelet_cycles": 5, "channels": ["Fz", "Cz"], "subject": "S1",
        "trials": pd.DataFrame({"side": ["left", "right", "left", "up"]}), **changes,
    }  # fmt: skip
    return tfs.morlet_power(parts.pop("signals"), **parts)


def flat():
    raw = np.random.default_rng(2).normal(size=(4, 2, 300))
    raw[1, 1] = 3.0
    return raw


def tables(text, reader, name="t.tsv", **more):
    return reader(text_file(name, text), **more)


def dataset(text, name="S1.h5"):
    with h5py.File(name, "w") as file:
        file["power"] = np.array([text], dtype=object)
        file["frequencies"], file["times"], file["channels"] = [2.0], [0.0], ["Fz"]
    return tfs.read_power(name)


def matlab_objects(kind):
    """A 7.3 file whose channels are a MATLAB object."""
    with h5py.File("S1.mat", "w") as file:
        for name, value in (
            ("power", power_values()),
            ("frequencies", [[2.0, 4, 8]]),
            ("times", [[-0.1, 0, 0.1, 0.2]]),
        ):
            file[name] = np.transpose(value)
            file[name].attrs["MATLAB_class"] = np.bytes_("double")
        file["dat/label"] = np.zeros((1, 6), dtype=np.uint32)
        file["dat"].attrs["MATLAB_class"] = np.bytes_("struct")
        file["dat/label"].attrs["MATLAB_class"], file["dat/label"].attrs["MATLAB_object_decode"] = np.bytes_(kind), 3
    return tfs.read_power("S1.mat", subject="S1", names={"channels": "dat.label"})


def mixed_cells():
    cell = np.empty((1, 2), dtype=object)
    cell[0] = ["Fz", 3.0]
    scipy.io.savemat(
        "S1.mat", {"channels": cell, "power": power_values(), "frequencies": [2, 4, 8], "times": [0, 1, 2, 3]}
    )
    return tfs.read_power("S1.mat", subject="S1")


def odd_column(name):
    return tfs.write_power("S1.mat", build(trials=pd.DataFrame({name: range(5)})))


EXACT = {
    "zero": (
        lambda: build(spoiled((np.s_[3:, 1, 0, 2], 0.0))),
        "subject S1, values: expected linear power above 0, got 2 values of exactly 0 (first in trial 3, channel Cz); set what is not known to NaN.",
    ),
    "negative": (
        lambda: build(spoiled((np.s_[2, 1, 0, 2], -3.5), (np.s_[4], -0.25))),
        'subject S1, values: expected linear power above 0, got 25 negative values (smallest -3.5, first in trial 2, channel Cz), as decibels have them; set contents = "decibel" if these are decibels, or give power that has not been made relative.',
    ),
    "negative and zero, file named": (
        lambda: build(spoiled((np.s_[2, 1, 0, 2], -3.5), (np.s_[4], 0)), source="p/S1.mat"),
        'subject S1, p/S1.mat, values: expected linear power above 0, got 1 negative values (smallest -3.5, first in trial 2, channel Cz), as decibels have them; set contents = "decibel" if these are decibels, or give power that has not been made relative.',
        "subject S1, p/S1.mat, values: expected linear power above 0, got 24 values of exactly 0 (first in trial 2, channel Cz); set what is not known to NaN.",
    ),
    "infinite": (
        lambda: build(spoiled((np.s_[0, 0, 0], np.inf))),
        "subject S1, values: expected finite power or NaN, got 4 infinite values; set what is not known to NaN.",
    ),
    "NaN everywhere": (
        lambda: build(spoiled((np.s_[:], np.nan))),
        "subject S1, values: expected power that is known somewhere, got NaN everywhere; check how the power was made.",
    ),
    "decibels above zero": (
        decibels,
        'subject S1, values: expected linear power, got values spread like decibels (about 5.6 dB and skewed to the left in 6 of 6 channels and frequencies); set contents = "decibel".',
    ),
    "ragged": (
        lambda: build([[1, 2], [3]]),
        "subject S1, values: expected an array (trials, channels, frequencies, times), got rows of unequal length; fill gaps with NaN.",
    ),
    "text values": (
        lambda: build(np.full((5, 2, 3, 4), "a")),
        "subject S1, values: expected real numbers, got type <U1; convert it to numbers.",
    ),
    "complex values": (
        lambda: build(power_values() * 1j),
        'subject S1, values: expected real numbers, got type complex128; read it with contents = "complex".',
    ),
    "three axes": (
        lambda: build(power_values()[0]),
        "subject S1, values: expected four axes, none empty (trials, channels, frequencies, times), got shape (2, 3, 4); add axes of length one.",
    ),
    "lengths": (
        lambda: build(power_values().transpose(1, 2, 3, 0)),
        "subject S1, trials: expected as many as axis 0 of the values has, 2, got 5; order the values as (trials, channels, frequencies, times) and give each its label.",
        "subject S1, channels: expected as many as axis 1 of the values has, 3, got 2; order the values as (trials, channels, frequencies, times) and give each its label.",
        "subject S1, frequencies: expected as many as axis 2 of the values has, 4, got 3; order the values as (trials, channels, frequencies, times) and give each its label.",
        "subject S1, times: expected as many as axis 3 of the values has, 5, got 4; order the values as (trials, channels, frequencies, times) and give each its label.",
    ),
    "trials, scaling, subject": (
        lambda: build(trials=[1, 2], scaling="psd", subject=" "),
        "power, subject: expected a name, got an empty one; name the subject.",
        'power, trials: expected a DataFrame with one row a trial, got list; write pandas.DataFrame({"memory": [...]}).',
        'power, scaling: expected one of "amplitude", "density", got \'psd\'; choose one of them, or None where unknown.',
    ),
    "wavelet cycles": (
        lambda: build(wavelet_cycles=[3, 4]),
        "subject S1, wavelet_cycles: expected one positive number, or one for each of the 3 frequencies, got [3, 4]; give the cycles of the wavelets.",
    ),
    "wavelet cycles below 0": (
        lambda: build(wavelet_cycles=-3),
        "subject S1, wavelet_cycles: expected one positive number, or one for each of the 3 frequencies, got -3; give the cycles of the wavelets.",
    ),
    "milliseconds": (
        lambda: build(times=[-500, 0, 500, 1000]),
        'subject S1, times: expected seconds within 100 of the event, got -500 to 1000, probably milliseconds; set time_unit = "ms".',
    ),
    "select all wrong": (
        lambda: build().select(trials={"memmory": "x"}, channels=["FZ"], frequencies=(50, 60), times=(3, 2)),
        'subject S1, select, trials: expected a trial column among "memory", got "memmory"; did you mean "memory"? use the name in the trial table.',
        'subject S1, select, channels: expected channels among "Cz", "Fz", got "FZ"; use the spelling of the data.',
        "subject S1, select, frequencies: expected a window that holds at least one point of the axis 2 to 8 Hz, got 50 to 60 Hz; choose a window inside the data.",
        "subject S1, select, times: expected a start not after its stop, in s, got 3 to 2; exchange the two edges.",
    ),
    "select no trial": (
        lambda: build().select(trials={"memory": "forgotten"}),
        "subject S1, select, trials: expected labels that some trial has together, got memory 'forgotten'; choose other labels.",
    ),
    "select mask": (
        lambda: build().select(trials=np.array([True])),
        "subject S1, select, trials: expected one true or false for each of the 5 trials, got shape (1,); give one a trial.",
    ),
    "select positions": (
        lambda: build().select(trials=[7]),
        "subject S1, select, trials: expected a mask, positions from 0 to 4, or a mapping of column to label, got [7]; give one of these.",
    ),
    "select channel twice": (
        lambda: build().select(channels=["Fz", "Fz"]),
        'subject S1, select, channels: expected each channel once, got "Fz" more than once; rename or drop the repeated ones.',
    ),
    "mean over times": (
        lambda: build().mean_across("times"),
        "subject S1, mean_across, axis: expected one of \"channels\", got 'times'; average the other axes on maps.",
    ),
    "mean of no mapping": (
        lambda: build().mean_across("channels", ["Fz"]),
        'subject S1, mean_across, channels: expected a mapping of group name to channels, got [\'Fz\']; write {"frontal": ["F3", "Fz"]} for instance.',
    ),
    "mean of unknown channels": (
        lambda: build().mean_across("channels", {"frontal": ["Fz", "F3"], "none": []}),
        'subject S1, mean_across, channels, group "frontal": expected channels among "Cz", "Fz", got "F3"; use the spelling of the data.',
        'subject S1, mean_across, channels, group "none": expected at least one channel, got none; name its channels.',
    ),
    # one file
    "no file": (
        lambda: tfs.read_power("S9.npz", subject="S9"),
        "subject S9, S9.npz: expected a file, got nothing there; check the path.",
    ),
    "a folder": (
        lambda: (os.mkdir("d.h5"), tfs.read_power("d.h5")),
        "d.h5: expected a file, got a folder; check the path.",
    ),
    "ending": (
        lambda: tfs.read_power("S1.xls"),
        'S1.xls: expected a file that ends in one of ".h5", ".hdf5", ".mat", ".nc", ".npy", ".npz", got ".xls"; convert or rename the file.',
    ),
    "broken npz": (
        lambda: tfs.read_power(text_file("S1.npz", "no archive"), subject="S1"),
        "subject S1, S1.npz: expected a whole .npz file, got one that cannot be read; copy or write the file again.",
    ),
    "broken h5": (
        lambda: tfs.read_power(text_file("S1.h5", "no HDF5"), subject="S1"),
        "subject S1, S1.h5: expected a whole HDF5 file, got one that cannot be read (OSError); copy or write the file again.",
    ),
    "broken mat": (
        lambda: tfs.read_power(text_file("S1.mat", "no MATLAB"), subject="S1"),
        "subject S1, S1.mat: expected a whole .mat file, got one that cannot be read (MatReadError); copy or write the file again.",
    ),
    "layout keyword": (
        lambda: read(layout={"axis": ["trial"], "contents": "power", "time_unit": "min", "scaling": 1}),
        'read_power: expected layout keywords among "axes", "channels", "contents", "frequencies", "keep", "names", "power_unit", "recode", "scaling", "time_unit", "times", "trial_table", "wavelet_cycles", got "axis"; did you mean "axes"? use one of them.',
        'read_power, contents: expected one of "amplitude", "complex", "decibel", "linear_power", got \'power\'; choose one of them.',
        'read_power, time_unit: expected one of "ms", "s", got \'min\'; choose one of them.',
        'read_power, scaling: expected one of "amplitude", "density", got 1; choose one of them.',
    ),
    "layout names": (
        lambda: read(layout={"names": {"frequency": "f", "times": 3}}),
        'read_power, names: expected parts among "axes", "channels", "frequencies", "power", "power_unit", "scaling", "subject", "times", "trials", "trials.COLUMN", "wavelet_cycles", got "frequency"; did you mean "frequencies"? use one of them.',
        "read_power, names, times: expected the name in the file, as text, got 3; write its name.",
    ),
    "layout names as text": (
        lambda: read(layout={"names": "dat"}),
        'read_power, names: expected a mapping of part to name in the file, got \'dat\'; write {"power": "dat.pow"}.',
    ),
    "layout axes": (
        lambda: read(layout={"axes": ["trials", "channel"]}),
        'read_power, axes: expected the names of the file\'s axes in order, each of "channel", "frequency", "time", "trial" once at most, got ["trials", "channel"]; write axes = ["trial", "channel", "frequency", "time"] in the order of the file.',
    ),
    "layout recode": (
        lambda: read(layout={"recode": {"memory": "x"}}),
        'read_power, recode: expected a mapping of trial column to {label: new label}, got {\'memory\': \'x\'}; write {"memory": {"1": "recalled"}}.',
    ),
    "layout keep": (
        lambda: read(layout={"keep": {"a": {"above": 3}, "b": {"at_least": "x"}}}),
        'read_power, keep, a: expected a label, or some of "at_least", "at_most", "one_of", got "above"; use these words.',
        "read_power, keep, b, at_least: expected a number, got 'x'; write a number.",
    ),
    "layout keep as text": (
        lambda: read(layout={"keep": "artefact"}),
        "read_power, keep: expected a mapping of trial column to what is kept, got 'artefact'; write {\"artefact\": 0}.",
    ),
    "layout trial table": (
        lambda: read(layout={"trial_table": 3}),
        "read_power, trial_table: expected a path, got 3; write the path of a .tsv or .csv file.",
    ),
    "names absent": (
        lambda: read(power=None, pow=power_values(), channels=None, labels=["a"], frequencies=None),
        'subject S1, S1.npz, frequencies: expected an array called "frequencies", got a file that holds "labels", "pow", "times", "trials.memory"; set frequencies under [input.names].',
        'subject S1, S1.npz, channels: expected an array called "channels", got a file that holds "labels", "pow", "times", "trials.memory"; set channels under [input.names].',
        'subject S1, S1.npz, power: expected an array called "power", got a file that holds "labels", "pow", "times", "trials.memory"; did you mean "pow"? set power under [input.names].',
    ),
    "name stated and absent": (
        lambda: read(layout={"names": {"wavelet_cycles": "cfg.n", "trials.side": "side"}}),
        'subject S1, S1.npz, trials.side: expected an array called "side", got a file that holds "channels", "frequencies", "power", "times", "trials.memory"; set trials.side under [input.names].',
        'subject S1, S1.npz, wavelet_cycles: expected an array called "cfg.n", got a file that holds "channels", "frequencies", "power", "times", "trials.memory"; set wavelet_cycles under [input.names].',
    ),
    "trials group absent": (
        lambda: read(layout={"names": {"trials": "info"}}),
        'subject S1, S1.npz, trials: expected a group or struct called "info" with one vector a column, got a file that holds "channels", "frequencies", "power", "times", "trials.memory"; set trials, or trials.COLUMN, under [input.names].',
    ),
    "frequencies of two axes": (
        lambda: read(frequencies=np.ones((2, 3))),
        "subject S1, S1.npz, frequencies: expected a list of numbers in Hz, got shape (2, 3); set frequencies under [input.names].",
    ),
    "times in ms": (
        lambda: read(times=[-500, 0, 500, 1000]),
        'subject S1, S1.npz, times: expected seconds within 100 of the event, got -500 to 1000, probably milliseconds; set time_unit = "ms".',
    ),
    "times in s": (
        lambda: read(layout={"time_unit": "ms"}),
        'subject S1, S1.npz, times: expected milliseconds, got -0.1 to 0.2, probably seconds; set time_unit = "s".',
    ),
    "complex power": (
        lambda: read(power=power_values() + 0j),
        'subject S1, S1.npz, power: expected real numbers for contents = "linear_power", got complex numbers; set contents = "complex".',
    ),
    "real power": (
        lambda: read(layout={"contents": "complex"}),
        'subject S1, S1.npz, power: expected complex numbers for contents = "complex", got real numbers; set contents = "linear_power" or "amplitude".',
    ),
    "text power": (
        lambda: read(power=["a"]),
        "subject S1, S1.npz, power: expected an array of numbers, got text; set power under [input.names].",
    ),
    "logical power": (
        lambda: read(power=np.ones((5, 2, 3, 4), dtype=bool)),
        "subject S1, S1.npz, power: expected an array of numbers, got type bool; set power under [input.names].",
    ),
    "empty power": (
        lambda: read(power=np.ones((0, 2, 3, 4))),
        "subject S1, S1.npz, power: expected an array of power, got shape (0, 2, 3, 4); set power under [input.names].",
    ),
    "ambiguous axes": (
        lambda: read(power=np.ones((5, 2, 4, 4)), frequencies=[1, 2, 3, 4]),
        'subject S1, S1.npz, power: expected axes that their lengths tell apart, got shape (5, 2, 4, 4), which may be ["trial", "channel", "frequency", "time"] or ["trial", "channel", "time", "frequency"]; set axes under [input] to the right one.',
    ),
    "trials of another number": (
        lambda: read(power=np.ones((6, 2, 3, 4))),
        "subject S1, S1.npz, trial column memory: expected one value for each of the 6 trials, got 5 values; correct axes under [input], or trials.memory under [input.names].",
    ),
    "no axes fit": (
        lambda: read(power=np.ones((5, 2, 3, 4)), channels=["Fz", "Cz", "Pz", "Oz", "C3"]),
        "subject S1, S1.npz, trial column memory: expected one value for each of the 2 trials, got 5 values; correct axes under [input], or trials.memory under [input.names].",
    ),
    "no axes fit, trials unknown": (
        lambda: read(power=np.ones((5, 2, 7, 4)), **{"trials.memory": None}),
        "subject S1, S1.npz, power: expected axes of 2 channels, 3 frequencies, 4 times, any number of trials, got shape (5, 2, 7, 4); check which arrays [input.names] gives for power, frequencies, times and channels.",
    ),
    "signals differ from trials": (
        lambda: signals(trials=pd.DataFrame(index=range(9))),
        "morlet_power, subject S1, trials: expected as many as axis 0 of the signals has, 4, got 9; order the signals as (trials, channels, samples).",
    ),
    "stated axes do not fit": (
        lambda: read(layout={"axes": ["channel", "frequency", "time", "trial"]}),
        'subject S1, S1.npz, power, axis channel: expected length 2, got 5 (axis 0 of shape (5, 2, 3, 4)); correct axes = ["channel", "frequency", "time", "trial"].',
        'subject S1, S1.npz, power, axis frequency: expected length 3, got 2 (axis 1 of shape (5, 2, 3, 4)); correct axes = ["channel", "frequency", "time", "trial"].',
        'subject S1, S1.npz, power, axis time: expected length 4, got 3 (axis 2 of shape (5, 2, 3, 4)); correct axes = ["channel", "frequency", "time", "trial"].',
    ),
    "too few stated axes": (
        lambda: read(layout={"axes": ["channel", "frequency", "time"]}),
        'subject S1, S1.npz, power: expected 3 axes, ["channel", "frequency", "time"], got shape (5, 2, 3, 4); give each axis its name in axes.',
    ),
    "named axes": (
        lambda: read(order=["a", "b"], layout={"names": {"axes": "order"}}),
        'subject S1, S1.npz, order: expected the names of the 4 axes, each of "channel", "frequency", "time", "trial" once, got ["a", "b"]; set axes under [input] instead.',
    ),
    "column length": (
        lambda: read(layout={"axes": ["trial", "channel", "frequency", "time"]}, **{"trials.load": [1, 2]}),
        "subject S1, S1.npz, trial column load: expected one value for each of the 5 trials, got 2 values; correct axes under [input], or trials.load under [input.names].",
    ),
    "column of two axes": (
        lambda: read(**{"trials.load": np.ones((5, 2))}),
        "subject S1, S1.npz, trial column load: expected one value a trial, got type float64, shape (5, 2); correct axes under [input], or trials.load under [input.names].",
    ),
    "pickled channels": (
        lambda: read(channels=np.array(["Fz", None], dtype=object)),
        "subject S1, S1.npz, channels: expected numbers or text, got pickled Python objects, which are never loaded; save it as numbers or text, for instance numpy.savez(file, channels=numpy.array(values, dtype=str)).",
    ),
    "channels twice": (
        lambda: read(channels=["Fz", "Fz"]),
        'subject S1, S1.npz, channels: expected each channel once, got "Fz" more than once; rename or drop the repeated ones.',
    ),
    "recode column": (
        lambda: read(layout={"recode": {"memry": {"1": "a"}}}),
        'subject S1, S1.npz, trials: expected a trial column among "memory", got "memry"; did you mean "memory"? correct [input.recode.memry].',
    ),
    "keep column": (
        lambda: read(layout={"keep": {"artefact": 0}}),
        'subject S1, S1.npz, trials: expected a trial column among "memory", got "artefact"; correct [input.keep] artefact.',
    ),
    "keep text": (
        lambda: read(layout={"keep": {"memory": {"at_most": 2}}}),
        "subject S1, S1.npz, trial column memory: expected numbers for at_least and at_most, got 5 cells of text, the first 'recalled'; use one_of in [input.keep] memory.",
    ),
    "keep none": (
        lambda: read(layout={"keep": {"memory": "new"}}),
        "subject S1, S1.npz, trials: expected at least one trial that is kept, got none of 5; change [input.keep].",
    ),
    "HDF5 text power": (
        lambda: dataset("a"),
        "S1.h5, power: expected an array of numbers, got text; set power under [input.names].",
    ),
    "MATLAB string": (
        lambda: matlab_objects("string"),
        'subject S1, S1.mat, dat.label: expected numbers, text, cells of text or structs, got a MATLAB string object; in MATLAB run: S = load("S1.mat"); S.dat.label = cellstr(S.dat.label); save("S1.mat", "-struct", "S", "-v7.3").',
    ),
    "MATLAB table": (
        lambda: matlab_objects("table"),
        'subject S1, S1.mat, dat.label: expected numbers, text, cells of text or structs, got a MATLAB table object; in MATLAB run: S = load("S1.mat"); S.dat.label = table2struct(S.dat.label, "ToScalar", true); save("S1.mat", "-struct", "S", "-v7.3").',
    ),
    "MATLAB other object": (
        lambda: matlab_objects("recorder"),
        'subject S1, S1.mat, dat.label: expected numbers, text, cells of text or structs, got a MATLAB recorder object; in MATLAB run: S = load("S1.mat"); S.dat.label = struct(S.dat.label); save("S1.mat", "-struct", "S", "-v7.3").',
    ),
    "mixed cells": (
        mixed_cells,
        "subject S1, S1.mat, channels: expected cells that are all text or all single numbers, got a mixture; split it into two variables.",
    ),
    "table absent": (
        lambda: read(layout={"trial_table": "{subject}.tsv"}),
        "subject S1, S1.npz, trial_table S1.tsv: expected a table, got nothing there; check the path.",
    ),
    "table subject": (
        lambda: tfs.read_power(file_of(), trial_table="{subject}.tsv"),
        "S1.npz: expected a subject for {subject} in trial_table, got none; give subject=.",
    ),
    "table length": (
        lambda: (text_file("S1.tsv", "load\n1\n2\n"), read(layout={"trial_table": "S1.tsv"})),
        "subject S1, S1.npz, trial_table S1.tsv: expected one row for each of the 5 trials of S1.npz, got 2 rows; mend the table, or correct trial_table or axes under [input].",
    ),
    "table differs": (
        lambda: (text_file("S1.tsv", "memory\n" + "missed\n" * 5), read(layout={"trial_table": "S1.tsv"})),
        "subject S1, S1.npz, trial column memory: expected the same in S1.npz and S1.tsv, got 2 of 5 trials that differ; rename or drop one of the two columns.",
    ),
    "write ending": (
        lambda: tfs.write_power("S1.txt", build()),
        'write_power, S1.txt: expected a file that ends in one of ".h5", ".hdf5", ".mat", ".nc", ".npy", ".npz", got ".txt"; convert or rename the file.',
    ),
    "write something else": (
        lambda: tfs.write_power("S1.npz", {}),
        "write_power, S1.npz: expected a TrialPower, got dict; make one with TrialPower(...).",
    ),
    "write slash": (
        lambda: tfs.write_power("S1.h5", build(trials=pd.DataFrame({"a/b": range(5)}))),
        "write_power, S1.h5, trial column: expected a name without a slash, got 'a/b'; rename the column.",
    ),
    "write MATLAB column": (
        lambda: odd_column("reaction time"),
        'write_power, S1.mat: expected trial columns that are names in MATLAB (letters, digits, underscores), got "reaction time"; rename them or write ".h5".',
    ),
    # many files
    "pattern": (
        lambda: tfs.PowerFiles("power/S*.mat"),
        "input, files power/S*.mat: expected a pattern with {subject}, got one without; write {subject} where the files' names differ.",
        "input, files power/S*.mat: expected words in braces, got a wildcard; write {run} or another word in its place.",
    ),
    "pattern words": (
        lambda: tfs.PowerFiles("S{subject}_{a b}.mat"),
        'input, files S{subject}_{a b}.mat: expected words of letters, digits and underscores in braces, got "a b"; rename them.',
    ),
    "no folder": (
        lambda: tfs.PowerFiles("power/S{subject}.mat"),
        "input, files power/S{subject}.mat: expected files that fit the pattern, got no such folder; correct files under [input].",
    ),
    "no files": (
        lambda: files("S1.npz", pattern="T{subject}.npz"),
        "input, files T{subject}.npz: expected files that fit the pattern, got none; correct files under [input].",
    ),
    "no subject": (
        lambda: files("S1.npz", "S2.npz", subjects=["1", "3", "1"]),
        'input, files S{subject}.npz: expected a file for each subject, as for "1", "2", got none for "3"; add the files, correct the pattern, or leave the subjects out.',
        'input, subjects: expected each subject once, got "1" more than once; drop the repeated ones.',
    ),
    "empty subjects": (
        lambda: files("S1.npz", subjects=[]),
        "input, subjects: expected at least one subject, got none; leave out less.",
    ),
    "unknown subject": (
        lambda: files("S1.npz").of("7"),
        'input, files S{subject}.npz: expected a subject among "1", got "7"; use one of them.',
    ),
    "table words": (
        lambda: files("S1.npz", trial_table="{run}.tsv"),
        'input, trial_table {run}.tsv: expected words of the files\' pattern, "subject", got "run"; use these words.',
    ),
    "table without subject": (
        lambda: files("S1.npz", trial_table="all.tsv"),
        "input, trial_table all.tsv: expected a pattern with {subject}, got one without; give each subject its table.",
    ),
    "joined axes": (
        lambda: (
            file_of("S1_run2.npz", times=[0.0, 0.1, 0.2, 0.3], channels=["Fz", "Oz"], scaling="density"),
            files("S1_run1.npz", pattern="S{subject}_run{run}.npz").of("1"),
        ),
        "subject 1, S1_run2.npz, times: expected the same as in S1_run1.npz, 4 from -0.1 to 0.2, got 4 from 0 to 0.3; compute the power of both at the same points, or leave one out.",
        'subject 1, S1_run2.npz, channels: expected the same as in S1_run1.npz, got "Cz", "Oz" in one of them only; give both files the same channels in one order.',
        "subject 1, S1_run2.npz, scaling: expected the same as in S1_run1.npz, unknown, got density; set scaling under [input].",
    ),
    "word differs": (
        lambda: (file_of("S1_run2.npz", **{"trials.run": [1] * 5}), files(pattern="S{subject}_run{run}.npz").of("1")),
        "subject 1, S1_run2.npz, trial column run: expected the same in the file and its name, got 5 of 5 trials that differ; rename or drop one of the two columns.",
    ),
    "table length of several": (
        lambda: files(
            "S1_1.npz",
            "S1_2.npz",
            pattern="S{subject}_{run}.npz",
            trial_table="S{subject}.tsv",
            table=("S1.tsv", "load\n1\n"),
        ).check(),
        "subject 1, trial_table S1.tsv: expected one row for each of the 10 trials of S1_1.npz and S1_2.npz, got 1 rows; mend the table, or correct trial_table or axes under [input].",
    ),
    "axes differ between subjects": (
        lambda: (file_of("S2.npz", times=[0.0, 0.1, 0.2, 0.3]), files("S1.npz").check()),
        "subject 2, S2.npz, times: expected the same as in S1.npz, 4 from -0.1 to 0.2, got 4 from 0 to 0.3; compute the power of both at the same points, or leave one out.",
    ),
    # signals
    "signals": (
        lambda: signals(
            sampling_rate=0, start="x", frequencies=[0], trials=[1], every=0, channels=[], wavelet_cycles=5
        ),
        "morlet_power, subject S1, channels: expected at least one channel, got none; give the channels.",
        "morlet_power, subject S1, frequencies: expected frequencies above 0 Hz, got 0; leave out 0 Hz and what lies below.",
        "morlet_power, subject S1, every: expected a whole number of at least 1, got 0; give a whole number.",
        "morlet_power, subject S1, sampling_rate: expected a number above 0, in Hz, got 0; give the sampling rate.",
        "morlet_power, subject S1, start: expected the time of the first sample, in s, got 'x'; give a number.",
        "morlet_power, subject S1, trials: expected a DataFrame with one row a trial, got list; make one.",
    ),
    "signals of two axes": (
        lambda: signals(signals=np.ones((4, 300))),
        "morlet_power, subject S1, signals: expected an array (trials, channels, samples), got shape (4, 300); add axes of length one.",
    ),
    "signals ragged": (
        lambda: signals(signals=[[[1, 2], [1]]]),
        "morlet_power, subject S1, signals: expected an array (trials, channels, samples), got rows of unequal length; cut the trials to one length.",
    ),
    "signals complex": (
        lambda: signals(signals=np.ones((4, 2, 300)) * 1j),
        "morlet_power, subject S1, signals: expected real numbers, got type complex128; give the raw signals.",
    ),
    "signals infinite": (
        lambda: signals(signals=np.full((4, 2, 300), np.inf)),
        "morlet_power, subject S1, signals: expected finite numbers or NaN, got 2400 infinite; set what is not known to NaN.",
    ),
    "signals flat": (
        lambda: signals(signals=flat()),
        "morlet_power, subject S1, signals: expected signals that vary, got 1 flat ones (first in trial 1, channel Cz); set them to NaN or leave them out.",
    ),
    "signal lengths": (
        lambda: signals(channels=["Fz"], trials=pd.DataFrame(index=range(3)), wavelet_cycles=[1, 2, 3]),
        "morlet_power, subject S1, trials: expected as many as axis 0 of the signals has, 4, got 3; order the signals as (trials, channels, samples).",
        "morlet_power, subject S1, channels: expected as many as axis 1 of the signals has, 2, got 1; order the signals as (trials, channels, samples).",
        "morlet_power, subject S1, wavelet_cycles: expected one number of at least 1, or one for each of the 2 frequencies, got [1, 2, 3]; give the cycles, 3 to 10 for instance.",
    ),
    "above half the rate": (
        lambda: signals(frequencies=[10, 50, 60]),
        "morlet_power, subject S1, frequencies: expected frequencies below half the sampling rate, 50 Hz, got 2 of them up to 60 Hz; leave them out.",
    ),
    "long wavelets": (
        lambda: signals(frequencies=[1, 2, 20]),
        "morlet_power, subject S1, wavelet_cycles: expected wavelets no longer than the trial of 2.99 s, got 1 that are, up to 4.77 s (6 sigma_t) at 1 Hz; use fewer cycles, higher frequencies or longer trials.",
    ),
    "few cycles": (
        lambda: signals(wavelet_cycles=0.5),
        "morlet_power, subject S1, wavelet_cycles: expected one number of at least 1, or one for each of the 2 frequencies, got 0.5; give the cycles, 3 to 10 for instance.",
    ),
    "average column": (
        lambda: signals(subtract_average_by="sid"),
        'morlet_power, subject S1, subtract_average_by: expected a trial column among "side", got "sid"; did you mean "side"? use one of them.',
    ),
    "average of one": (
        lambda: signals(subtract_average_by="side"),
        'morlet_power, subject S1, subtract_average_by: expected at least two trials of each label, got one of "right", "up"; leave it out or choose another column.',
    ),
    # tables of a study
    "participants column": (
        lambda: tables("participant\tage\n1\t2\n", read_participants),
        'participants, t.tsv: expected a column "participant_id", got "age", "participant"; did you mean "participant"? set column under [participants].',
    ),
    "participants ids": (
        lambda: tables('participant_id\nsub-1\nsub-1\n""\n2\n', read_participants, subject="sub-{subject}"),
        "participants, t.tsv, participant_id: expected a subject in each row, got none in line 4; fill in or drop the rows.",
        'participants, t.tsv, participant_id: expected subjects written "sub-{subject}", got "2"; set subject under [participants].',
        'participants, t.tsv, participant_id: expected each subject once, got "1" more than once; keep one row of each.',
    ),
    "participants none": (
        lambda: tables("participant_id\tage\n", read_participants),
        "participants, t.tsv: expected at least one row, got none; add the subjects.",
    ),
    "participants pattern": (
        lambda: tables("participant_id\n1\n", read_participants, subject="sub-"),
        'participants, t.tsv, subject: expected a text with {subject} once, got "sub-"; write "sub-{subject}".',
    ),
    "table ending": (
        lambda: read_participants(text_file("t.xlsx", "")),
        'participants, t.xlsx: expected a table that ends in ".csv" or ".tsv", got ".xlsx"; write the table as text.',
    ),
    "table empty": (
        lambda: tables("", read_participants),
        "participants, t.tsv: expected a header and rows, got an empty file; write the table again.",
    ),
    "table header": (
        lambda: tables("a\ta\n1\t2\n", read_participants),
        'participants, t.tsv: expected a name for each column, each once, got "a" more than once; rename the columns.',
    ),
    "table no header": (
        lambda: tables("a\t\n1\t2\n", read_participants),
        "participants, t.tsv: expected a name for each column, each once, got a column without a name; rename the columns.",
    ),
    "table bytes": (
        lambda: (Path("t.tsv").write_bytes(b"participant_id\n\xff\xfe\n"), read_participants("t.tsv")),
        "participants, t.tsv: expected tab-separated text in UTF-8, got text that is not (UnicodeDecodeError); save it as UTF-8 text.",
    ),
    "table rows": (
        lambda: tables("a,b\n1,2\n1,2,3\n", read_participants, name="t.csv"),
        "participants, t.csv: expected comma-separated text in UTF-8, got text that is not (ParserError); save it as UTF-8 text.",
    ),
    "electrodes columns": (
        lambda: tables("label\tx\ty\n1\t2\t3\n", read_electrodes),
        'electrodes, t.tsv: expected a column "name", got "label", "x", "y"; rename the column.',
        'electrodes, t.tsv: expected a column "z", got "label", "x", "y"; rename the column.',
    ),
    "electrodes cells": (
        lambda: tables("name\tx\ty\tz\nFz\tleft\t3\t1\nFz\t1\t2\t3\n\t1\t1\t1\n", read_electrodes),
        "electrodes, t.tsv: expected a name for each electrode, got an empty one; name every electrode.",
        'electrodes, t.tsv: expected each electrode once, got "Fz" more than once; keep one row of each.',
        "electrodes, t.tsv, x: expected numbers, or n/a, got 'left' for \"Fz\"; correct the cells.",
    ),
    "electrodes none": (
        lambda: tables("name\tx\ty\tz\n", read_electrodes),
        "electrodes, t.tsv: expected at least one row, got none; add the electrodes.",
    ),
}


@pytest.mark.parametrize("case", EXACT)
def test_text(case, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    refuse, *texts = EXACT[case]
    with pytest.raises(tfs.InputError) as refused:
        refuse()
    assert list(refused.value.problems) == texts
    assert str(refused.value) == "\n".join(texts)


def test_no_permission(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    file_of()

    def forbidden(*_, **__):
        raise PermissionError

    monkeypatch.setattr("builtins.open", forbidden)
    with pytest.raises(tfs.InputError) as refused:
        tfs.read_power("S1.npz", subject="S1")
    monkeypatch.undo()
    assert str(refused.value) == (
        "subject S1, S1.npz: expected a file that may be read, got no permission; change its permissions."
    )


def test_netcdf_without_its_libraries(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    Path("S1.nc").write_bytes(b"CDF\1")
    monkeypatch.setitem(__import__("sys").modules, "h5netcdf", None)
    with pytest.raises(tfs.InputError) as refused:
        tfs.read_power("S1.nc", subject="S1")
    assert str(refused.value) == (
        "subject S1, S1.nc: expected xarray and h5netcdf for netCDF files, got no h5netcdf; "
        'run: python -m pip install "tfstats[labelled]".'
    )


def test_too_large_for_matlab(tmp_path, monkeypatch):
    from tfstats.power_files import matlab_files

    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(matlab_files, "_LARGEST_V5", 100)
    with pytest.raises(tfs.InputError) as refused:
        tfs.write_power("S1.mat", build())
    assert str(refused.value) == (
        'write_power, S1.mat: expected at most 2 GiB in a .mat file, got 0.0 GiB; write ".h5", which MATLAB reads too.'
    )
