"""The exact text of each refusal of the results folder."""

import json
from types import SimpleNamespace

import pandas as pd
import pytest

import tfstats as tfs
from tfstats.reporting import StudyResults, read_results, write_results


def refusal_of(action):
    with pytest.raises(tfs.InputError) as caught:
        action()
    return str(caught.value)


def results_like(folder, **changes):
    """A folder that looks like results without contrasts."""
    folder.mkdir()
    contents = {
        "format": "tfstats results 1", "study": "s", "contrasts": {}, "baseline_window": None, "cautions": [],
        "band_cautions": [], **changes,
    }  # fmt: skip
    (folder / "contents.json").write_text(json.dumps(contents), encoding="utf-8")
    return folder


def test_nothing_there(tmp_path):
    place = tmp_path / "absent"
    assert refusal_of(lambda: read_results(place)) == (
        f"{place}: expected a results folder, got nothing there; give the folder that tfstats run wrote."
    )


def test_a_file(tmp_path):
    place = tmp_path / "report.html"
    place.write_text("x", encoding="utf-8")
    assert refusal_of(lambda: read_results(place)) == (
        f"{place}: expected a results folder, got a file; give the folder that tfstats run wrote."
    )


def test_unfinished(tmp_path):
    place = results_like(tmp_path / "results.unfinished")
    assert refusal_of(lambda: read_results(place)) == (
        f"{place}: expected a finished results folder, got one whose run did not end; repeat tfstats run with the same "
        "plan and the same --out, which takes it up again."
    )


def test_a_folder_of_something_else(tmp_path):
    (tmp_path / "a.txt").write_text("x", encoding="utf-8")
    (tmp_path / "b").mkdir()
    assert refusal_of(lambda: read_results(tmp_path)) == (
        f'{tmp_path}: expected a results folder with contents.json, got a folder that holds "a.txt", "b"; '
        "give the folder that tfstats run wrote."
    )


def test_another_version(tmp_path):
    place = results_like(tmp_path / "results", format="tfstats results 9")
    assert refusal_of(lambda: read_results(place)) == (
        f'{place / "contents.json"}: expected the format "tfstats results 1", got "tfstats results 9"; read it with the '
        "version of tfstats that wrote it."
    )


@pytest.mark.parametrize("text", ["{", "[]", '{"a": 1}'])
def test_contents_of_something_else(tmp_path, text):
    (tmp_path / "contents.json").write_text(text, encoding="utf-8")
    assert refusal_of(lambda: read_results(tmp_path)) == (
        f'{tmp_path / "contents.json"}: expected the format "tfstats results 1", got "another content"; read it with the '
        "version of tfstats that wrote it."
    )


def test_everything_that_is_missing_at_once(tmp_path):
    place = results_like(tmp_path / "results", contrasts={"memory": "memory"})
    assert refusal_of(lambda: read_results(place)).splitlines() == [
        f"{place / 'contrasts' / 'memory' / 'result.npz'}: expected a saved result, got nothing; give the folder that save "
        "wrote.",
        f"{place / 'provenance.json'}: expected the provenance of the run, got no readable file; run the analysis again.",
    ]


def test_a_study_of_nothing(tmp_path):
    assert refusal_of(lambda: write_results(StudyResults({}), tmp_path / "out")) == (
        "write_results, study: expected at least one contrast or a band table, got neither; test something first."
    )
    assert not (tmp_path / "out").exists()


def test_names_that_share_a_folder(tmp_path):
    study = StudyResults({"a b": SimpleNamespace(), "a_b": SimpleNamespace()}, bands=pd.DataFrame())
    assert refusal_of(lambda: write_results(study, tmp_path / "out")) == (
        'contrast names: expected names that stay distinct as folder names, got "a b", "a_b"; rename one of them.'
    )
    assert not (tmp_path / "out").exists()
