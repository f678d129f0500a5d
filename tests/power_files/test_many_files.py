"""PowerFiles: which files belong to whom, how they are joined, and that one subject is held at a time."""

import gc
import weakref

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.power_files.stored_values import LazyPower


@pytest.fixture
def study(tmp_path, make_power):
    """Subjects 1, 2 and 10, two runs each (2 and 10), of 3 and 4 trials."""
    parts = {}
    for subject in ("1", "2", "10"):
        for run, trials in (("2", 3), ("10", 4)):
            table = pd.DataFrame({"memory": ["recalled", "missed", "recalled", "missed"][:trials]})
            power = make_power(trials=trials, subject="in file", table=table, seed=int(subject) * 100 + int(run))
            parts[subject, run] = power
            tfs.write_power(tmp_path / "power" / f"S{subject}_run{run}.h5", power)
    (tmp_path / "power" / "notes.txt").write_text("no power", encoding="utf-8")
    (tmp_path / "power" / "S1_run3.h5.part").write_text("no power", encoding="utf-8")
    return tmp_path, parts


def test_subjects_and_runs_in_the_order_of_their_numbers(study):
    folder, parts = study
    powers = tfs.PowerFiles(folder / "power" / "S{subject}_run{run}.h5")
    assert powers.subjects == ("1", "2", "10") and len(powers) == 3
    assert [path.name for path in powers.files_of("10")] == ["S10_run2.h5", "S10_run10.h5"]
    for _ in range(2):  # again and again
        assert [power.subject for power in powers] == ["1", "2", "10"]
    power = powers.of("2")
    assert isinstance(power.values, LazyPower)
    assert power.trials["run"].tolist() == ["2"] * 3 + ["10"] * 4
    assert power.trials["memory"].tolist() == ["recalled", "missed", "recalled"] + ["recalled", "missed"] * 2
    expected = np.concatenate([parts["2", "2"].values, parts["2", "10"].values])
    np.testing.assert_array_equal(power.as_array(), expected)
    np.testing.assert_array_equal(power.select(trials={"run": "10", "memory": "missed"}).as_array(), expected[[4, 6]])
    assert repr(powers).endswith("3 subjects, 6 files>")


def test_subjects_can_be_chosen_and_ordered(study):
    folder, _ = study
    powers = tfs.PowerFiles(folder / "power" / "S{subject}_run{run}.h5", subjects=["10", 1])
    assert powers.subjects == ("10", "1") and [power.subject for power in powers] == ["10", "1"]


def test_relative_patterns_start_at_the_current_folder(study, monkeypatch):
    folder, _ = study
    monkeypatch.chdir(folder)
    assert tfs.PowerFiles("power/S{subject}_run2.h5").of("1").source.endswith("S1_run2.h5")
    monkeypatch.chdir(folder / "power")
    assert tfs.PowerFiles("S{subject}_run2.h5").subjects == ("1", "2", "10")


def test_words_in_folders_and_repeated_words(tmp_path, make_power):
    for subject in ("01", "02"):
        for condition in ("recalled", "missed"):
            tfs.write_power(
                tmp_path / f"sub-{subject}" / condition / f"{subject}_{condition}.npz", make_power(trials=2)
            )
    tfs.write_power(tmp_path / "sub-01" / "recalled" / "02_recalled.npz", make_power())
    powers = tfs.PowerFiles(tmp_path / "sub-{subject}" / "{condition}" / "{subject}_{condition}.npz")
    assert powers.subjects == ("01", "02")
    assert powers.of("01").trials["condition"].tolist() == ["missed"] * 2 + ["recalled"] * 2


def test_only_one_subject_is_held(study):
    folder, _ = study
    held = []
    for power in tfs.PowerFiles(folder / "power" / "S{subject}_run{run}.h5"):
        held.append(weakref.ref(power))
        del power
        gc.collect()
        assert sum(one() is not None for one in held) <= 1


def table(path, rows, header="memory\treaction_time"):
    path.parent.mkdir(exist_ok=True)
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")


@pytest.mark.parametrize("each_run", [False, True])
def test_trial_tables(study, each_run):
    folder, _ = study
    rows = [f"{'recalled' if number % 2 == 0 else 'missed'}\t{number / 10}" for number in range(7)]
    memory = ["recalled", "missed", "recalled", "recalled", "missed", "recalled", "missed"]
    rows = [f"{label}\t{number / 10}" for number, label in enumerate(memory)]
    for subject in ("1", "2", "10"):
        if each_run:
            table(folder / "behaviour" / f"S{subject}_2.tsv", rows[:3])
            table(folder / "behaviour" / f"S{subject}_10.tsv", rows[3:])
        else:
            table(folder / "behaviour" / f"S{subject}.tsv", rows)
    powers = tfs.PowerFiles(
        folder / "power" / "S{subject}_run{run}.h5",
        trial_table=folder / "behaviour" / ("S{subject}_{run}.tsv" if each_run else "S{subject}.tsv"),
        recode={"run": {"2": "first"}}, keep={"reaction_time": {"at_least": 0.15, "at_most": 0.45}},
    )  # fmt: skip
    for power in powers:
        assert power.trials["reaction_time"].tolist() == [0.2, 0.3, 0.4]
        assert power.trials["run"].tolist() == ["first", "10", "10"]
        assert power.trials["memory"].tolist() == ["recalled", "recalled", "missed"]
        assert power.as_array().shape[0] == 3


def test_tables_of_a_length_that_does_not_fit(study):
    folder, _ = study
    for subject in ("1", "2", "10"):
        table(folder / "behaviour" / f"S{subject}.tsv", ["recalled\t0.1"] * (7 if subject == "1" else 6))
    powers = tfs.PowerFiles(
        folder / "power" / "S{subject}_run{run}.h5", trial_table=folder / "behaviour" / "S{subject}.tsv"
    )
    with pytest.raises(tfs.InputError) as refused:
        powers.check()
    problems = [problem for problem in refused.value.problems if "one row for each" in problem]
    assert len(problems) == 2 and "subject 2, " in problems[0] and "S10.tsv" in problems[1]
    assert "got 6 rows" in problems[0] and "7 trials" in problems[0] and "S2_run10.h5" in problems[0]


def test_a_table_that_says_otherwise_than_the_file(study):
    folder, _ = study
    table(folder / "S1.tsv", ["recalled\t0.1"] * 7)
    powers = tfs.PowerFiles(
        folder / "power" / "S{subject}_run{run}.h5", trial_table=folder / "S{subject}.tsv", subjects=["1"]
    )
    with pytest.raises(
        tfs.InputError, match="trial column memory: expected the same in .* got 3 of 7 trials that differ"
    ):
        powers.of("1")


def test_check_lists_everything_about_everyone(study, make_power):
    folder, _ = study
    assert tfs.PowerFiles(folder / "power" / "S{subject}_run{run}.h5").check().to_dict("list") == {
        "subject": ["1", "2", "10"], "files": [2] * 3, "trials": [7] * 3, "channels": [2] * 3, "frequencies": [3] * 3,
        "times": [4] * 3,
    }  # fmt: skip
    tfs.write_power(folder / "power" / "S0_run2.npz", make_power(trials=3))
    bad = make_power(trials=5)
    values = bad.values.copy()
    values[0] = 0
    np.savez(
        folder / "power" / "S1_run2.npz",
        power=values,
        frequencies=bad.frequencies,
        times=bad.times,
        channels=["C0", "C1"],
    )
    tfs.write_power(folder / "power" / "S2_run2.npz", make_power(trials=3, channels=3))
    tfs.write_power(folder / "power" / "S2_run10.npz", make_power(trials=3))
    tfs.write_power(folder / "power" / "S3_run2.npz", make_power(trials=3, frequencies=4))
    (folder / "power" / "S4_run2.npz").write_bytes(b"PK\3\4")
    with pytest.raises(tfs.InputError) as refused:
        tfs.PowerFiles(folder / "power" / "S{subject}_run{run}.npz").check()
    starts = [problem.split(":")[0] for problem in refused.value.problems]
    places = [start.replace(str(folder / "power"), "P").replace("\\", "/") for start in starts]
    assert places == [
        "subject 1, P/S1_run2.npz, values", "subject 2, P/S2_run10.npz, channels", "subject 3, P/S3_run2.npz, frequencies",
        "subject 4, P/S4_run2.npz",
    ]  # fmt: skip


def test_label_files_of_bare_arrays_are_not_power_files(tmp_path, make_power):
    for subject in ("1", "2"):
        tfs.write_power(tmp_path / f"S{subject}.npy", make_power(subject=subject))
    assert tfs.PowerFiles(tmp_path / "S{subject}.npy").subjects == ("1", "2")
    assert len(tfs.PowerFiles(tmp_path / "{subject}.npy").check()) == 2
