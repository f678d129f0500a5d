"""What the terminal shows: progress while it works, findings when it is done; plain lines when piped."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table
from rich.text import Text

from tfstats.results.apa_numbers import count_text, number_text, p_text, span_text
from tfstats.results.cautions import RESEARCH_ONLY

if TYPE_CHECKING:
    import pandas as pd

    from tfstats.baseline_review import BaselineReview
    from tfstats.command_line.study_check import StudyOverview
    from tfstats.reporting import StudyResults

__all__ = ["Terminal"]

MOST_CLUSTERS = 5
MOST_SUBJECTS = 8


class _PatientConsole(Console):
    """A console that goes silent when its reader has closed the pipe, where rich would end the program."""

    def on_broken_pipe(self) -> None:
        self.quiet = True
        # What Python flushes at its end must not meet the broken pipe again.
        os.dup2(os.open(os.devnull, os.O_WRONLY), self.file.fileno())


class Terminal:
    """Prints to standard output; progress and nothing else goes to standard error."""

    def __init__(self, *, quiet: bool) -> None:
        self.quiet = quiet
        # soft_wrap: lines must not break where some terminal would, since a pipe has no width.
        self.out = _PatientConsole(highlight=False, soft_wrap=True)
        self.err = _PatientConsole(stderr=True, highlight=False, soft_wrap=True)

    def say(self, words: str) -> None:
        """One line, unless quiet."""
        if not self.quiet:
            self.out.print(Text(words))

    @contextmanager
    def progress(self) -> Iterator[Callable[[str, int, int | None], object] | None]:
        """A callable(stage, done, total): a bar a stage on a terminal, a line a stage when piped."""
        if self.quiet:
            yield None
            return
        if not self.err.is_terminal:
            said: set[str] = set()

            def line(stage: str, done: int, total: int | None) -> None:
                if stage not in said:
                    said.add(stage)
                    self.err.print(Text(stage))

            yield line
            return
        columns = (
            TextColumn("{task.description}"),
            BarColumn(),
            TextColumn("{task.percentage:>3.0f} %"),
            TimeRemainingColumn(),
        )
        with Progress(*columns, console=self.err, transient=True) as bars:
            tasks: dict[str, Any] = {}

            def update(stage: str, done: int, total: int | None) -> None:
                if stage not in tasks:
                    tasks[stage] = bars.add_task(stage, total=total)
                bars.update(tasks[stage], completed=done, total=total)

            yield update

    def findings(self, results: StudyResults, folder: Path) -> None:
        """Verdicts, clusters and bands of a study, and where the report is."""
        if self.quiet:
            return
        self.out.print(Text(results.name, style="bold"))
        for name, result in results.contrasts.items():
            self.out.print()
            self.out.print(Text(f"{name}  ({result.contrast.difference})", style="bold"))
            self.out.print(Text(result.sentence()))
            if len(result.clusters):
                self.table(_cluster_rows(result))
        if results.bands is not None and len(results.bands):
            self.out.print()
            self.out.print(Text("Bands", style="bold"))
            self.table(_band_rows(results.bands))
        self.out.print()
        if results.families is not None and len(results.families):
            self.out.print(Text("Families: contrasts corrected for each other", style="bold"))
            rows: list[tuple[str, ...]] = [("family", "contrast", "p", "p in the family")]
            rows += [
                (
                    row.family,
                    row.contrast,
                    p_text(row.p).removeprefix("p = "),
                    p_text(row.p_family).removeprefix("p = "),
                )
                for row in results.families.itertuples()
            ]
            self.table(rows)
        elif len(results.contrasts) > 1:
            self.out.print(Text("The p-values of the contrasts are not corrected for each other."))
        self.out.print(Text(RESEARCH_ONLY))
        self.out.print(Text(f"Report: {folder / 'report.html'}"))

    def review(self, name: str, review: BaselineReview | None) -> None:
        """The findings of a baseline review, the worst first."""
        self.out.print(Text(f"{name}: what the baseline does to these data", style="bold"))
        if review is None:
            self.out.print(Text("Nothing to review: the plan has no conditions over subjects, no baseline, or no single trials."))
            return
        for finding in review.findings:
            self.out.print(
                Text(f"{finding.severity}: {finding.topic}", style="bold" if finding.severity == "headline" else "")
            )
            self.out.print(Text(f"  {finding.words}"))
            if finding.remedy:
                self.out.print(Text(f"  {finding.remedy}"))

    def overview(self, overview: StudyOverview) -> None:
        """What `check` found, when nothing is wrong."""
        self.out.print(Text(f"{overview.name}: nothing is wrong.", style="bold"))
        shown = ", ".join(overview.subjects[:MOST_SUBJECTS])
        more = len(overview.subjects) - MOST_SUBJECTS
        self.out.print(Text(f"{len(overview.subjects)} subjects: {shown}" + (f" and {more} more" if more > 0 else "")))
        for name, reason in overview.left_out.items():
            self.out.print(Text(f"left out: {name} ({reason})"))
        if overview.trial_counts is not None:
            counts = overview.trial_counts
            rows: list[tuple[str, ...]] = [("condition", "fewest trials", "median", "most")]
            rows += [
                (str(name), str(counts[name].min()), f"{counts[name].median():g}", str(counts[name].max()))
                for name in counts.columns
            ]
            self.table(rows)
        header = (
            "contrast",
            "design",
            "units",
            "plane (channels x Hz x s)",
            "points tested",
            "relabellings",
            "distinct ones",
            "smallest p",
        )
        lines: list[tuple[str, ...]] = [header]
        for row in overview.contrasts.itertuples(index=False):
            counted = (str(row[4]), str(row[5]), count_text(row[6]))
            lines.append((*row[:4], *counted, p_text(row[7]).removeprefix("p = ")))
        self.table(lines)
        for caution in overview.cautions:
            self.out.print(Text(f"mind: {caution}"))

    def table(self, rows: Sequence[tuple[str, ...]]) -> None:
        """The first row is the header.  Piped: columns parted by tabs, nothing cut."""
        if not self.out.is_terminal:
            for row in rows:
                # Not through rich, which turns tabs into spaces.
                print("\t".join(row), file=self.out.file)
            return
        table = Table(show_edge=False, pad_edge=False)
        for name in rows[0]:
            table.add_column(Text(name), overflow="fold")
        for row in rows[1:]:
            table.add_row(*(Text(cell) for cell in row))
        # Folded into the window's width; soft wrapping would cut its columns.
        self.out.print(table, soft_wrap=False)


def _cluster_rows(result: Any) -> list[tuple[str, ...]]:
    header = (
        "cluster",
        "p",
        "mass",
        "observed Hz",
        "observed s",
        "channels",
        f"estimate ({result.estimate_unit})",
        result.effect_name,
    )
    rows: list[tuple[str, ...]] = [header]
    for row in result.clusters.head(MOST_CLUSTERS).itertuples():
        rows.append(
            (
                f"{row.cluster} {'+' if row.sign > 0 else '-'}",
                p_text(row.p).removeprefix("p = "),
                number_text(row.mass, 0),
                span_text(row.frequency_low, row.frequency_high, "").strip(),
                span_text(row.time_start, row.time_stop, "").strip(),
                row.channels.replace(";", " "),
                f"{number_text(row.estimate)} [{number_text(row.estimate_low)}, {number_text(row.estimate_high)}]",
                f"{number_text(row.effect_size)} [{number_text(row.effect_low)}, {number_text(row.effect_high)}]",
            )
        )
    left = len(result.clusters) - MOST_CLUSTERS
    if left > 0:
        rows.append((f"and {left} more", *[""] * (len(header) - 1)))
    return rows


def _band_rows(bands: pd.DataFrame) -> list[tuple[str, ...]]:
    header = ("test", "band", "window", "channels", "estimate", "t (df)", "p", "p corrected", "effect size")
    rows: list[tuple[str, ...]] = [header]
    for row in bands.itertuples():
        rows.append(
            (
                row.test, row.band, row.window, row.channels,
                f"{number_text(row.estimate)} {row.unit} [{number_text(row.low)}, {number_text(row.high)}]",
                f"{number_text(row.statistic)} ({number_text(row.df, 0)})",
                p_text(row.p).removeprefix("p = "),
                p_text(row.p_corrected).removeprefix("p = "),
                f"{number_text(row.effect_size)} [{number_text(row.effect_low)}, {number_text(row.effect_high)}]",
            )
        )  # fmt: skip
    return rows
