"""tfstats convert: the study's power once in HDF5, the same study from it to the last bit."""

from __future__ import annotations

import os

import h5py
import numpy as np
import pandas as pd
import pytest
import scipy.io

import tfstats as tfs
from tests.command_line.tiny_study import tfstats_command
from tfstats.plan_file.converted_study import convert_study
from tfstats.plan_file.study_stages import study_maps, study_opened


def called(*arguments):
    """Exit code, standard output, standard error."""
    done = tfstats_command(*arguments)
    return done.code, done.out, done.err


PLAN = """\
[study]
name = "runs"
permutations = 64
[input]
files = "raw/S{subject}_run{run}.mat"
axes = ["channel", "frequency", "time", "trial"]
contents = "decibel"
time_unit = "ms"
power_unit = "µV²"
trial_table = "S{subject}.tsv"
[input.names]
power = "dat.pow"
frequencies = "dat.f"
times = "dat.t"
channels = "dat.label"
[input.recode.ok]
"1" = "recalled"
"0" = "missed"
[input.keep]
artefact = 0
[participants]
file = "people.csv"
column = "code"
subject = "P{subject}"
[subjects]
exclude = ["03", "04"]
[conditions]
columns = ["ok"]
[channels]
electrodes = "places.tsv"
average_groups = true
[channels.groups]
all = ["C0", "C1"]
[baseline]
window = [-0.5, -0.2]
within = "run"
order = "trial_by_reference"
[[contrast]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"
"""


@pytest.fixture
def runs(tmp_path):
    """MATLAB files, trials last, decibels, two runs, a trial table; subject 03 is excluded, 04 has no file."""
    (tmp_path / "raw").mkdir()
    rng = np.random.default_rng(8)
    for subject in ("01", "02", "03", "05"):
        for run in (1, 2):
            dat = {
                "pow": 10 * np.log10(rng.exponential(size=(2, 4, 15, 8))).astype(np.float32), "f": np.arange(4.0, 12.0, 2.0),
                "t": np.arange(-500.0, 1000.0, 100.0), "label": np.array(["C0", "C1"], dtype=object),
            }  # fmt: skip
            scipy.io.savemat(tmp_path / "raw" / f"S{subject}_run{run}.mat", {"dat": dat})
        table = pd.DataFrame({"ok": np.arange(16) % 2, "artefact": [1] + [0] * 15, "side": ["left", "right"] * 8})
        table.to_csv(tmp_path / f"S{subject}.tsv", sep="\t", index=False)
    people = pd.DataFrame({"code": ["P01", "P02", "P04", "P05"], "age": [20, 30, 40, 50]})
    people.to_csv(tmp_path / "people.csv", index=False)
    (tmp_path / "places.tsv").write_text("name\tx\ty\tz\nC0\t0\t0\t1\nC1\t0\t1\t0\n", encoding="utf-8")
    (tmp_path / "plan.toml").write_text(PLAN, encoding="utf-8")
    return tmp_path


def maps_of(plan):
    read = tfs.AnalysisPlan.read(plan)
    return study_maps(read, study_opened(read))


def test_maps_have_the_same_bits(runs):
    code, out, err = called("convert", runs / "plan.toml", "--to", runs / "converted")
    assert code == 0, err
    assert "converting" in err.splitlines()
    assert f"The same study from the converted files: {runs / 'converted' / 'plan.toml'}" in out
    assert sorted(os.listdir(runs / "converted")) == ["electrodes.tsv", "participants.csv", "plan.toml", "power"]
    assert sorted(os.listdir(runs / "converted" / "power")) == ["S01.h5", "S02.h5", "S05.h5"]
    (runs / "raw").rename(runs / "away")  # nothing of the old files is read any more
    new = maps_of(runs / "converted" / "plan.toml")
    (runs / "away").rename(runs / "raw")
    old = maps_of(runs / "plan.toml")
    assert new.values.tobytes() == old.values.tobytes()
    assert new.history == old.history and new.cautions == old.cautions
    assert any("turned back from decibels" in line for line in new.history)
    pd.testing.assert_frame_equal(new.trial_counts, old.trial_counts)
    pd.testing.assert_frame_equal(new.participants, old.participants)
    assert new.channels == ("all",) and new.subjects == ("01", "02", "05")


def test_what_input_asks_for_is_done_in_the_files(runs):
    convert_study(runs / "plan.toml", runs / "converted")
    power = tfs.read_power(runs / "converted" / "power" / "S02.h5")
    assert power.subject == "02" and power.power_unit == "µV²" and power.channels == ("C0", "C1")
    assert power.times[0] == -0.5 and len(power.trials) == 15
    assert set(power.trials["ok"]) == {"recalled", "missed"} and set(power.trials["run"]) == {"1", "2"}
    with h5py.File(runs / "converted" / "power" / "S02.h5") as file:
        assert file["power"].dtype == np.float32 and file["power"].shape == (15, 2, 4, 15)
    text = (runs / "converted" / "plan.toml").read_text(encoding="utf-8")
    assert 'exclude = ["04"]' in text and "recode" not in text and "time_unit" not in text


def test_a_folder_that_exists_is_refused(runs):
    (runs / "converted").mkdir()
    code, _, err = called("convert", runs / "plan.toml", "--to", runs / "converted")
    assert code == 2
    assert (
        f"convert, --to {runs / 'converted'}: expected a new folder, got one that exists; choose another name." in err
    )
    assert os.listdir(runs / "converted") == []


def test_unfinished_work_of_something_else_is_not_touched(runs):
    (runs / "converted.unfinished").mkdir()
    (runs / "converted.unfinished" / "thesis.txt").write_text("all of it", encoding="utf-8")
    with pytest.raises(tfs.InputError) as caught:
        convert_study(runs / "plan.toml", runs / "converted")
    assert caught.value.problems == (
        f"convert, --to {runs / 'converted'}: expected no converted.unfinished beside it, got one that no conversion left; "
        "move it away, or choose another name.",
    )
    assert (runs / "converted.unfinished" / "thesis.txt").is_file()


def test_a_refusal_leaves_nothing_and_names_every_subject(runs):
    for name in ("S01_run1.mat", "S05_run2.mat"):
        (runs / "raw" / name).write_bytes(b"broken")
    with pytest.raises(tfs.InputError) as caught:
        convert_study(runs / "plan.toml", runs / "converted")
    assert ["S01_run1" in text for text in caught.value.problems] == [True, False]
    assert "S05_run2" in caught.value.problems[1]
    assert not (runs / "converted").exists() and not (runs / "converted.unfinished").exists()


def test_only_power_of_trials_is_converted(runs):
    text = PLAN.replace('files = "raw', 'kind = "averaged_power"\nfiles = "raw')
    (runs / "plan.toml").write_text(text, encoding="utf-8")
    with pytest.raises(tfs.InputError) as caught:
        convert_study(runs / "plan.toml", runs / "converted")
    assert caught.value.problems == (
        'plan.toml, line 5, input, kind: expected kind = "trials" to convert, got "averaged_power"; run the plan as it is.',
    )
