"""Folders and files as people have them: spaces, other alphabets, links, marks, other working directories, a bare machine."""

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import tfstats
from tests.command_line.tiny_study import PLAN, TinyStudy, tfstats_command

PACKAGE = Path(tfstats.__file__).resolve().parents[1]


@pytest.fixture
def study(tmp_path):
    return TinyStudy(tmp_path / "study")


def test_spaces_brackets_and_other_alphabets(tmp_path):
    study = TinyStudy(tmp_path / "Gedächtnis, Übung [1] 記憶", plan=PLAN.replace('"tiny"', '"Übung 記憶"'))
    done = tfstats_command("check", study.plan)
    assert (done.code, done.out.splitlines()[0]) == (0, "Übung 記憶: nothing is wrong.")


def test_braces_in_the_folder_would_be_words_of_the_pattern(tmp_path):
    study = TinyStudy(tmp_path / "{x}")
    done = tfstats_command("check", study.plan)
    assert done.code == 2
    assert done.err.endswith(
        f"  - {study.folder}: expected a folder without {{ }} * ? in its path, got one with them; rename the folder.\n"
    )


def test_marks_and_carriage_returns_of_spreadsheets(study):
    for name in ("plan.toml", "participants.tsv"):
        path = study.folder / name
        path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes().replace(b"\n", b"\r\n"))
    assert tfstats_command("check", study.plan).code == 0


def test_backslashes_in_the_plan(study):
    study.edit(('"power/S{subject}.npz"', r"'power\S{subject}.npz'"))
    assert tfstats_command("check", study.plan).code == 0


@pytest.mark.parametrize(("folder", "plan"), [(".", "study/plan.toml"), ("study", "plan.toml"), ("study/power", "../plan.toml")])
def test_paths_start_at_the_plan(study, tmp_path, monkeypatch, folder, plan):
    monkeypatch.chdir(tmp_path / folder)
    assert tfstats_command("check", plan).code == 0


def test_linked_files_and_folders(study, tmp_path):
    (tmp_path / "elsewhere").mkdir()
    shutil.move(study.folder / "power", tmp_path / "elsewhere" / "power")
    try:
        (study.folder / "power").symlink_to(tmp_path / "elsewhere" / "power", target_is_directory=True)
    except OSError:
        pytest.skip("this user may not make links here")
    assert tfstats_command("check", study.plan).code == 0


@pytest.mark.parametrize(
    ("place", "words"),
    [
        (".", "expected a new folder, got one that exists; choose another or pass --replace."),
        ("", "expected a new folder, got one that exists; choose another or pass --replace."),
        ("plan.toml", "expected a folder to replace, got a file; choose another name."),
        ("plan.toml/x", "expected a place in a folder, got one in the file "),
        (os.path.abspath(os.sep), "expected a new folder, got the root of a disk; choose a folder on it."),
    ],
)
def test_out_that_is_no_place(study, monkeypatch, place, words):
    monkeypatch.chdir(study.folder)
    done = tfstats_command("run", study.plan, "--out", place)
    assert done.code == 2
    assert words in done.err
    assert study.inside() == ["participants.tsv", "plan.toml", "power"]


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ("participant_id\tage\tage\n01\t1\t2\n", 'got "age" more than once; rename the columns'),
        ("participant_id\tage\n01\t1\t2\n02\n", "expected tab-separated text"),
        ("", "got an empty file; write the table again"),
        ("participant_id\tage\n", "expected at least one row, got none; add the subjects"),
        ("id\tage\n01\t1\n", 'expected a column "participant_id"'),
        ("participant_id\tage\nsub-01\t1\n", 'got none for "sub-01"'),
    ],
)
def test_participants_as_people_write_them(study, table, words):
    study.participants(table)
    done = tfstats_command("check", study.plan)
    assert done.code == 2
    assert words in done.err
    assert "(plan.toml, line 7, participants, file)." in done.err


def test_electrodes_and_pairs_of_other_channels(study):
    (study.folder / "e.tsv").write_text("name\tx\ty\tz\nFz\t0\t1\t0\n", encoding="utf-8")
    (study.folder / "p.tsv").write_text("first\tsecond\nFz\tF8\n", encoding="utf-8")
    plan = study.plan.read_text(encoding="utf-8")
    study.edit(('adjacency = "none"', 'electrodes = "e.tsv"'))
    done = tfstats_command("check", study.plan)
    assert done.err.endswith(
        "tfstats: refused:\n  - plan.toml, line 12, channels, electrodes: channels: expected a position for every channel, got "
        'none for "Pz"; add them to the table, or set adjacency = "none".\n'
    )
    study.plan.write_text(plan, encoding="utf-8")
    study.edit(('adjacency = "none"', 'adjacency = "pairs"\npairs = "p.tsv"'))
    done = tfstats_command("check", study.plan)
    assert done.err.endswith(
        'tfstats: refused:\n  - plan.toml, line 13, channels, pairs: channels: expected at least one pair among "Fz", "Pz", '
        'got pairs of "F8", "Fz"; use the spelling of the data.\n'
    )


def bare_environment(**more):
    """Neither home nor display nor locale; only what finds Python's own libraries."""
    kept = {name: os.environ[name] for name in ("SYSTEMROOT", "LD_LIBRARY_PATH") if name in os.environ}
    return {**kept, "LC_ALL": "C", "PATH": os.defpath, "PYTHONPATH": str(PACKAGE), **more}


@pytest.mark.parametrize("more", [{}, {"PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"}], ids=["C", "ascii"])
def test_locale_of_c_without_a_home(tmp_path, more):
    """Labels and paths that ASCII does not hold end no run, whatever the streams can show."""
    plan = PLAN.replace('"tiny"', '"Übung"').replace("recalled", "erinnert é").replace('"missed"', '"vergessen ß"')
    study = TinyStudy(tmp_path / "Übung", plan=plan)
    for name in study.names:
        study.write(name, memory=["erinnert é", "vergessen ß"] * 4)
    done = subprocess.run(
        [sys.executable, "-m", "tfstats", "check", str(study.plan)],
        env=bare_environment(**more), cwd=tmp_path, capture_output=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr.decode("utf-8", "replace")
    first = done.stdout.decode("utf-8").splitlines()[0]
    assert first == ("\\xdcbung: nothing is wrong." if more else "Übung: nothing is wrong.")
    # Refusals too.
    study.file("03").write_bytes(b"no file of power")
    done = subprocess.run(
        [sys.executable, "-m", "tfstats", "check", str(study.plan)],
        env=bare_environment(**more), cwd=tmp_path, capture_output=True, check=False,
    )  # fmt: skip
    assert done.returncode == 2
    assert b"expected a whole .npz file" in done.stderr
    assert b"Traceback" not in done.stderr


@pytest.mark.slow
@pytest.mark.skipif(os.name == "nt" or not shutil.which("su") or (hasattr(os, "geteuid") and os.geteuid() != 0),
                    reason="needs the right to become another user")  # fmt: skip
def test_ordinary_user_without_home_or_write_access_to_the_package(tmp_path):
    """The whole run by somebody who may write nowhere but in one folder."""
    place = Path("/tmp") / f"tfstats-ordinary-user-{os.getpid()}"
    study = TinyStudy(place / "study")
    try:
        subprocess.run(["chown", "-R", "nobody", str(place)], check=True)
        readable = subprocess.run(
            ["su", "nobody", "-s", "/bin/sh", "-c", f"test -x '{sys.executable}' && test -r '{PACKAGE}/tfstats/__init__.py'"],
            check=False,
        )  # fmt: skip
        if readable.returncode != 0:
            pytest.skip("another user may not read this installation")
        command = (
            f"cd / && env -i LC_ALL=C PATH=/usr/bin:/bin PYTHONPATH='{PACKAGE}' PYTHONDONTWRITEBYTECODE=1 '{sys.executable}' "
            f"-m tfstats run '{study.plan}' --out '{study.folder}/results'"
        )
        done = subprocess.run(["su", "nobody", "-s", "/bin/sh", "-c", command], capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr
        assert (study.folder / "results" / "report.html").is_file()
    finally:
        shutil.rmtree(place, ignore_errors=True)
