"""tfstats draft: someone's own files looked into, a plan that runs once its blanks are filled."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tests.command_line.tiny_study import tfstats_command
from tfstats.command_line.demo_study import write_demo_study
from tfstats.plan_file.drafted_plan import draft_plan
from tfstats.plan_file.study_stages import built_contrast, study_maps, study_opened


def called(*arguments):
    """Exit code, standard output, standard error."""
    done = tfstats_command(*arguments)
    return done.code, done.out, done.err


def filled(plan: Path, **values: str) -> int:
    """Fill the blanks of a plan, each by its key; the number of them."""
    text, count = plan.read_text(encoding="utf-8"), 0
    for line in text.splitlines():
        if '"FILL IN' in line and not line.startswith("#"):
            key = line.split(" = ")[0]
            text = text.replace(line, f"{key} = {values[key]}")
            count += 1
    plan.write_text(text, encoding="utf-8")
    return count


def maps_and_first_contrast(path):
    plan = tfs.AnalysisPlan.read(path)
    study = study_opened(plan)
    maps = study_maps(plan, study)
    call = plan.contrasts[0]
    return maps, built_contrast(plan, study, maps, call)


def test_the_draft_of_the_demo_runs_after_one_blank_is_filled(tmp_path, monkeypatch):
    write_demo_study(tmp_path, subjects=6, permutations=64)
    theirs, _ = maps_and_first_contrast(tmp_path / "plan.toml")
    (tmp_path / "plan.toml").unlink()
    monkeypatch.chdir(tmp_path)
    files = [path.relative_to(tmp_path) for path in sorted((tmp_path / "power").iterdir())]
    code, out, err = called("draft", *files, "participants.tsv", "electrodes.tsv")
    assert code == 0, err
    assert "power\t76 x 8 x 22 x 89\tnumber\tpower (trial x channel x frequency x time)" in out
    assert "times\t89\tnumber\ttimes (-0.7 to 1.5 s)" in out
    assert "trials.memory\t76\ttext\ttrial column (missed: 39, recalled: 37)" in out
    assert "participants.tsv: a table of participants, 6 rows (participant_id, age)" in out
    assert "with 1 blank to fill in" in out
    code, out, err = called("check", "plan.toml")
    assert code == 2
    assert re.search(
        r"- plan\.toml, line \d+, baseline, window: expected \[start, stop\] in s, before the event; times run from -0\.7 to "
        r'1\.5 s, got a blank; write it in place of "FILL IN \.\.\."\.',
        err,
    )
    assert filled(tmp_path / "plan.toml", window="[-0.5, -0.2]") <= 3
    code, out, err = called("check", "plan.toml")
    assert code == 0, err
    maps, contrast = maps_and_first_contrast(tmp_path / "plan.toml")
    by_name = maps.select(conditions=theirs.conditions)
    assert by_name.values.tobytes() == theirs.values.tobytes()
    assert contrast.unit_names == theirs.subjects


def test_a_plan_is_never_overwritten(tmp_path, study):
    before = (study / "plan.toml").read_bytes()
    code, _, err = called("draft", study / "power" / "S01.npz", "--out", study / "plan.toml")
    assert code == 2 and (study / "plan.toml").read_bytes() == before
    assert f"draft, --out {study / 'plan.toml'}: expected a new file, got one that exists; choose another name." in err


def test_the_files_are_looked_into_before_anything_is_written(tmp_path):
    (tmp_path / "S1.npz").write_bytes(b"nothing")
    (tmp_path / "notes.pdf").write_bytes(b"")
    (tmp_path / "folder").mkdir()
    code, _, err = called(
        "draft", tmp_path / "notes.pdf", tmp_path / "folder", tmp_path / "gone.h5", "--out", tmp_path / "plan.toml"
    )
    assert code == 2 and not (tmp_path / "plan.toml").exists()
    assert (
        f'draft, {tmp_path / "notes.pdf"}: expected a file that ends in one of ".csv", ".h5", ".hdf5", ".mat", ".nc", ".npy", '
        '".npz", ".tsv", ".txt", got ".pdf"; leave it out.'
    ) in err
    assert f"draft, {tmp_path / 'folder'}: expected a file, got a folder; name the files in it, as folder/*.mat." in err
    assert f"draft, {tmp_path / 'gone.h5'}: expected a file, got nothing there; check the path." in err
    code, _, err = called("draft", tmp_path / "S1.npz", "--out", tmp_path / "plan.toml")
    assert code == 2 and "expected a whole .npz file, got one that cannot be read" in err
    table = tmp_path / "participants.tsv"
    table.write_text("participant_id\n01\n", encoding="utf-8")
    code, _, err = called("draft", table, "--out", tmp_path / "plan.toml")
    assert code == 2
    assert "draft: expected at least one power file, got tables only; name the files that hold the power." in err
    code, _, err = called("draft", tmp_path / "S1.npz", "--out", tmp_path / "no" / "plan.toml")
    assert code == 2
    assert (
        f"draft, --out {tmp_path / 'no' / 'plan.toml'}: expected a folder that is there, got none; make the folder first."
        in err
    )


def test_trial_tables_and_tables_that_write_subjects_otherwise(study):
    ages = pd.read_csv(study / "participants.tsv", sep="\t", dtype=str)
    ages["participant_id"] = "sub-" + ages["participant_id"]
    ages.to_csv(study / "participants.tsv", sep="\t", index=False)
    (study / "plan.toml").unlink()
    files = [*sorted((study / "power").iterdir()), *sorted((study / "behaviour").iterdir())]
    code, out, err = called(
        "draft", *files, study / "participants.tsv", study / "electrodes.tsv", "--out", study / "plan.toml"
    )
    assert code == 0, err
    text = (study / "plan.toml").read_text(encoding="utf-8")
    assert 'trial_table = "behaviour/S{subject}.tsv"  # guess' in text
    assert 'subject = "sub-{subject}"  # guess' in text
    assert 'columns = ["memory"]  # guess: missed (6 trials), recalled (6 trials) in the first file' in text
    assert filled(study / "plan.toml", window="[-0.5, -0.2]") == 1
    maps, _ = maps_and_first_contrast(study / "plan.toml")
    assert maps.values.shape == (7, 2, 3, 4, 14)


def matlab_like(folder: Path, *, trials: int = 12, decibel: bool = False, channels: int = 3) -> None:
    """Files as a MATLAB user has them: a struct, trials last, times in ms, logical codes, two runs."""
    import scipy.io

    rng = np.random.default_rng(5)
    for subject in ("03", "11", "24"):
        for run in (1, 2):
            power = rng.exponential(size=(channels, 5, 21, trials))
            dat = {
                "pow": 10 * np.log10(power) if decibel else power, "f": np.arange(4.0, 14.0, 2.0),
                "t": np.arange(-500.0, 1501.0, 100.0),
                "label": np.array([f"C{number}" for number in range(channels)], dtype=object),
                "ok": np.arange(trials) % 2 == 0, "artefact": np.arange(trials) % 4 == 3, "rt": rng.random(trials),
            }  # fmt: skip
            scipy.io.savemat(folder / f"sub-{subject}_run-{run}.mat", {"dat": dat})


def test_structs_trials_last_milliseconds_codes_and_runs(tmp_path):
    matlab_like(tmp_path)
    plan = tmp_path / "plan.toml"
    code, out, err = called("draft", *sorted(tmp_path.glob("*.mat")), "--out", plan)
    assert code == 0, err
    text = plan.read_text(encoding="utf-8")
    for line in (
        'files = "sub-{subject}_run-{run}.mat"  # guess: subjects 03, 11, 24',
        'axes = ["channel", "frequency", "time", "trial"]  # guess: told by the lengths',
        'time_unit = "ms"  # guess: steps of half a unit or more',
        'power = "dat.pow"  # guess',
        "# [input.recode.ok]",
        "# artefact = 0",
        'columns = ["ok"]  # guess: 0 (6 trials), 1 (6 trials) in the first file',
        "# Other columns with few labels: run.",
    ):
        assert line in text.splitlines(), line
    assert "The first subject was read as drafted: 24 trials, 3 channels, 5 frequencies from 4 to 12 Hz" in out
    # The suggestions are right once the marks before them are taken away.
    text = text.replace(
        '# [input.recode.ok]\n# "1" = "yes"\n# "0" = "no"', '[input.recode.ok]\n"1" = "yes"\n"0" = "no"'
    )
    text = text.replace("# [input.keep]\n# artefact = 0", "[input.keep]\nartefact = 0")
    text = text.replace('first = "1"', 'first = "yes"').replace('second = "0"', 'second = "no"')
    plan.write_text(text, encoding="utf-8")
    assert filled(plan, window="[-0.5, -0.2]") == 1
    maps, _ = maps_and_first_contrast(plan)
    assert maps.conditions == ("no", "yes") and maps.trial_counts.loc["11"].tolist() == [6, 12]


def test_decibels_are_noticed(tmp_path):
    matlab_like(tmp_path, decibel=True)
    draft = draft_plan(sorted(tmp_path.glob("*.mat")), tmp_path)
    assert 'contents = "decibel"  # guess: from the values; see above' in draft.text
    assert any("are negative, so these are not linear power" in remark for remark in draft.remarks)


def test_axes_that_lengths_do_not_tell_are_a_blank_and_not_a_guess(tmp_path):
    matlab_like(tmp_path, trials=21, channels=5)
    draft = draft_plan(sorted(tmp_path.glob("*.mat")), tmp_path)
    assert draft.contents[0].axes is None and draft.trial == ""
    line = next(line for line in draft.text.splitlines() if line.startswith("axes = "))
    assert line.startswith("axes = \"FILL IN: the order of the power's axes, ")
    assert '[\\"channel\\", \\"frequency\\", \\"time\\", \\"trial\\"]' in line
    assert draft.blanks == 2


def test_one_subject_is_compared_trial_by_trial(tmp_path):
    matlab_like(tmp_path)
    draft = draft_plan([tmp_path / "sub-03_run-1.mat"], tmp_path)
    # The other files fit the pattern, so they are found and that is said.
    assert any("also finds" in remark for remark in draft.remarks)
    alone = tmp_path / "alone"
    alone.mkdir()
    shutil.copy(tmp_path / "sub-03_run-1.mat", alone)
    draft = draft_plan([alone / "sub-03_run-1.mat"], alone)
    assert 'design = "trialwise"  # guess: one subject, whose trials are compared' in draft.text
    (alone / "plan.toml").write_text(draft.text, encoding="utf-8")
    assert filled(alone / "plan.toml", window="[-0.5, -0.2]") == 1
    plan = tfs.AnalysisPlan.read(alone / "plan.toml")
    study = study_opened(plan)
    contrast = built_contrast(plan, study, None, plan.contrasts[0])
    assert contrast.shape == (3, 5, 17)


def test_what_cannot_be_told_is_blank(tmp_path):
    np.savez(tmp_path / "a.npz", spectrum=np.random.default_rng(0).exponential(size=(6, 5, 4, 7)))
    draft = draft_plan([tmp_path / "a.npz"], tmp_path)
    keys = [line.split(" = ")[0] for line in draft.text.splitlines() if '"FILL IN' in line and not line.startswith("#")]
    assert keys == ["axes", "frequencies", "times", "channels", "columns", "window", "first", "second"]
    (tmp_path / "plan.toml").write_text(draft.text, encoding="utf-8")
    with pytest.raises(tfs.InputError) as caught:
        tfs.AnalysisPlan.read(tmp_path / "plan.toml")
    assert len(caught.value.problems) == len(keys) == draft.blanks


OCTAVE = """
for s = 1:3
  pow = exp(randn(12, 3, 5, 21)); hz = 4:2:12; ms = -500:100:1500; names = {"Fz", "Cz", "Pz"};
  side = repmat({"left", "right"}, 1, 6);
  save("-v7", sprintf("p%d.mat", s), "pow", "hz", "ms", "names", "side");
end
"""


@pytest.mark.skipif(shutil.which("octave-cli") is None, reason="GNU Octave is absent")
def test_files_that_octave_wrote(tmp_path):
    subprocess.run(
        ["octave-cli", "--no-gui", "--quiet", "--no-init-file", "--eval", OCTAVE],
        cwd=tmp_path,
        capture_output=True,
        timeout=120,
    )
    draft = draft_plan(sorted(tmp_path.glob("*.mat")), tmp_path)
    (tmp_path / "plan.toml").write_text(draft.text, encoding="utf-8")
    assert filled(tmp_path / "plan.toml", window="[-0.5, -0.2]") == 1
    maps, _ = maps_and_first_contrast(tmp_path / "plan.toml")
    assert maps.subjects == ("1", "2", "3") and maps.conditions == ("left", "right")
    assert maps.frequencies.tolist() == [4, 6, 8, 10, 12] and maps.times[0] == -0.5
