"""What a user of the shell sees of a whole run, and what a run never does to folders that are there."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

import tfstats as tfs
from tests.command_line.tiny_study import TinyStudy, tfstats_command
from tfstats.plan_file import unfinished_run
from tfstats.reporting import results_folder

PACKAGE_ABOVE = Path(tfs.__file__).resolve().parents[1]


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """A study with its results, and what the command printed."""
    study = TinyStudy(tmp_path_factory.mktemp("finished") / "study")
    study.edit(
        add='[[band]]\nname = "theta"\nfrequencies = [4, 8]\n[[window]]\nname = "early"\ntimes = [0, 0.4]\n'
        '[[band_test]]\nname = "recalled exceeds chance"\ndesign = "against_zero"\ncondition = "recalled"\n'
    )
    return study, tfstats_command("run", study.plan, "--out", study.folder / "results")


def test_results_folder(finished):
    study, done = finished
    results = study.folder / "results"
    assert done.code in (0, None)
    assert "Report: " + str(results / "report.html") in done.out
    for name in ("contents.json", "contrasts", "figures", "methods.md", "plan.toml", "provenance.json", "report.html"):
        assert (results / name).exists(), name
    assert (results / "tables" / "bands.csv").is_file()
    assert (results / "contrasts" / "recalled_against_missed" / "maps.npz").is_file()
    assert not (study.folder / "results.unfinished").exists()


def test_piped_output_is_plain_and_whole(finished):
    _, done = finished
    for text in (done.out, done.err):
        assert "\x1b" not in text
        assert "…" not in text
    assert "recalled exceeds chance\ttheta\tearly\t" in done.out
    # Progress goes to standard error, a line a stage.
    assert "normalizing\n" in done.err
    assert "testing recalled against missed\n" in done.err
    assert "normalizing" not in done.out


def test_show_prints_the_same_findings(finished):
    study, done = finished
    shown = tfstats_command("show", study.folder / "results")
    assert (shown.code in (0, None), shown.err) == (True, "")
    assert shown.out == done.out


def test_check_says_what_would_be_tested(finished):
    study, _ = finished
    done = tfstats_command("check", study.plan)
    assert done.code in (0, None)
    assert done.out.startswith("tiny: nothing is wrong.\n6 subjects: 01, 02, 03, 04, 05, 06\n")
    # 2 channels x 3 frequencies x 5 times; 2^5 sign flips that differ, the smallest p 1/32.
    assert "recalled against missed\tpaired\t6 subjects\t2 x 3 x 5\t30\t32\t32\t.031" in done.out


def test_existing_results_are_kept_without_replace(finished):
    study, _ = finished
    results = study.folder / "results"
    before = (results / "report.html").stat().st_mtime_ns
    done = tfstats_command("run", study.plan, "--out", results)
    assert done.err == (
        f"tfstats: refused:\n  - {results}: expected a new folder, got one that exists; choose another or pass --replace.\n"
    )
    assert done.code == 2
    assert (results / "report.html").stat().st_mtime_ns == before


def test_replace_touches_nothing_but_results(tmp_path):
    """A typing error in --out must not cost anybody the data."""
    study = TinyStudy(tmp_path / "study")
    before = study.inside()
    for place in (study.folder, study.folder / "power"):
        done = tfstats_command("run", study.plan, "--out", place, "--replace")
        assert done.code == 2
        assert f"{place}: expected a results folder to replace, got a folder that holds " in done.err
    assert study.inside() == before
    assert [study.file(name).is_file() for name in study.names] == [True] * 6
    assert unfinished_run.RESULTS_MARK == results_folder.CONTENTS_FILE


def test_reader_that_closes_the_pipe(finished):
    """`tfstats show FOLDER | head -1` ends without a word of complaint."""
    study, _ = finished
    reading = subprocess.Popen(
        [sys.executable, "-m", "tfstats", "show", str(study.folder / "results")],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, env={**os.environ, "PYTHONPATH": str(PACKAGE_ABOVE)},
    )  # fmt: skip
    reading.stdout.close()
    said = reading.stderr.read()
    assert (reading.wait(), said) == (0, b"")
