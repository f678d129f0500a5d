"""Several mistakes in the files and tables of a study, and in its plan, stand in one list."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from tests.command_line.tiny_study import tfstats_command
from tests.small_study import CHANNELS

Respelled = Callable[[str, str], None]


def restored(study: Path, subject: str, **changed: object) -> None:
    """Write a power file again with some of its arrays replaced, whatever tfstats would say to them."""
    path = study / "power" / f"S{subject}.npz"
    with np.load(path) as stored:
        parts = {name: stored[name] for name in stored.files}
    np.savez(path, **{**parts, **changed})


def stored_values(study: Path, subject: str) -> np.ndarray:
    with np.load(study / "power" / f"S{subject}.npz") as stored:
        return np.array(stored["power"])


@pytest.fixture
def five_mistakes(study: Path) -> list[str]:
    """Spoil five things of five kinds; what the refusal of each contains, and no other refusal does."""
    negative = stored_values(study, "03")
    negative[0, 0, 0, 0] = -1.0
    restored(study, "03", power=negative)
    restored(study, "05", power=stored_values(study, "05")[:, :2], channels=np.array(CHANNELS[:2]))
    (study / "power" / "S06.npz").write_bytes(b"nothing of the kind")
    (study / "electrodes.tsv").unlink()
    with (study / "participants.tsv").open("a", encoding="utf-8") as table:
        table.write("99\t44\n")
    return ["subject 03", "subject 05", "subject 06", "electrodes.tsv: expected a table", 'none for "99"']


def refused(*arguments: object) -> str:
    done = tfstats_command(*arguments)
    assert (done.code, done.out) == (2, "")
    assert "Traceback" not in done.err
    return str(done.err)


@pytest.mark.parametrize("verb", ["check", "run"])
def test_mistakes_in_files_and_tables_come_together(verb: str, study: Path, five_mistakes: list[str]) -> None:
    before = set(study.iterdir())
    err = refused(verb, study / "plan.toml", *(["--out", study / "results"] if verb == "run" else []))
    lines = err[err.index("tfstats: refused") :].splitlines()
    assert lines[0] == "tfstats: refused, 5 problems:"
    assert len(lines) == 6 and all(line.startswith("  - ") and line.endswith(".") for line in lines[1:])
    for fragment in five_mistakes:
        assert sum(fragment in line for line in lines) == 1
    # Averages of sound subjects may be kept for the next attempt; they are no results.
    assert set(study.iterdir()) - before <= {study / "plan.cache"}


def test_check_lists_those_of_the_plan_with_them(study: Path, respelled: Respelled, five_mistakes: list[str]) -> None:
    respelled("permutations = 64", "permutations = 1")
    respelled('name = "theta"\nfrequencies = [4, 8]', 'name = "theta"\nfrequency = [4, 8]')
    err = refused("check", study / "plan.toml")
    for fragment in [*five_mistakes, "plan.toml, line 3, study, permutations", 'band "theta", frequency']:
        assert fragment in err


def test_no_data_are_blamed_while_the_plan_does_not_say_how_to_read_them(
    study: Path, respelled: Respelled, five_mistakes: list[str]
) -> None:
    respelled('trial_table = "behaviour/S{subject}.tsv"', "time_unit = 5")
    err = refused("check", study / "plan.toml")
    assert "input, time_unit" in err
    assert not [fragment for fragment in five_mistakes if fragment in err]


def test_run_reads_no_data_for_a_plan_that_is_wrong(study: Path, respelled: Respelled, five_mistakes: list[str]) -> None:
    respelled("permutations = 64", "permutations = 1")
    err = refused("run", study / "plan.toml", "--out", study / "results")
    assert "study, permutations" in err
    assert not [fragment for fragment in five_mistakes if fragment in err]
