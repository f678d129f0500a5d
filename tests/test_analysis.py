"""run_analysis: an interrupted run is taken up, what it depends on, what it leaves, and that it says how it came about."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import tfstats as tfs
from tests.small_study import PLAN, SUBJECTS, behaviour, trial_power
from tfstats.power_files import read_electrodes
from tfstats.reporting import report_pages

TESTED = ["testing recalled against missed", "testing missed changes"]


@pytest.fixture(autouse=True)
def pictures_are_drawn(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    """Drawing takes nearly all of the time of so small a study, so that only tests marked by name draw."""
    if "bookkeeping" in request.node.name:
        return

    def write_report(results: object, folder: Path, **settings: object) -> Path:
        (folder / "report.html").write_text("not drawn in this test", encoding="utf-8")
        return folder / "report.html"

    monkeypatch.setattr(report_pages, "write_report", write_report)


class Stopped(Exception):
    """Stands for whatever ends a process from outside."""


def stopping_at(stage: str) -> Callable[[str, int, int | None], None]:
    def tell(said: str, done: int, total: int | None) -> None:
        if said == stage:
            raise Stopped(said)

    return tell


def stages_of(plan: Path, out: Path, **options: Any) -> list[str]:
    """Run to the end and say which stages there were, each once."""
    said: dict[str, None] = {}
    tfs.run_analysis(plan, out, progress=lambda stage, done, total: said.setdefault(stage), **options)
    return list(said)


def interrupted(folder: Path, stage: str = "testing missed changes") -> Path:
    """Leave a run that ended while its second contrast was tested."""
    with pytest.raises(Stopped):
        tfs.run_analysis(folder / "plan.toml", folder / "results", progress=stopping_at(stage), cache=False)
    left = folder / "results.unfinished"
    assert left.is_dir() and not (folder / "results").exists()
    return left


def contents(folder: Path) -> dict[str, bytes]:
    """All files that hold results; the pictures and the account of the run are left out."""
    return {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and path.suffix in {".csv", ".npz", ".toml", ".md"}
    }


def test_an_interrupted_run_goes_on_where_it_was(study: Path) -> None:
    tfs.run_analysis(study / "plan.toml", study / "whole", cache=False)
    left = interrupted(study)
    assert (left / "contrasts" / "recalled_against_missed" / "result.npz").is_file()
    assert not (left / "contrasts" / "missed_changes").exists()
    stages = stages_of(study / "plan.toml", study / "results", cache=False)
    assert "normalizing" not in stages
    assert [stage for stage in stages if stage.startswith("testing")] == TESTED[1:]
    assert not left.exists()
    assert contents(study / "results") == contents(study / "whole")


def test_nothing_of_the_bookkeeping_stays_in_the_results(study: Path) -> None:
    tfs.run_analysis(study / "plan.toml", study / "results")
    names = {path.name for path in (study / "results").iterdir()}
    assert not names & {"run_state.json", "condition_maps.npz"}
    assert {"report.html", "methods.md", "plan.toml", "provenance.json", "tables", "contrasts", "figures"} <= names


def change_power(folder: Path) -> None:
    tfs.write_power(folder / "power" / "S03.npz", trial_power("03", values=trial_power("04").values[:]))


def change_behaviour(folder: Path) -> None:
    behaviour()[::-1].to_csv(folder / "behaviour" / "S03.tsv", sep="\t", index=False)


def change_participants(folder: Path) -> None:
    rows = "".join(f"{subject}\t{50 + place}\n" for place, subject in enumerate(SUBJECTS))
    (folder / "participants.tsv").write_text("participant_id\tage\n" + rows, encoding="utf-8")


def change_electrodes(folder: Path) -> None:
    text = (folder / "electrodes.tsv").read_text(encoding="utf-8")
    (folder / "electrodes.tsv").write_text(text.replace("1.0", "1.1"), encoding="utf-8")


def change_plan(folder: Path) -> None:
    (folder / "plan.toml").write_text(PLAN.replace("permutations = 64", "permutations = 63"), encoding="utf-8")


@pytest.mark.parametrize(
    "change",
    [change_power, change_behaviour, change_participants, change_electrodes, change_plan],
    ids=lambda one: one.__name__,
)
def test_a_run_starts_anew_when_anything_that_it_depends_on_has_changed(change, study: Path) -> None:
    interrupted(study)
    change(study)
    stages = stages_of(study / "plan.toml", study / "results", cache=False)
    assert "normalizing" in stages
    assert [stage for stage in stages if stage.startswith("testing")] == TESTED


def test_a_comment_in_the_plan_changes_nothing(study: Path) -> None:
    interrupted(study)
    (study / "plan.toml").write_text("# for the second time\n" + PLAN, encoding="utf-8")
    assert "normalizing" not in stages_of(study / "plan.toml", study / "results", cache=False)
    assert (study / "results" / "plan.toml").read_text(encoding="utf-8").startswith("# for the second time")


@pytest.mark.parametrize("name", ["contrasts/recalled_against_missed/result.npz", "condition_maps.npz"])
def test_what_was_damaged_meanwhile_is_made_again(name: str, study: Path) -> None:
    tfs.run_analysis(study / "plan.toml", study / "whole", cache=False)
    left = interrupted(study)
    (left / name).write_bytes(b"half")
    tfs.run_analysis(study / "plan.toml", study / "results", cache=False)
    assert contents(study / "results") == contents(study / "whole")


def test_a_damaged_state_starts_anew(study: Path) -> None:
    (interrupted(study) / "run_state.json").write_text("{", encoding="utf-8")
    assert "normalizing" in stages_of(study / "plan.toml", study / "results", cache=False)


def test_a_folder_of_something_else_is_not_touched(study: Path) -> None:
    there = study / "results.unfinished" / "thesis.txt"
    there.parent.mkdir()
    there.write_text("years of work", encoding="utf-8")
    with pytest.raises(tfs.InputError, match="expected nothing there or an interrupted run, got something else"):
        tfs.run_analysis(study / "plan.toml", study / "results")
    assert there.read_text(encoding="utf-8") == "years of work"


def test_a_refusal_leaves_an_interrupted_run_as_it_was(study: Path) -> None:
    left = interrupted(study)
    before = contents(left)
    (study / "plan.toml").write_text(PLAN.replace('condition = "missed"', 'condition = "mist"'), encoding="utf-8")
    with pytest.raises(tfs.InputError):
        tfs.run_analysis(study / "plan.toml", study / "results")
    assert contents(left) == before
    (study / "plan.toml").write_text(PLAN, encoding="utf-8")
    assert "normalizing" not in stages_of(study / "plan.toml", study / "results", cache=False)


def test_an_existing_folder_is_replaced_only_on_request_and_only_by_a_whole_one(study: Path) -> None:
    tfs.run_analysis(study / "plan.toml", study / "results")
    first = contents(study / "results")
    with pytest.raises(tfs.InputError, match="pass --replace"):
        tfs.run_analysis(study / "plan.toml", study / "results")
    change_power(study)
    with pytest.raises(Stopped):
        tfs.run_analysis(study / "plan.toml", study / "results", replace=True, progress=stopping_at(TESTED[1]))
    assert contents(study / "results") == first
    tfs.run_analysis(study / "plan.toml", study / "results", replace=True)
    assert contents(study / "results") != first
    assert [path.name for path in study.glob("results*")] == ["results"]


def test_nothing_is_tested_before_everything_can_be(study: Path) -> None:
    """A refusal of the second contrast comes before the first has cost anything."""
    second = 'condition = "missed"\ntest = { correction = { kind = "maximum" }, frequencies = [50, 60] }'
    (study / "plan.toml").write_text(PLAN.replace('condition = "missed"', second), encoding="utf-8")
    said: list[str] = []
    with pytest.raises(tfs.InputError, match="missed changes"):
        tfs.run_analysis(study / "plan.toml", study / "results", progress=lambda stage, done, total: said.append(stage))
    assert not [stage for stage in said if stage.startswith("testing")]
    assert not list(study.glob("results*"))


def test_one_thread_and_two_give_the_same_bytes(study: Path) -> None:
    for threads in (1, 2):
        tfs.run_analysis(study / "plan.toml", study / f"by{threads}", threads=threads)
    assert contents(study / "by1") == contents(study / "by2")


def test_what_comes_back_is_what_was_written(study: Path) -> None:
    made = tfs.run_analysis(study / "plan.toml", study / "results")
    again = tfs.read_results(study / "results")
    assert list(made.contrasts) == list(again.contrasts) == ["recalled against missed", "missed changes"]
    for name, result in made.contrasts.items():
        for field in ("statistic", "p_values", "mask", "null", "cluster_labels", "effect_size"):
            np.testing.assert_array_equal(getattr(result, field), getattr(again.contrasts[name], field))
    assert made.bands is not None and again.bands is not None
    np.testing.assert_allclose(made.bands["estimate"], again.bands["estimate"], rtol=1e-12)
    assert json.loads(json.dumps(made.provenance)) == again.provenance


def test_the_plan_gives_what_the_same_calls_give(study: Path) -> None:
    """The shell adds nothing: the stages called one by one return the same numbers."""
    result = tfs.run_analysis(study / "plan.toml", study / "results").contrasts["recalled against missed"]
    powers = tfs.PowerFiles(study / "power/S{subject}.npz", trial_table=study / "behaviour/S{subject}.tsv")
    maps = tfs.condition_maps(powers, "memory", tfs.Baseline((-0.5, -0.2)), conditions=["recalled", "missed"])
    neighbours = tfs.channel_adjacency(read_electrodes(study / "electrodes.tsv"), rule="distance", farthest=1.5)
    # The plan's test begins after the baseline window.
    contrast = tfs.paired(maps.select(times=(-0.1, 0.8)), "recalled", "missed")
    by_hand = tfs.permutation_test(contrast, tfs.ClusterMass(forming_p=0.01), permutations=64, adjacency=neighbours)
    np.testing.assert_array_equal(result.times, by_hand.times)
    np.testing.assert_array_equal(result.null, by_hand.null)
    np.testing.assert_array_equal(result.p_values, by_hand.p_values)


def test_provenance_names_every_input_by_the_hash_of_its_bytes(study: Path) -> None:
    provenance = tfs.run_analysis(study / "plan.toml", study / "results").provenance
    names = [
        f"{kind}/S{subject}{ending}"
        for subject in SUBJECTS
        for kind, ending in (("power", ".npz"), ("behaviour", ".tsv"))
    ]
    assert sorted(provenance["input_hashes"]) == sorted([*names, "participants.tsv", "electrodes.tsv"])
    for name, digest in provenance["input_hashes"].items():
        assert digest == hashlib.sha256((study / name).read_bytes()).hexdigest()
    assert provenance["versions"]["tfstats"] == tfs.__version__
    assert provenance["seed"] == 0
    assert provenance["plan_hash"] == tfs.AnalysisPlan.read(study / "plan.toml").hash
    assert provenance["options"]["threads"] is None


def test_inputs_outside_the_plans_folder_keep_names_of_their_own(study: Path, tmp_path: Path) -> None:
    plans = tmp_path / "plans"
    plans.mkdir()
    text = PLAN
    for name in ("power/S", "behaviour/S", "participants.tsv", "electrodes.tsv"):
        text = text.replace(f'"{name}', f'"../study/{name}')
    (plans / "plan.toml").write_text(text, encoding="utf-8")
    hashes = tfs.run_analysis(plans / "plan.toml", tmp_path / "results").provenance["input_hashes"]
    assert len(hashes) == 2 * len(SUBJECTS) + 2
    assert "../study/power/S01.npz" in hashes


def test_when_the_plan_was_hashed_is_when_the_run_first_began(study: Path) -> None:
    left = interrupted(study)
    state = json.loads((left / "run_state.json").read_text(encoding="utf-8"))
    state["plan_hashed_at"] = "2001-02-03T04:05:06+00:00"
    (left / "run_state.json").write_text(json.dumps(state), encoding="utf-8")
    provenance = tfs.run_analysis(study / "plan.toml", study / "results", cache=False).provenance
    assert provenance["plan_hashed_at"] == "2001-02-03T04:05:06+00:00"


def test_file_times_alone_are_reason_enough_to_read_again(study: Path) -> None:
    interrupted(study)
    path = study / "power" / "S05.npz"
    os.utime(path, ns=(path.stat().st_atime_ns, path.stat().st_mtime_ns + 10**9))
    assert "normalizing" in stages_of(study / "plan.toml", study / "results", cache=False)
