"""The results folder: everything a study hands over, written once and read back as the same objects."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

import pandas as pd

from tfstats.foundations.errors import InputError, Problems, listed
from tfstats.foundations.safe_writing import UNFINISHED, file_names, written_whole
from tfstats.reporting import folder_tables
from tfstats.reporting.study_results import StudyResults
from tfstats.results import ContrastResult

__all__ = ["CONTENTS_FILE", "contrast_folders", "read_results", "write_results"]

FORMAT = "tfstats results 1"
CONTENTS_FILE = "contents.json"
SAVED_CONTRAST = "result.npz"

Progress = Callable[[str], None]


def contrast_folders(names: list[str] | tuple[str, ...], folder: Path) -> dict[str, Path]:
    """Where each contrast is saved inside a results folder; names that would share a folder are refused."""
    return {name: folder / "contrasts" / short for name, short in file_names(list(names), "contrast names").items()}


def write_results(
    study: StudyResults, folder: str | Path, *, figures: bool = True, progress: Progress | None = None
) -> Path:
    """Write a study as a results folder: report, methods, tables, contrasts and figures.

    Writes into the folder it is given (made when absent); the caller renames it once it is whole.  Contrasts that are
    saved there already are not written again.

    Parameters
    ----------
    study : StudyResults
    folder : path
    figures : bool
        False: no files under figures/; the report has its own copies all the same.
    progress : callable, optional
        Called with a few words before each step.

    Returns
    -------
    Path
        Of report.html.

    Raises
    ------
    InputError
        A study without contrasts and bands, or contrast names that would share a folder.

    Notes
    -----
    No randomness: the same study gives the same bytes on the same versions.  Nearly all of the
    time goes into figures: about three times as much with their files as without.
    """
    folder = Path(folder)
    tell = progress or (lambda _: None)
    if not study.contrasts and study.bands is None:
        raise InputError(
            "write_results, study: expected at least one contrast or a band table, got neither; test something first."
        )
    places = contrast_folders(list(study.contrasts), folder)
    folder.mkdir(parents=True, exist_ok=True)
    for name, place in places.items():
        if not (place / SAVED_CONTRAST).is_file():
            tell(f"saving {name}")
            study.contrasts[name].save(place)
    tell("writing tables")
    _write_tables(study, folder / "tables")
    _write_text(folder / "provenance.json", _json_text(dict(study.provenance)))
    if study.plan_text is not None:
        _write_text(folder / "plan.toml", study.plan_text)
    # matplotlib and jinja2 are slow to import, and reading a folder needs neither.
    from tfstats.reporting.report_pages import write_report

    report = write_report(study, folder, figure_files=figures, progress=tell)
    # Last, since its presence says that the folder is whole.
    _write_text(folder / CONTENTS_FILE, _json_text(_contents(study)))
    return report


def _contents(study: StudyResults) -> dict[str, Any]:
    """What the other files do not carry."""
    bands = study.bands
    return {
        "format": FORMAT,
        "study": study.name,
        "contrasts": file_names(list(study.contrasts), "contrast names"),
        "baseline_window": None if study.baseline_window is None else [float(edge) for edge in study.baseline_window],
        "cautions": list(study.cautions),
        "band_cautions": [] if bands is None else list(bands.attrs.get("cautions", ())),
    }


def _write_tables(study: StudyResults, folder: Path) -> None:
    folder_tables.write_table(folder_tables.all_clusters(study), folder / "clusters.csv")
    if study.bands is not None:
        folder_tables.write_table(study.bands, folder / "bands.csv")
    if study.trial_counts is not None:
        folder_tables.write_table(folder_tables.long_trial_counts(study.trial_counts), folder / "trial_counts.csv")
    if study.participants is not None:
        folder_tables.write_table(study.participants, folder / "participants.csv")
    if study.electrodes is not None:
        folder_tables.write_table(study.electrodes, folder / "electrodes.csv")
    if study.review is not None:
        folder_tables.write_table(study.review, folder / "baseline_review.csv")
    if study.families is not None:
        folder_tables.write_table(study.families, folder / "families.csv")


def _json_text(content: Mapping[str, Any]) -> str:
    return json.dumps(content, indent=2, ensure_ascii=False, default=str) + "\n"


def _write_text(path: Path, text: str) -> None:
    with written_whole(path) as temporary:
        temporary.write_text(text, encoding="utf-8", newline="\n")


def read_results(out: str | Path) -> StudyResults:
    """What did a finished run find?  Reads a results folder back.

    Parameters
    ----------
    out : path
        A folder that `tfstats run` or `run_analysis` wrote.

    Returns
    -------
    StudyResults
        `.contrasts` {name: ContrastResult} in the plan's order, `.bands`, `.provenance`, and what the report shows.

    Raises
    ------
    InputError
        No such folder, a folder of something else, an unfinished or damaged one.

    Notes
    -----
    Nothing is computed again; cost is the reading of the saved arrays.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> import numpy as np, tfstats as tfs
    >>> from tfstats.reporting import StudyResults, write_results
    >>> values = np.random.default_rng(1).normal(size=(8, 1, 1, 3, 4)) + 1.5
    >>> maps = tfs.ConditionMaps(values, subjects=list("ABCDEFGH"), conditions=["recalled"], channels=["Fz"],
    ...     frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="decibel")
    >>> result = tfs.permutation_test(tfs.against_zero(maps, "recalled"), tfs.ClusterMass(0.05))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     _ = write_results(StudyResults({"change": result}), pathlib.Path(folder) / "results", figures=False)
    ...     again = tfs.read_results(pathlib.Path(folder) / "results")
    >>> again.contrasts["change"].mask.tolist() == result.mask.tolist()
    True
    """
    folder = Path(out)
    contents = _checked_contents(folder)
    problems = Problems()
    contrasts: dict[str, ContrastResult] = {}
    for name, short in contents["contrasts"].items():
        with problems.gathering():
            contrasts[name] = ContrastResult.load(folder / "contrasts" / short)
    provenance: dict[str, Any] = {}
    try:
        provenance = json.loads((folder / "provenance.json").read_text(encoding="utf-8"))
    except (OSError, ValueError):
        problems.add(
            str(folder / "provenance.json"), "the provenance of the run", "no readable file", "run the analysis again"
        )
    problems.raise_if_any()
    tables = folder / "tables"
    bands = _table(tables / "bands.csv", folder_tables.read_bands)
    if bands is not None:
        bands.attrs["cautions"] = contents["band_cautions"]
    plan = folder / "plan.toml"
    window = contents["baseline_window"]
    return StudyResults(
        contrasts=contrasts,
        bands=bands,
        provenance=provenance,
        name=contents["study"],
        # Without translation of line ends, since the plan's hash is over its bytes.
        plan_text=plan.read_bytes().decode("utf-8") if plan.is_file() else None,
        trial_counts=_table(tables / "trial_counts.csv", folder_tables.read_trial_counts),
        participants=_table(tables / "participants.csv", folder_tables.read_participants),
        baseline_window=None if window is None else (window[0], window[1]),
        electrodes=_table(tables / "electrodes.csv", folder_tables.read_electrodes),
        cautions=tuple(contents["cautions"]),
        review=_table(tables / "baseline_review.csv", folder_tables.read_review),
        families=_table(tables / "families.csv", folder_tables.read_families),
    )


def _table(path: Path, read: Callable[[Path], pd.DataFrame]) -> pd.DataFrame | None:
    return read(path) if path.is_file() else None


def _checked_contents(folder: Path) -> dict[str, Any]:
    """The contents file of a whole results folder, or the reason why there is none."""
    if not folder.is_dir():
        got = "a file" if folder.exists() else "nothing there"
        raise InputError(f"{folder}: expected a results folder, got {got}; give the folder that tfstats run wrote.")
    if folder.name.endswith(UNFINISHED):
        raise InputError(
            f"{folder}: expected a finished results folder, got one whose run did not end; "
            "repeat tfstats run with the same plan and the same --out, which takes it up again."
        )
    path = folder / CONTENTS_FILE
    if not path.is_file():
        inside = listed(entry.name for entry in folder.iterdir())
        raise InputError(
            f"{folder}: expected a results folder with {CONTENTS_FILE}, got a folder that holds {inside}; "
            "give the folder that tfstats run wrote."
        )
    try:
        contents = json.loads(path.read_text(encoding="utf-8"))
        found = contents["format"]
    except (ValueError, KeyError, TypeError, OSError):
        contents, found = {}, "another content"
    if found != FORMAT:
        raise InputError(
            f'{path}: expected the format "{FORMAT}", got "{found}"; read it with the version of tfstats that wrote it.'
        )
    return dict(contents)
