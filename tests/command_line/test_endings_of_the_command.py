"""How each ending of the command tells itself: 0 done, 1 fault, 2 refused, 3 machine, 130 interrupted."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

import tfstats
from tests.command_line.tiny_study import tfstats_command

PACKAGE_ABOVE = Path(tfstats.__file__).resolve().parents[1]


def ending_with(error: BaseException, monkeypatch: pytest.MonkeyPatch) -> None:
    def run_analysis(*arguments: object, **settings: object) -> None:
        raise error

    monkeypatch.setattr("tfstats.analysis.run_analysis", run_analysis)


def test_done(study: Path) -> None:
    done = tfstats_command("check", study / "plan.toml")
    assert done.code in (0, None)
    assert "nothing is wrong" in done.out and "small study" in done.out


@pytest.mark.parametrize("arguments", [["--version"], ["--help"], ["run", "--help"]], ids=" ".join)
def test_what_only_tells_is_done(arguments: list[str]) -> None:
    done = tfstats_command(*arguments)
    assert done.code in (0, None)
    assert done.out and not done.err


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["unheard-of"], "No such command"),
        (["run"], "Missing argument"),
        (["run", "plan.toml"], "Missing option"),
        (["run", "plan.toml", "--out", "o", "--threads", "0"], "threads"),
        (["run", "plan.toml", "--out", "o", "--treads", "2"], "--treads"),
        (["run", "nowhere.toml", "--out", "o"], "nothing of that name"),
        (["show", "nowhere"], "expected a results folder"),
    ],
    ids=lambda value: " ".join(value) if isinstance(value, list) else "",
)
def test_a_wrong_command_line_is_refused(arguments, said, tmp_path, monkeypatch) -> None:
    monkeypatch.chdir(tmp_path)
    done = tfstats_command(*arguments)
    assert done.code == 2
    assert said in done.err and "Traceback" not in done.err
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("error", "said"),
    [
        (MemoryError(), "memory of this machine"),
        (OSError(28, "No space left on device"), "No space left on device"),
        (PermissionError(13, "Permission denied", "results"), "Permission denied: 'results'"),
    ],
    ids=["memory", "disk", "permission"],
)
def test_what_the_machine_lacks_is_three(error, said, study, monkeypatch) -> None:
    ending_with(error, monkeypatch)
    done = tfstats_command("run", study / "plan.toml", "--out", study / "results")
    assert done.code == 3
    assert said in done.err and "Traceback" not in done.err


def test_a_fault_is_one_and_shows_where(study, monkeypatch) -> None:
    ending_with(ZeroDivisionError("division by zero"), monkeypatch)
    done = tfstats_command("run", study / "plan.toml", "--out", study / "results")
    assert done.code == 1
    assert "Traceback" in done.err and "ZeroDivisionError" in done.err
    assert "a fault of the program, not of your data" in done.err


@pytest.mark.skipif(not hasattr(os, "getuid") or os.getuid() == 0, reason="nothing is read-only to this user")
def test_a_place_without_permission_is_three(study: Path) -> None:
    locked = study / "locked"
    locked.mkdir(mode=0o500)
    done = tfstats_command("run", study / "plan.toml", "--out", locked / "results")
    assert done.code == 3


def test_an_interruption_before_anything_is_kept(study, monkeypatch) -> None:
    ending_with(KeyboardInterrupt(), monkeypatch)
    done = tfstats_command("run", study / "plan.toml", "--out", study / "results")
    assert done.code == 130
    assert done.err.strip() == "Interrupted. Nothing was finished yet."


def test_an_interruption_names_what_it_leaves(study, monkeypatch) -> None:
    (study / "results.unfinished").mkdir()
    ending_with(KeyboardInterrupt(), monkeypatch)
    done = tfstats_command("run", study / "plan.toml", "--out", study / "results")
    assert done.code == 130
    assert f"{study / 'results.unfinished'} keeps what is finished; the same command takes it up again" in done.err


def test_an_interrupted_demo_names_the_command_that_goes_on(tmp_path, monkeypatch) -> None:
    def written(folder: Path) -> Path:
        (folder / "results.unfinished").mkdir(parents=True)
        return folder / "plan.toml"

    monkeypatch.setattr("tfstats.command_line.demo_study.write_demo_study", written)
    ending_with(KeyboardInterrupt(), monkeypatch)
    done = tfstats_command("demo", tmp_path / "demo")
    assert done.code == 130
    plan, out = tmp_path / "demo" / "plan.toml", tmp_path / "demo" / "results"
    assert f"tfstats run {plan} --out {out} takes it up again" in done.err


@pytest.mark.skipif(sys.platform == "win32", reason="a signal of this kind cannot be sent to one process on Windows")
def test_control_c_in_a_real_run_and_the_same_command_again(study: Path) -> None:
    command = [sys.executable, "-m", "tfstats", "run", str(study / "plan.toml"), "--out", str(study / "results")]
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(PACKAGE_ABOVE), os.environ.get("PYTHONPATH", "")])}
    # While the report is drawn at the latest, which takes seconds.
    process = subprocess.Popen(
        command, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, encoding="utf-8"
    )
    first = study / "results.unfinished" / "contrasts" / "recalled_against_missed" / "result.npz"
    patience = time.monotonic() + 300
    while not first.is_file() and process.poll() is None and time.monotonic() < patience:
        time.sleep(0.02)
    process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=300)
    assert process.returncode == 130
    assert f"{study / 'results.unfinished'} keeps what is finished" in err and "Traceback" not in err
    assert first.is_file() and not (study / "results").exists()
    kept = first.read_bytes()
    again = subprocess.run(command, env=environment, capture_output=True, text=True, encoding="utf-8")
    assert again.returncode == 0, again.stderr
    assert "testing recalled against missed" not in again.stderr
    assert (study / "results" / "contrasts" / "recalled_against_missed" / "result.npz").read_bytes() == kept
    assert not (study / "results.unfinished").exists()
