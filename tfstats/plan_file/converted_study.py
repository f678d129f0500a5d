"""A study's power written once in HDF5, which is read in blocks, with a plan for the written files."""

from __future__ import annotations

import shutil
import tomllib
from collections.abc import Callable
from os import PathLike
from pathlib import Path
from typing import Any

from tfstats.foundations.errors import Problems, refusal
from tfstats.foundations.safe_writing import finish_folder, unfinished_path
from tfstats.plan_file.plan import AnalysisPlan
from tfstats.plan_file.study_stages import planned_powers, study_opened
from tfstats.plan_file.toml_text import toml_text
from tfstats.power_files import PowerFiles, read_participants, write_power

__all__ = ["convert_study"]

PLAN = "plan.toml"
MARK = "conversion.txt"
"""Marks an unfinished folder as one that may be replaced."""

_TABLES = (("participants", "file"), ("channels", "electrodes"), ("channels", "pairs"), ("channels", "regions"))


def convert_study(
    plan: AnalysisPlan | str | PathLike[str],
    folder: str | PathLike[str],
    *,
    progress: Callable[[str, int, int | None], object] | None = None,
) -> Path:
    """Write the power of a planned study once in the layout that reads in blocks.

    For formats that are slow to read (MATLAB version 5, compressed archives) or studies that are run many times.  What
    `[input]` asks for is done while writing: names, axes, contents, time unit, trial tables, recoding, trials kept.

    Parameters
    ----------
    plan : AnalysisPlan or path of a plan file
    folder : path
        A new folder.  It gets `power/S{subject}.h5`, copies of the plan's tables and `plan.toml`, which asks for the
        same study from these files.  Subjects that the plan excludes are left out.
    progress : callable(stage, done, total), optional

    Returns
    -------
    Path
        Of the new plan.  Its results are those of the old one, with the same bits in the maps.

    Raises
    ------
    InputError
        A folder that exists, and all that is wrong with the plan and the power of any subject; then nothing is left.

    Notes
    -----
    Time is that of reading and writing the power once; memory is one subject's in formats that cannot be read in parts,
    one block otherwise.  The folder appears under its name only when whole.
    """
    plan = plan if isinstance(plan, AnalysisPlan) else AnalysisPlan.read(plan)
    final = Path(folder)
    if final.exists():
        raise refusal(f"convert, --to {final}", "a new folder", "one that exists", "choose another name")
    if plan.input.kind != "trials":
        raise refusal(
            plan.where("input", "kind"), 'kind = "trials" to convert', f'"{plan.input.kind}"', "run the plan as it is"
        )
    study_opened(plan)
    powers = planned_powers(plan, grouped=False)
    excluded = {str(name) for name in plan.subjects.exclude}
    subjects = [name for name in powers.subjects if name not in excluded]
    unfinished = _begun(final)
    try:
        _write_all(powers, subjects, unfinished, progress or (lambda stage, done, total: None))
        tables = _copied_tables(plan, unfinished)
        (unfinished / PLAN).write_text(_new_plan(plan, tables), encoding="utf-8", newline="\n")
        (unfinished / MARK).unlink()
    except BaseException:
        shutil.rmtree(unfinished, ignore_errors=True)
        raise
    finish_folder(final, replace=False)
    return final / PLAN


def _begun(final: Path) -> Path:
    unfinished = unfinished_path(final)
    if unfinished.exists():
        if not (unfinished / MARK).is_file():
            raise refusal(
                f"convert, --to {final}", f"no {unfinished.name} beside it", "one that no conversion left",
                "move it away, or choose another name",
            )  # fmt: skip
        shutil.rmtree(unfinished)
    (unfinished / "power").mkdir(parents=True)
    (unfinished / MARK).write_text("An unfinished conversion, which may be deleted.\n", encoding="utf-8")
    return unfinished


def _write_all(
    powers: PowerFiles, subjects: list[str], folder: Path, tell: Callable[[str, int, int | None], object]
) -> None:
    problems = Problems()
    for number, subject in enumerate(subjects, 1):
        with problems.gathering():
            # After a mistake the other subjects are still looked at, so that all mistakes stand in one list.
            power = powers.of(subject)
            if problems.found:
                power.check()
            else:
                write_power(folder / "power" / f"S{subject}.h5", power)
        tell("converting", number, len(subjects))
    problems.raise_if_any()


def _copied_tables(plan: AnalysisPlan, folder: Path) -> dict[tuple[str, str], str]:
    """Each table of the plan under a name that says what it is: (table of the plan, key) to name."""
    copied = {}
    for table, key in _TABLES:
        place = getattr(getattr(plan, table), key) if getattr(plan, table) is not None else None
        if place is not None:
            source = plan.place(place)
            name = f"{table if key == 'file' else key}{source.suffix.lower()}"
            shutil.copyfile(source, folder / name)
            copied[table, key] = name
    return copied


def _new_plan(plan: AnalysisPlan, tables: dict[tuple[str, str], str]) -> str:
    data: dict[str, Any] = tomllib.loads(plan.text.removeprefix("\ufeff"))
    data["input"] = {"files": "power/S{subject}.h5"}
    for (table, key), name in tables.items():
        data[table][key] = name
    excluded = [str(name) for name in data.get("subjects", {}).get("exclude", [])]
    if excluded:
        # Those without a row in the table are unknown to the new study, since their files are not there.
        rows = _rows_of(plan)
        data["subjects"]["exclude"] = [name for name in excluded if name in rows]
    head = (
        f"# The study of {plan.path.name}, its power converted: names, axes, units, recoding and the choice of trials\n"
        "# that stood under [input] are in the files already.\n\n"
    )
    return head + toml_text(data)


def _rows_of(plan: AnalysisPlan) -> set[str]:
    if plan.participants is None:
        return set()
    table = read_participants(
        plan.place(plan.participants.file), column=plan.participants.column, subject=plan.participants.subject
    )
    return set(table["participant_id"].tolist())
