"""Every kind of bad input, through the shell: exit code 2, the mistakes by name, no traceback and no folder."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tests.command_line.conftest import CHANNELS, FREQUENCIES, SUBJECTS, behaviour, trial_power

Respelled = Callable[[str, str], None]
Spoil = Callable[[Path, Respelled], None]


def stored_values(study: Path, subject: str = "03") -> np.ndarray:
    with np.load(study / "power" / f"S{subject}.npz") as stored:
        return np.array(stored["power"])


def restored(study: Path, subject: str = "03", **changed: object) -> None:
    """Write a power file again with some of its arrays replaced, whatever tfstats would say to them."""
    path = study / "power" / f"S{subject}.npz"
    with np.load(path) as stored:
        parts = {name: stored[name] for name in stored.files}
    np.savez(path, **{**parts, **changed})


def in_all(change: Callable[[np.ndarray], np.ndarray]) -> Spoil:
    def spoil(study: Path, respelled: Respelled) -> None:
        for subject in SUBJECTS:
            restored(study, subject, power=change(stored_values(study, subject)))

    return spoil


def in_one(change: Callable[[np.ndarray], np.ndarray]) -> Spoil:
    return lambda study, respelled: restored(study, power=change(stored_values(study)))


def first_is(value: float) -> Callable[[np.ndarray], np.ndarray]:
    def change(values: np.ndarray) -> np.ndarray:
        values[0, 0, 0, 0] = value
        return values

    return change


def without_baseline(values: np.ndarray) -> np.ndarray:
    values[..., :5] = np.nan
    return values


def without_a_channel(study: Path, respelled: Respelled) -> None:
    restored(study, power=stored_values(study)[:, :2], channels=np.array(CHANNELS[:2]))


def only_recalled(study: Path, respelled: Respelled) -> None:
    pd.DataFrame({"memory": ["recalled"] * 12}).to_csv(study / "behaviour" / "S03.tsv", sep="\t", index=False)


def another_row(name: str) -> Spoil:
    def spoil(study: Path, respelled: Respelled) -> None:
        with (study / "participants.tsv").open("a", encoding="utf-8") as table:
            table.write(f"{name}\t44\n")

    return spoil


def file_without_row(study: Path, respelled: Respelled) -> None:
    tfs.write_power(study / "power" / "S08.npz", trial_power("08"))
    behaviour().to_csv(study / "behaviour" / "S08.tsv", sep="\t", index=False)


def first_subjects(number: int) -> Spoil:
    def spoil(study: Path, respelled: Respelled) -> None:
        for subject in SUBJECTS[number:]:
            (study / "power" / f"S{subject}.npz").unlink()
        rows = "".join(f"{subject}\t30\n" for subject in SUBJECTS[:number])
        (study / "participants.tsv").write_text("participant_id\tage\n" + rows, encoding="utf-8")

    return spoil


def truncated(study: Path, respelled: Respelled) -> None:
    path = study / "power" / "S03.npz"
    whole = path.read_bytes()
    path.write_bytes(whole[: len(whole) // 2])


def pickled(name: str) -> Spoil:
    return lambda study, respelled: restored(study, **{name: np.array([{"a": 1}] * 12, dtype=object)})


# name: how the study is spoilt, and what each refusal must contain, wherever it stands in the list
CASES: dict[str, tuple[Spoil, list[str]]] = {
    "zero power": (in_one(first_is(0.0)), ["subject 03", "exactly 0", "set what is not known to NaN"]),
    "negative power": (in_one(first_is(-1.0)), ["subject 03", "S03.npz", "1 negative values"]),
    "decibels as power": (in_one(lambda values: 10 * np.log10(values)), ["subject 03", 'contents = "decibel"']),
    "NaN everywhere": (in_one(lambda values: np.full_like(values, np.nan)), ["subject 03", "NaN everywhere"]),
    "unequal axes": (
        lambda study, respelled: restored(study, frequencies=np.array(FREQUENCIES) + 1),
        ["S03.npz, frequencies", "4 from 5 to 11 Hz"],
    ),
    "missing condition": (only_recalled, ['S03.npz, conditions: expected trials of "missed"']),
    "missing channel": (without_a_channel, ['S03.npz, channels: expected "F4"', 'missing = "keep_common"']),
    "duplicate subjects": (another_row("03"), ["participants.tsv", '"03" more than once']),
    "window outside": (
        lambda study, respelled: respelled("[-0.5, -0.2]", "[-2.0, -1.5]"),
        ["baseline window", "inside the times -0.5 to 0.8 s"],
    ),
    "baseline without a finite sample": (in_all(without_baseline), ["baseline window", "none at any frequency"]),
    "row without a file": (another_row("99"), ['none for "99"', "exclude"]),
    "file lost": (
        lambda study, respelled: (study / "power" / "S03.npz").unlink(),
        ["participants: expected a power file for each row", 'none for "03"'],
    ),
    "file without a row": (file_without_row, ["participants: expected a row for each power file", 'none for "08"']),
    "one subject": (first_subjects(1), ['contrast "missed changes"', "at least two subjects", "trialwise"]),
    "too few subjects": (
        first_subjects(4),
        ['contrast "recalled against missed"', 'contrast "missed changes"', "at least 6 subjects are needed"],
    ),
    "constant data": (in_all(np.ones_like), ["expected compared values that vary"]),
    "trial table too short": (
        lambda study, respelled: behaviour(11).to_csv(study / "behaviour" / "S03.tsv", sep="\t", index=False),
        ["subject 03, trial_table", "12 trials", "got 11 rows"],
    ),
    "trial table lost": (
        lambda study, respelled: (study / "behaviour" / "S03.tsv").unlink(),
        ["S03.npz, trial_table", "nothing there"],
    ),
    "truncated file": (truncated, ["subject 03", "S03.npz", "cannot be read"]),
    "no power file": (
        lambda study, respelled: (study / "power" / "S03.npz").write_bytes(b"nothing of the kind"),
        ["subject 03", "S03.npz", "cannot be read"],
    ),
    "unknown key": (
        lambda study, respelled: respelled("permutations = 64", "permutation = 64"),
        ["plan.toml, line 3, study, permutation", 'did you mean "permutations"?'],
    ),
    "pickled labels": (pickled("trials.number"), ["subject 03", "trials.number", "pickled"]),
    "pickled power": (pickled("power"), ["subject 03", "S03.npz, power", "pickled"]),
}


def refused(study: Path, command: Callable[..., tuple[int, str, str]], *arguments: object) -> str:
    before = set(study.rglob("*"))
    code, out, err = command(*arguments)
    assert code == 2
    assert out == ""
    assert "tfstats: refused" in err and "Traceback" not in err
    # Averages of sound subjects may be kept for the next attempt; they are no results.
    assert not [path for path in set(study.rglob("*")) - before if "plan.cache" not in path.parts]
    return err


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("verb", ["check", "run"])
def test_bad_input_is_refused_by_name_and_leaves_no_folder(name, verb, study, respelled, tfstats_command) -> None:
    spoil, fragments = CASES[name]
    spoil(study, respelled)
    out = ["--out", study / "results"] if verb == "run" else []
    err = refused(study, tfstats_command, verb, study / "plan.toml", *out)
    for fragment in fragments:
        assert fragment in err
    assert not list(study.glob("results*"))


def spoil_the_data(study: Path, respelled: Respelled) -> list[str]:
    in_one(first_is(-1.0))(study, respelled)
    restored(study, "05", power=stored_values(study, "05")[:, :2], channels=np.array(CHANNELS[:2]))
    (study / "power" / "S06.npz").write_bytes(b"nothing of the kind")
    (study / "electrodes.tsv").unlink()
    another_row("99")(study, respelled)
    return [
        "electrodes.tsv: expected a table",
        'none for "99"',
        "subject 03",
        "S05.npz, channels",
        "subject 06",
    ]


@pytest.mark.parametrize("verb", ["check", "run"])
def test_all_mistakes_of_a_study_come_together(verb, study, respelled, tfstats_command) -> None:
    expected = spoil_the_data(study, respelled)
    out = ["--out", study / "results"] if verb == "run" else []
    err = refused(study, tfstats_command, verb, study / "plan.toml", *out)
    assert f"refused, {len(expected)} problems" in err
    for fragment in expected:
        assert err.count(fragment) == 1


def test_check_lists_the_mistakes_of_plan_and_data_together(study, respelled, tfstats_command) -> None:
    of_data = spoil_the_data(study, respelled)
    respelled("permutations = 64", "permutations = 1")
    respelled('[[band]]\nname = "theta"\nfrequencies = [4, 8]', '[[band]]\nname = "theta"\nfrequency = [4, 8]')
    err = refused(study, tfstats_command, "check", study / "plan.toml")
    for fragment in [*of_data, "study, permutations", 'band "theta", frequency']:
        assert fragment in err


def test_where_the_data_part_of_the_plan_is_wrong_no_data_are_blamed(study, respelled, tfstats_command) -> None:
    spoil_the_data(study, respelled)
    respelled('trial_table = "behaviour/S{subject}.tsv"', 'time_unit = 5')
    err = refused(study, tfstats_command, "check", study / "plan.toml")
    assert "input, time_unit" in err
    assert "subject 0" not in err


def test_run_reads_no_data_for_a_plan_that_is_wrong(study, respelled, tfstats_command) -> None:
    spoil_the_data(study, respelled)
    respelled("permutations = 64", "permutations = 1")
    err = refused(study, tfstats_command, "run", study / "plan.toml", "--out", study / "results")
    assert "study, permutations" in err and "subject 0" not in err


def test_every_listed_problem_stands_in_a_line_of_its_own(study, respelled, tfstats_command) -> None:
    spoil_the_data(study, respelled)
    err = refused(study, tfstats_command, "run", study / "plan.toml", "--out", study / "results", "--quiet")
    lines = err.splitlines()
    assert lines[0] == "tfstats: refused, 5 problems:"
    assert len(lines) == 6 and all(line.startswith("  - ") and line.endswith(".") for line in lines[1:])
