"""What the documents say is what the program does: commands, plans, snippets, columns, help, and the map of the rooms."""

from __future__ import annotations

import contextlib
import io
import re
import shutil
import subprocess
import tomllib
import typing
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import scipy.io
from click.testing import CliRunner
from pydantic import BaseModel

import tfstats as tfs
from tfstats.command_line.demo_study import write_demo_study
from tfstats.command_line.entry import command
from tfstats.contrasts import DESIGNS
from tfstats.corrections import CORRECTIONS
from tfstats.findings.band_tables import BAND_COLUMNS
from tfstats.findings.cluster_tables import CLUSTER_COLUMNS
from tfstats.foundations.units import UNITS
from tfstats.normalization.baseline_choice import BASELINE_MEANS, ORDERS, REFERENCES
from tfstats.plan_file.tables import PlanTables
from tfstats.power_files import FORMATS

REPOSITORY = Path(__file__).resolve().parents[1]
README = (REPOSITORY / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (REPOSITORY / "DEVELOPERS.md").read_text(encoding="utf-8")


def blocks(text: str, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```$", text, flags=re.MULTILINE | re.DOTALL)


def section(title: str, text: str = README) -> str:
    found = re.search(rf"^## {re.escape(title)}\n(.*?)(?=^## |\Z)", text, flags=re.MULTILINE | re.DOTALL)
    assert found, f"no section {title}"
    return found.group(1)


def code_words(text: str) -> set[str]:
    """Everything in backticks, cut into its words."""
    spans = re.findall(r"`([^`]+)`", re.sub(r"^```.*?^```$", "", text, flags=re.MULTILINE | re.DOTALL))
    return {word for span in spans for word in re.findall(r"[A-Za-z_][A-Za-z0-9_.\[\]]*", span)} | set(spans)


def first_cells(text: str) -> list[str]:
    rows = re.findall(r"^\| (`[^|]+) \|", text, flags=re.MULTILINE)
    return [name for row in rows for name in re.findall(r"`([^`]+)`", row)]


# -- the two commands ----------------------------------------------------------------------------------------------------


def test_two_commands_and_the_same_two_on_windows() -> None:
    commands = section("Two commands")
    posix, windows = (
        [block.strip() for block in blocks(commands, language)] for language in ("sh", "bat")
    )
    assert len(posix) == 2
    assert posix[0].endswith("/bin/tfstats demo demo")
    assert posix[1].endswith("/bin/python -m pytest")
    assert all("\n" not in line for line in posix), "one line each, so that it can be pasted"
    translated = [re.sub(r"(\.venv[a-z-]*)/bin/", r"\1\\Scripts\\", line).replace("python3 ", "py ") for line in posix]
    assert windows == translated
    assert "python3-venv" in commands


def test_the_commands_name_extras_and_a_script_that_exist() -> None:
    project = tomllib.loads((REPOSITORY / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    for extra in re.findall(r'"\.\[([a-z]+)\]"', README):
        assert extra in project["optional-dependencies"]
    assert project["scripts"]["tfstats"] == "tfstats.command_line.entry:main"


def test_the_supported_python_is_that_of_the_package() -> None:
    project = tomllib.loads((REPOSITORY / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    low, above = re.fullmatch(r">=3\.(\d+),<3\.(\d+)", project["requires-python"]).groups()
    assert f"Python 3.{low} to 3.{int(above) - 1}" in README


CI = REPOSITORY / ".ci" / "run"


def test_the_check_takes_its_command_from_the_readme() -> None:
    bash = shutil.which("bash")
    if bash is None or not CI.is_file():
        pytest.skip("no bash here, or the checks are not part of this copy")
    done = subprocess.run([bash, str(CI), "--show-command"], capture_output=True, text=True, encoding="utf-8")
    assert done.returncode == 0, done.stderr
    assert done.stdout.strip() == blocks(section("Two commands"), "sh")[1].strip()


# -- the plan ------------------------------------------------------------------------------------------------------------


def plan_text() -> str:
    (text,) = blocks(README, "toml")
    return text


def test_the_plan_is_parsed(tmp_path: Path) -> None:
    (tmp_path / "plan.toml").write_text(plan_text(), encoding="utf-8")
    plan = tfs.AnalysisPlan.read(tmp_path / "plan.toml")
    assert [call.name for call in plan.contrasts] == ["recalled against missed", "recalled against baseline"]
    assert plan.baseline == tfs.Baseline((-0.5, -0.2))


def write_matlab_study(folder: Path) -> None:
    """The files that the plan describes: trials last, ms, structs, codes, one person short of a channel and of trials."""
    rng = np.random.default_rng(11)
    channels, hertz, milliseconds = ["F3", "Fz", "F4", "C3", "C4", "Pz"], np.geomspace(3, 30, 8), np.arange(-700, 1300, 50.0)
    (folder / "power").mkdir()
    (folder / "behaviour").mkdir()
    for number in range(1, 9):
        tables = []
        for run in (1, 2):
            count = 12
            memory = (np.arange(count) % 2).astype(int) if number != 8 else np.ones(count, int)
            there = channels[:-1] if number == 3 else channels
            power = rng.exponential(size=(len(there), hertz.size, milliseconds.size, count)) / hertz[:, None, None]
            theta = (hertz >= 4) & (hertz <= 8)
            after = (milliseconds >= 200) & (milliseconds <= 600)
            power[np.ix_(range(3), theta, after, memory == 1)] *= 1.8
            held = {"pow": power, "hertz": hertz, "ms": milliseconds, "electrode": np.array(there, dtype=object)}
            scipy.io.savemat(folder / "power" / f"S{number}_run{run}.mat", {"dat": held})
            tables.append(
                pd.DataFrame({"memory": memory, "artefact": 0, "reaction_time": rng.uniform(0.4, 1.9, size=count)})
            )
        table = pd.concat(tables)
        table.iloc[0, 1] = 1
        table.iloc[1, 2] = 3.0
        table.to_csv(folder / "behaviour" / f"S{number}.tsv", sep="\t", index=False)
    rows = pd.DataFrame({"participant_id": [f"sub-{number}" for number in range(1, 9)]})
    rows.to_csv(folder / "participants.tsv", sep="\t", index=False)
    at = {"F3": (-45, 54), "Fz": (0, 58), "F4": (45, 54), "C3": (-58, 0), "C4": (58, 0), "Pz": (0, -58)}
    places = pd.DataFrame(
        [(name, x, y, float(np.sqrt(90.0**2 - x**2 - y**2))) for name, (x, y) in at.items()], columns=["name", "x", "y", "z"]
    )
    places.to_csv(folder / "electrodes.tsv", sep="\t", index=False)
    (folder / "plan.toml").write_text(plan_text(), encoding="utf-8")


def test_the_plan_runs_on_the_files_that_it_describes(tmp_path: Path) -> None:
    write_matlab_study(tmp_path)
    checked = CliRunner().invoke(command, ["check", str(tmp_path / "plan.toml")], catch_exceptions=False)
    assert checked.exit_code == 0
    assert "lamp sequences: nothing is wrong." in checked.output
    assert "7 subjects" in checked.output  # the eighth never missed a sequence
    done = CliRunner().invoke(
        command, ["run", str(tmp_path / "plan.toml"), "--out", str(tmp_path / "results"), "--quiet"], catch_exceptions=False
    )
    assert done.exit_code == 0
    study = tfs.read_results(tmp_path / "results")
    result = study.contrasts["recalled against missed"]
    assert "Pz" not in result.channels  # keep_common
    assert study.trial_counts.to_numpy().sum() == 7 * 22  # two trials each are not kept
    assert result.times[0] == 0.0 and result.times[-1] == 1.2  # ms were read as s
    row = study.bands.iloc[0]
    assert row["low"] < 10 * np.log10(1.8) < row["high"]


def models(kind: object) -> set[type[BaseModel]]:
    found = {kind} if isinstance(kind, type) and issubclass(kind, BaseModel) else set()
    for inner in typing.get_args(kind):
        found |= models(inner)
    return found


def test_every_key_of_the_plan_is_explained() -> None:
    said = code_words(section("With files of your own"))
    for table, field in PlanTables.model_fields.items():
        assert f"[{table}]" in said or f"[[{table}]]" in said, table
        for model in models(field.annotation):
            assert set(model.model_fields) <= said | {"test"}, table
    baseline = set(tfs.Baseline.__dataclass_fields__) & {"window", "unit", "reference", "order", "within", "baseline_mean"}
    assert baseline | {"reference_condition"} <= said


def test_every_option_is_named() -> None:
    text = section("With files of your own")
    for option in (*UNITS, *REFERENCES, *ORDERS, *BASELINE_MEANS, *CORRECTIONS):
        assert f'"{option}"' in text, option
    for entry in FORMATS:
        assert any(ending in text for ending in entry.endings) or entry.words in text, entry.words


def test_every_design_has_its_line() -> None:
    assert first_cells(section("Designs")) == list(DESIGNS)


# -- the snippets --------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def executed(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict]:
    """Every Python snippet of the README, one after the other, in a folder with a small demo."""
    folder = tmp_path_factory.mktemp("readme")
    write_demo_study(folder, subjects=7, permutations=128)
    names: dict = {}
    with contextlib.chdir(folder), contextlib.redirect_stdout(io.StringIO()) as printed:
        for block in blocks(README, "python"):
            exec(compile(block, "README.md", "exec"), names)
    names["printed"] = printed.getvalue()
    return folder, names


def test_the_snippets_run_and_find_what_they_say(executed: tuple[Path, dict]) -> None:
    folder, names = executed
    assert names["result"].mask.any()
    assert names["one"].contrast.unit_kind == "trial"
    assert list(names["study"].contrasts) == list(names["again"].contrasts)
    assert "recalled - missed" in names["printed"]
    assert (folder / "recalled_against_missed" / "result.npz").is_file()


def test_the_results_folder_is_as_listed(executed: tuple[Path, dict]) -> None:
    results = executed[0] / "results"
    (listing,) = [block for block in blocks(section("What comes out"), "") if block.startswith("results/")]
    said = set(re.findall(r"[\w]+\.(?:html|md|toml|json|csv|npz)", listing))
    there = {path.name for path in results.rglob("*") if path.is_file() and path.parent.name != "figures"}
    assert there == said
    folders = set(re.findall(r"^  (\w+)/", listing, flags=re.MULTILINE))
    assert {path.name for path in results.iterdir() if path.is_dir()} == folders
    assert {path.suffix for path in (results / "figures").iterdir()} == {".pdf", ".png"}


def test_the_arrays_and_small_tables_are_as_listed(executed: tuple[Path, dict]) -> None:
    said = code_words(section("What comes out"))
    results = executed[0] / "results"
    contrast = results / "contrasts" / "recalled_against_missed"
    with np.load(contrast / "maps.npz") as maps:
        assert set(maps.files) <= said
    for table in (contrast / "subject_values.csv", results / "tables" / "trial_counts.csv"):
        assert set(pd.read_csv(table).columns) <= said


def test_every_column_of_the_tables_is_explained(executed: tuple[Path, dict]) -> None:
    clusters, bands = section("What comes out").split("Each row of `bands.csv`")
    tables = executed[0] / "results" / "tables"
    assert first_cells(clusters) == list(pd.read_csv(tables / "clusters.csv").columns)
    assert set(CLUSTER_COLUMNS) <= set(first_cells(clusters))
    assert first_cells(bands) == list(pd.read_csv(tables / "bands.csv").columns) == list(BAND_COLUMNS)


# -- the command reference -----------------------------------------------------------------------------------------------


def help_text(*arguments: str) -> str:
    done = CliRunner().invoke(command, [*arguments, "--help"], prog_name="tfstats", terminal_width=100, max_content_width=100)
    assert done.exit_code == 0
    return done.output


def every_help_text() -> list[str]:
    texts = [help_text(), *(help_text(verb) for verb in sorted(command.commands))]
    return ["\n".join(line.rstrip() for line in text.strip().splitlines()) for text in texts]


def write_reference() -> None:
    """Put the help texts into README.md."""
    fresh = "\n" + "\n\n".join(f"```\n{text}\n```" for text in every_help_text()) + "\n\n"
    ending = re.search(r"^Exit codes: .*?(?=^## |\Z)", section("Command reference"), flags=re.MULTILINE | re.DOTALL)
    text = README.replace(section("Command reference"), fresh + (ending.group(0) if ending else ""))
    (REPOSITORY / "README.md").write_text(text, encoding="utf-8", newline="\n")


def test_the_command_reference_is_the_help() -> None:
    """Word by word; where lines break is left to the library that prints them."""
    shown = [block.split() for block in blocks(section("Command reference"), "")]
    drifted = "the reference has drifted from --help: python -m tests.test_documents writes it anew"
    assert shown == [text.split() for text in every_help_text()], drifted


# -- both documents ------------------------------------------------------------------------------------------------------


def test_files_that_are_mentioned_exist() -> None:
    for text in (README, DEVELOPERS):
        for name in re.findall(r"`((?:tfstats|tests|worked_examples|\.ci)/[\w./]*)`", text):
            assert (REPOSITORY / name).exists(), name
    assert (REPOSITORY / "worked_examples" / "01_paired_contrast").is_dir()


def test_the_map_shows_every_room_in_order() -> None:
    (drawn,) = [block for block in blocks(DEVELOPERS, "") if block.startswith("tfstats/")]
    named = re.findall(r"^  (\w+)(?:/|\.py)", drawn, flags=re.MULTILINE)
    from tests.test_structure import LAYERS, rooms

    assert named == [name for name in LAYERS if name in rooms() - {"__main__"}]


def test_every_dependency_has_its_reason() -> None:
    project = tomllib.loads((REPOSITORY / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = {*project["dependencies"], *(name for extra in project["optional-dependencies"].values() for name in extra)}
    names = {re.match(r"[A-Za-z0-9_-]+", requirement).group(0) for requirement in wanted}
    assert names <= set(first_cells(section("Dependencies", DEVELOPERS)))


def test_the_commands_of_the_developers_guide_name_files_that_exist() -> None:
    for block in blocks(DEVELOPERS, "sh"):
        for name in re.findall(r"(?:^|\s)((?:tests|worked_examples|\.ci)(?:/[\w.]+)*)", block):
            assert (REPOSITORY / name).exists(), name


if __name__ == "__main__":
    write_reference()
