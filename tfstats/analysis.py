"""The main path: from a plan to a results folder, one call a stage."""

from __future__ import annotations

from collections.abc import Callable
from os import PathLike
from pathlib import Path

from tfstats.baseline_review import BaselineReview, PlannedContrast, review_baseline
from tfstats.contrasts import DESIGNS
from tfstats.foundations.errors import InputError
from tfstats.plan_file import AnalysisPlan
from tfstats.plan_file.provenance import provenance_of
from tfstats.plan_file.study_stages import (
    OpenStudy,
    checked_bands,
    study_families,
    study_maps,
    study_opened,
    tested_contrast,
)
from tfstats.plan_file.unfinished_run import UnfinishedRun, file_identities
from tfstats.power_files import SubjectCache
from tfstats.reporting import StudyResults, write_results

__all__ = ["run_analysis", "study_review"]

Progress = Callable[[str, int, int | None], object]
"""Called with the stage in words, how much of it is done, and its total where that is known."""


def run_analysis(
    plan: AnalysisPlan | str | PathLike[str],
    out: str | PathLike[str],
    *,
    replace: bool = False,
    threads: int | None = None,
    progress: Progress | None = None,
    cache: bool = True,
) -> StudyResults:
    """Run a whole study: read the power, make it relative, test each contrast, write the results folder.

    Parameters
    ----------
    plan : AnalysisPlan or path of a plan file
    out : path
        The results folder.  It is written as `out.unfinished` and renamed at the end; an interrupted run is taken up again
        when the plan and the input files are the same.
    replace : bool
        Whether an existing folder may be replaced, once the new one is whole.
    threads : int or None
        As in `permutation_test`; the results do not depend on it.
    progress : callable(stage, done, total), optional
    cache : bool
        Whether each subject's averages are kept in `PLAN.cache` beside the plan, and taken from there when the subject's
        files and the settings are the same: a subject added later is then read alone.  The results are the same to the
        last bit; the folder may be deleted at any time.

    Returns
    -------
    StudyResults
        `.contrasts` {name: ContrastResult}, `.bands`, `.provenance`; `read_results` gives the same again.

    Raises
    ------
    InputError
        All that is wrong with the plan and the data, together; then there is no results folder.

    Notes
    -----
    Randomness belongs to the plan's seed.  Memory: one subject's block of power, the maps of all subjects, and about
    twice the compared values of one contrast.

    Examples
    --------
    >>> import tempfile, pathlib, tfstats as tfs
    >>> from tfstats.command_line.demo_study import write_demo_study
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     plan = write_demo_study(pathlib.Path(folder), subjects=6, permutations=64)
    ...     results = tfs.run_analysis(plan, pathlib.Path(folder) / "results")
    >>> list(results.contrasts)
    ['recalled against missed', 'recalled against baseline']
    """
    plan = plan if isinstance(plan, AnalysisPlan) else AnalysisPlan.read(plan)
    tell = progress or (lambda stage, done, total: None)
    run = UnfinishedRun(Path(out), replace=replace)
    normalized: Callable[..., object] = lambda subject, done, total: tell("normalizing", done, total)  # noqa: E731
    study = study_opened(plan, normalized)
    run.take_up(plan.hash, plan.hashed_at, file_identities(study.files()), [call.name for call in plan.contrasts])
    kept = SubjectCache(plan.cache_folder) if cache else None
    maps = run.kept_maps() or study_maps(plan, study, normalized, kept)
    bands = checked_bands(plan, study, maps)
    run.begin(maps)
    try:
        contrasts = {
            call.name: run.kept_result(call.name)
            or run.keep_result(call.name, tested_contrast(plan, study, maps, call, threads=threads, progress=tell))
            for call in plan.contrasts
        }
        review = study_review(plan, study, tell)
        results = StudyResults(
            contrasts=contrasts,
            bands=bands,
            provenance=provenance_of(
                plan,
                run.plan_hashed_at,
                study.files(),
                study.left_out,
                {"threads": threads, "replace": replace, "cache": cache},
                kept,
            ),  # fmt: skip
            name=plan.study.name,
            plan_text=plan.text,
            trial_counts=None if maps is None else maps.trial_counts,
            participants=study.participants,
            baseline_window=None if plan.baseline.unit == "none" else plan.baseline.window,
            electrodes=study.electrodes,
            review=None if review is None else review.table(),
            families=study_families(plan, contrasts),
        )
        write_results(results, run.folder, progress=lambda words: _told(tell, words))
    except InputError:
        run.drop()
        raise
    run.finish()
    return results


def _told(tell: Progress, words: str) -> None:
    tell(f"report: {words}", 0, None)


def study_review(plan: AnalysisPlan, study: OpenStudy, progress: Progress | None = None) -> BaselineReview | None:
    """What the baseline does to the study; None without conditions over subjects or without a baseline."""
    if plan.conditions is None or plan.baseline.unit == "none" or plan.input.kind != "trials":
        return None
    contrasts = {
        call.name: PlannedContrast(call.design, call.arguments)
        for call in (*plan.contrasts, *plan.band_tests)
        if DESIGNS[call.design].takes == "maps"
    }
    return review_baseline(
        study.powers,
        plan.conditions.columns,
        plan.baseline,
        contrasts=contrasts,
        conditions=None if plan.conditions.conditions is None else list(plan.conditions.conditions),
        participants=study.participants,
        regions=study.regions,
        trial_counts=plan.trial_counts,
        alpha=plan.study.alpha,
        seed=plan.study.seed,
        progress=progress,
    )
