"""The results folder, written and read back."""

import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.reporting import StudyResults, read_results, write_results

MAPS = ("statistic", "p_values", "point_p_values", "estimate", "effect_size", "mask", "cluster_labels", "null")


@pytest.fixture(scope="module")
def folder(make_study, tmp_path_factory):
    study, place = make_study(), tmp_path_factory.mktemp("written") / "results"
    assert write_results(study, place) == place / "report.html"
    return study, place


def test_what_is_in_the_folder(folder):
    _, out = folder
    short = "recalled_against_missed"
    names = {path.relative_to(out).as_posix() for path in out.rglob("*") if path.is_file()}
    assert {
        "report.html", "methods.md", "plan.toml", "provenance.json", "contents.json", "tables/bands.csv",
        "tables/clusters.csv", "tables/trial_counts.csv", f"contrasts/{short}/clusters.csv",
        f"contrasts/{short}/subject_values.csv", f"contrasts/{short}/result.npz", f"contrasts/{short}/maps.npz",
    } <= names  # fmt: skip
    figures = {name for name in names if name.startswith("figures/")}
    for kind in ("conditions", "maps", "channels", "null", "individuals"):
        assert {f"figures/{short}_{kind}.pdf", f"figures/{short}_{kind}.png"} <= figures
    assert not [name for name in names if Path(name).name.startswith(".")]
    assert all((out / name).stat().st_size < 600_000 for name in figures)


def test_round_trip(folder):
    study, out = folder
    again = tfs.read_results(out)
    assert list(again.contrasts) == list(study.contrasts)
    for name, result in study.contrasts.items():
        for field in MAPS:
            assert np.array_equal(getattr(result, field), getattr(again.contrasts[name], field), equal_nan=True), field
        assert again.contrasts[name].sentence() == result.sentence()
        assert again.contrasts[name].record == result.record
    pd.testing.assert_frame_equal(again.bands, study.bands)
    assert again.provenance == study.provenance
    pd.testing.assert_frame_equal(again.trial_counts, study.trial_counts)
    pd.testing.assert_frame_equal(again.participants, study.participants)
    pd.testing.assert_frame_equal(again.electrodes, study.electrodes)
    for field in ("name", "plan_text", "baseline_window", "cautions"):
        assert getattr(again, field) == getattr(study, field)


def test_a_study_read_back_writes_the_same_report(folder, tmp_path):
    _, out = folder
    write_results(read_results(out), tmp_path / "second")
    for name in ("report.html", "methods.md", "figures/recalled_against_missed_maps.pdf",
                 "figures/recalled_against_missed_maps.png", "tables/clusters.csv"):  # fmt: skip
        assert (out / name).read_bytes() == (tmp_path / "second" / name).read_bytes(), name


def test_labels_that_look_like_numbers_or_gaps_stay_text(make_study, make_maps, tmp_path):
    subjects = ["007", "NA", "1e3", *(f"{number}" for number in range(10, 16))]
    maps = make_maps(("2", "nan"), ("NA", "01", "x"), subjects=subjects)
    study = make_study(maps=maps)
    study.bands.loc[:, "channels"] = "NA"
    study.bands.loc[0, "p_corrected"] = np.nan
    write_results(study, tmp_path / "out", figures=False)
    again = read_results(tmp_path / "out")
    assert list(again.trial_counts.index) == subjects
    assert list(again.trial_counts.columns) == ["2", "nan"]
    assert list(again.participants["participant_id"]) == subjects
    assert list(again.electrodes["name"]) == ["NA", "01", "x"]
    pd.testing.assert_frame_equal(again.bands, study.bands)


def test_clusters_of_all_contrasts_in_one_table(make_study, tmp_path):
    study = make_study(names=("first", "second, with comma"))
    write_results(study, tmp_path / "out", figures=False)
    table = pd.read_csv(tmp_path / "out" / "tables" / "clusters.csv")
    assert list(dict.fromkeys(table["contrast"])) == ["first", "second, with comma"]
    assert list(table.columns[1:24]) == list(study.contrasts["first"].clusters.columns[:23])


def test_contrasts_saved_by_the_run_are_kept(make_study, tmp_path):
    study = make_study()
    place = tmp_path / "out" / "contrasts" / "recalled_against_missed"
    next(iter(study.contrasts.values())).save(place)
    before = (place / "result.npz").stat().st_mtime_ns
    write_results(study, tmp_path / "out", figures=False)
    assert (place / "result.npz").stat().st_mtime_ns == before
    assert not (tmp_path / "out" / "figures").exists()


def test_a_study_of_little(make_result, tmp_path):
    """No plan, no bands, no tables: what is not there is not written, and comes back as None."""
    write_results(StudyResults({"a": make_result()}), tmp_path / "out", figures=False)
    again = read_results(tmp_path / "out")
    assert again.bands is None and again.plan_text is None and again.trial_counts is None
    assert again.provenance == {} and again.name == "study"
    assert not (tmp_path / "out" / "plan.toml").exists()


def test_the_plan_is_copied_byte_for_byte(make_study, tmp_path):
    text = '[study]\r\nname = "é"\r\n'
    write_results(make_study(plan_text=text), tmp_path / "out", figures=False)
    assert (tmp_path / "out" / "plan.toml").read_bytes() == text.encode()
    assert read_results(tmp_path / "out").plan_text == text


def test_fonts_are_embedded_as_truetype(folder):
    _, out = folder
    pdf = (out / "figures" / "recalled_against_missed_null.pdf").read_bytes()
    assert b"/Type3" not in pdf and b"/FontFile2" in pdf


def test_progress_is_told(make_study, tmp_path):
    said = []
    write_results(make_study(), tmp_path / "out", figures=False, progress=said.append)
    assert said[:2] == ["saving recalled against missed", "writing tables"]


def test_matplotlib_settings_are_left_alone(make_study, tmp_path):
    import matplotlib

    before = dict(matplotlib.rcParams)
    write_results(make_study(), tmp_path / "out")
    assert dict(matplotlib.rcParams) == before


def test_without_display_home_or_locale(folder, tmp_path):
    """A process with nothing in its environment reads the folder and writes it again."""
    _, out = folder
    code = (
        "import sys; import tfstats as tfs; from tfstats.reporting import write_results\n"
        "study = tfs.read_results(sys.argv[1]); write_results(study, sys.argv[2])\n"
        "assert 'matplotlib.pyplot' not in sys.modules\n"
    )
    environment = {"LC_ALL": "C", "PYTHONPATH": str(Path(tfs.__file__).parents[1]), "PYTHONDONTWRITEBYTECODE": "1"}
    if sys.platform == "win32":
        environment["SYSTEMROOT"] = os.environ["SYSTEMROOT"]
    done = subprocess.run(
        [sys.executable, "-c", code, str(out), str(tmp_path / "again")], env=environment, capture_output=True, text=True,
        cwd=tmp_path, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "again" / "methods.md").read_bytes() == (out / "methods.md").read_bytes()


def test_reading_needs_neither_matplotlib_nor_jinja(folder, tmp_path):
    _, out = folder
    code = (
        "import sys, tfstats as tfs; tfs.read_results(sys.argv[1]); "
        "assert not {'matplotlib', 'jinja2'} & set(sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code, str(out)], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_contents_are_plain_json(folder):
    study, out = folder
    contents = json.loads((out / "contents.json").read_text(encoding="utf-8"))
    assert contents["format"] == "tfstats results 1"
    assert contents["contrasts"] == {"recalled against missed": "recalled_against_missed"}
    assert json.loads((out / "provenance.json").read_text(encoding="utf-8")) == study.provenance
