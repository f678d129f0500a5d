"""The report as one HTML file and the methods as Markdown, from templates, every label escaped."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import replace
from importlib import resources
from pathlib import Path
from typing import Any

from jinja2 import Environment, FunctionLoader, StrictUndefined
from markupsafe import Markup

import tfstats
from tfstats.foundations.safe_writing import written_whole
from tfstats.reporting.band_figure import band_picture
from tfstats.reporting.figure_output import save_figure, svg_text
from tfstats.reporting.figure_pages import file_figures
from tfstats.reporting.notices import BAND_NOTE, COLOUR_NOTE
from tfstats.reporting.plain_text import printable
from tfstats.reporting.plane_axes import figure_style
from tfstats.reporting.report_contents import ShownGroup, ShownPicture, study_contents
from tfstats.reporting.report_pictures import Picture, report_pictures
from tfstats.reporting.study_results import StudyResults

__all__ = ["markdown_text", "methods_text", "report_html", "write_report"]

Progress = Callable[[str], None]


def _template(name: str) -> str:
    return resources.files("tfstats.reporting").joinpath("pages", name).read_text(encoding="utf-8")


def markdown_text(text: object) -> str:
    """Text in which Markdown sees no tags, links, emphasis or code; ordinary sentences stay as they are."""
    line = " ".join(str(text).split())
    line = re.sub(r"([\\`*])", r"\\\1", line)
    line = re.sub(r"\](?=[(\[:])", r"\\]", line)
    line = re.sub(r"<(?=[A-Za-z/!?])", r"\\<", line)
    line = re.sub(r"(?<![A-Za-z0-9])_|_(?![A-Za-z0-9])", r"\\_", line)
    return re.sub(r"^([#>+=-]|\d+[.)])", r"\\\1", line)


def _environment(*, escaping: bool) -> Environment:
    environment = Environment(
        loader=FunctionLoader(_template),
        autoescape=escaping,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        # Whatever is printed passes here, before it is escaped; Markup is ours and stays as it is.
        finalize=lambda value: printable(value) if type(value) is str else value,
    )
    environment.filters["markdown"] = markdown_text
    return environment


def write_report(
    study: StudyResults, folder: Path, *, figure_files: bool = True, progress: Progress = lambda _: None
) -> Path:
    """Write report.html, methods.md and the figures of a study into its folder; returns the report's path."""
    contents = study_contents(study)
    figures = folder / "figures" if figure_files else None
    report = folder / "report.html"
    _write(report, report_html(study, contents, figures=figures, progress=progress))
    _write(folder / "methods.md", methods_text(study, contents))
    return report


def _write(path: Path, text: str) -> None:
    with written_whole(path) as temporary:
        temporary.write_text(text, encoding="utf-8", newline="\n")


def report_html(
    study: StudyResults,
    contents: dict[str, Any] | None = None,
    *,
    figures: Path | None = None,
    progress: Progress = lambda _: None,
) -> str:
    """The report as one self-contained page: no scripts, nothing fetched from anywhere.

    With `figures`, the figure files are written into that folder on the way; wide figures are drawn once for both.
    """
    contents = contents or study_contents(study)
    sections = []
    for section in contents["sections"]:
        progress(f"drawing {section.name}")
        groups = tuple(_shown_groups(study, section.name, section.short, figures))
        sections.append(replace(section, groups=groups))
        if figures is not None:
            with figure_style():
                pages = list(file_figures(study.contrasts[section.name], study.baseline_window))
            for kind, figure in pages:
                save_figure(figure, figures / f"{section.short}_{kind}")
    bands = None
    if study.bands is not None and len(study.bands):
        # Two underscores, so that no contrast's figure can have this name.
        bands = _shown(band_picture(study.bands), "band__table", study, figures)
    page = _environment(escaping=True).get_template("report.html.jinja")
    return page.render(
        **{**contents, "sections": sections},
        band_picture=bands,
        band_note=BAND_NOTE,
        colour_note=COLOUR_NOTE,
        version=tfstats.__version__,
        style=Markup(_template("report.css")),  # our own file
    )


def _shown_groups(study: StudyResults, name: str, short: str, figures: Path | None) -> Iterator[ShownGroup]:
    for group in report_pictures(study.contrasts[name], study.baseline_window):
        pictures = (_shown(picture, f"{short}_{picture.name}", study, figures) for picture in group.pictures)
        yield ShownGroup(group.heading, group.note, tuple(pictures))


def _shown(picture: Picture, name: str, study: StudyResults, figures: Path | None) -> ShownPicture:
    with figure_style():
        figure = picture.draw(study.baseline_window)
    if picture.wide and figures is not None:
        save_figure(figure, figures / name)
    # matplotlib escapes the labels inside; the page does so with the caption.
    return ShownPicture(picture.kind, Markup(svg_text(figure, name, picture.alt)), picture.caption, picture.wide)


def methods_text(study: StudyResults, contents: dict[str, Any] | None = None) -> str:
    """The same words as the report's, as Markdown."""
    page = _environment(escaping=False).get_template("methods.md.jinja")
    return page.render(**(contents or study_contents(study)), band_note=BAND_NOTE, version=tfstats.__version__)
