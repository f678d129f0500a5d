"""What report and methods file say about a study, in order, before it is laid out."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from tfstats.foundations.safe_writing import file_names
from tfstats.reporting.notices import study_notices
from tfstats.reporting.study_results import StudyResults
from tfstats.results import ContrastResult
from tfstats.results.apa_numbers import interval_text, number_text, p_text, span_text

__all__ = [
    "ContrastSection",
    "ShownGroup",
    "ShownPicture",
    "Table",
    "contrast_section",
    "provenance_rows",
    "study_contents",
    "verdict_text",
]

MOST_ROWS = 12
MOST_CHANNELS = 6
INPUT_HASHES = "input_hashes"  # one a file: folded away


@dataclass(frozen=True)
class Table:
    """A table ready to print: texts only; `firm` marks rows that stand out."""

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    firm: tuple[bool, ...]
    note: str = ""


@dataclass(frozen=True)
class ShownPicture:
    """A drawn picture with its caption."""

    kind: str
    svg: str
    caption: str
    wide: bool


@dataclass(frozen=True)
class ShownGroup:
    """Drawn pictures under one heading."""

    heading: str
    note: str
    pictures: tuple[ShownPicture, ...]


@dataclass(frozen=True)
class ContrastSection:
    """All words about one contrast."""

    name: str
    short: str
    compared: str
    found: bool
    verdict: str
    facts: tuple[tuple[str, str], ...]
    sentence: str
    null_hypothesis: str
    alternative: str
    cautions: tuple[str, ...]
    methods: str
    noun: str
    clusters: Table | None
    none_found: str
    """Said in place of an empty table."""
    groups: tuple[ShownGroup, ...] = ()


def level_text(alpha: float) -> str:
    """`.05`"""
    return f"{alpha:g}".replace("0.", ".", 1)


def bare_p(p: float) -> str:
    """`.042`, for tables and bounds; the lower bound of a p that no draw reached is 0."""
    return "0" if p <= 0 else p_text(p).removeprefix("p = ")


def verdict_text(result: ContrastResult) -> str:
    """The finding in one line."""
    found = len(result.significant)
    noun = "cluster" if result.record.correction.clusterwise else "region"
    if found:
        return f"{found} {noun}{'s' if found > 1 else ''} with corrected p ≤ {level_text(result.alpha)}"
    if result.record.correction.clusterwise:
        return f"No cluster with corrected p ≤ {level_text(result.alpha)}"
    return f"No point with corrected p ≤ {level_text(result.alpha)}"


def contrast_section(name: str, short: str, result: ContrastResult) -> ContrastSection:
    """The words of one contrast."""
    return ContrastSection(
        name=name,
        short=short,
        compared=result.contrast.difference,
        found=bool(len(result.significant)),
        verdict=verdict_text(result),
        facts=tuple(_facts(result)),
        sentence=result.sentence(),
        null_hypothesis=result.contrast.null_hypothesis,
        alternative=result.contrast.alternatives[result.record.alternative],
        cautions=tuple(result.cautions),
        methods=result.methods(),
        noun="cluster" if result.record.correction.clusterwise else "region",
        clusters=_cluster_table(result),
        none_found="No cluster was observed: no point lay beyond the forming threshold."
        if result.record.correction.clusterwise
        else "None: regions are the connected parts of the corrected mask, and it is empty.",
    )


def _facts(result: ContrastResult) -> Iterator[tuple[str, str]]:
    """What stands beside the verdict: p, effect and size of the leading cluster."""
    if not len(result.clusters):
        finite = result.p_values[np.isfinite(result.p_values)]
        if finite.size:
            yield "smallest corrected p", bare_p(float(finite.min()))
        return
    leading = result.clusters.sort_values(["p", "mass"], ascending=[True, False], kind="stable").iloc[0]
    noun = "cluster" if result.record.correction.clusterwise else "region"
    unit = result.estimate_unit
    said = f"corrected p, {noun} {leading.cluster}"
    if leading.p_low < leading.p_high:
        yield said, f"{bare_p(leading.p)} (Monte Carlo {bare_p(leading.p_low)} to {bare_p(leading.p_high)})"
    else:
        yield said, bare_p(leading.p)
    yield (
        f"effect ({unit})",
        f"{_signed(leading.estimate)}, {interval_text(leading.estimate_low, leading.estimate_high)}",
    )
    yield (
        result.effect_name,
        f"{number_text(leading.effect_size)}, {interval_text(leading.effect_low, leading.effect_high)}",
    )
    frequencies = span_text(leading.frequency_low, leading.frequency_high, "Hz")
    yield (
        "observed at",
        f"{frequencies}, {span_text(leading.time_start, leading.time_stop, 's')}, {_channels(leading.channels)}",
    )


def _signed(value: float) -> str:
    return f"+{number_text(value)}" if value > 0 else number_text(value).replace("-", "−")


def _channels(joined: str) -> str:
    names = joined.split(";")
    rest = len(names) - MOST_CHANNELS
    return ", ".join(names[:MOST_CHANNELS]) + (f" and {rest} more" if rest > 0 else "")


def _interval(low: float, high: float) -> str:
    return f"[{number_text(low)}, {number_text(high)}]"


def _cluster_table(result: ContrastResult) -> Table | None:
    clusters = result.clusters
    if not len(clusters):
        return None
    clusterwise = result.record.correction.clusterwise
    kept = clusters[(clusters["p"] <= result.alpha) | (clusters["cluster"] <= MOST_ROWS)].head(3 * MOST_ROWS)
    rows, firm = [], []
    for row in kept.itertuples():
        p = bare_p(row.p)
        if row.p_low < row.p_high:
            p += f"\n{bare_p(row.p_low)} to {bare_p(row.p_high)}"
        rows.append(
            (
                str(row.cluster),
                "positive" if row.sign > 0 else "negative",
                p,
                f"{number_text(row.estimate)}\n{_interval(row.estimate_low, row.estimate_high)}",
                f"{number_text(row.effect_size)}\n{_interval(row.effect_low, row.effect_high)}",
                f"{span_text(row.frequency_low, row.frequency_high, 'Hz')}\n{span_text(row.time_start, row.time_stop, 's')}",
                _channels(row.channels),
                f"{number_text(row.peak_statistic)}\n{row.peak_channel}, {row.peak_frequency:.4g} Hz, {row.peak_time:.4g} s",
                f"{row.mass:.1f}",
                str(row.points),
            )
        )
        firm.append(bool(row.p <= result.alpha))
    left_out = len(clusters) - len(kept)
    rest = f" {left_out} more are in tables/clusters.csv." if left_out else ""
    word = "cluster" if clusterwise else "region"
    drawn = "" if result.enumerated else "; below a p its 95 % Monte Carlo interval"
    return Table(
        columns=(
            word,
            "sign",
            "corrected p",
            f"effect, {result.estimate_unit}\n[95 %]",
            f"{result.effect_name}\n[95 %]",
            "observed at",
            "channels",
            f"peak {result.statistic_name}",
            "mass",
            "points",
        ),
        rows=tuple(rows),
        firm=tuple(firm),
        note=(
            f"Largest mass first; rows with corrected p ≤ {level_text(result.alpha)} are marked{drawn}. Extents are those "
            "observed, no tested boundaries. Effects are of a region chosen on these data and inflated; intervals are "
            f"t-based and unadjusted.{rest}"
        ),
    )


# -- the study ----------------------------------------------------------------------------------------------------------
def study_contents(study: StudyResults) -> dict[str, Any]:
    """Everything but the pictures, by the names that the page templates use."""
    shorts = file_names(list(study.contrasts), "contrast names")
    return {
        "study": study.name,
        "notices": study_notices(study),
        "cautions": list(study.cautions),
        "sections": [contrast_section(name, shorts[name], result) for name, result in study.contrasts.items()],
        "bands": None if study.bands is None else _band_rows(study),
        "band_cautions": [] if study.bands is None else list(study.bands.attrs.get("cautions", ())),
        "trial_counts": None if study.trial_counts is None else _trial_rows(study.trial_counts),
        "trial_summary": "" if study.trial_counts is None else _trial_summary(study.trial_counts),
        "review": None if study.review is None else study.review.to_dict("records"),
        "families": None if study.families is None else _plain_table(study.families),
        "participants": None if study.participants is None else _plain_table(study.participants),
        "provenance": provenance_rows({key: value for key, value in study.provenance.items() if key != INPUT_HASHES}),
        "input_hashes": provenance_rows(dict(study.provenance.get(INPUT_HASHES) or {})),
        "plan": study.plan_text,
    }


def _band_rows(study: StudyResults) -> Table:
    bands = study.bands
    assert bands is not None
    alpha = min((result.alpha for result in study.contrasts.values()), default=0.05)
    rows, firm = [], []
    for row in bands.itertuples():
        rows.append(
            (
                str(row.test),
                str(row.band),
                str(row.window),
                str(row.channels),
                f"{number_text(row.estimate)} {row.unit}\n{_interval(row.low, row.high)}",
                f"{number_text(row.statistic)} ({row.df:.4g})",
                bare_p(row.p),
                bare_p(row.p_corrected),
                f"{number_text(row.effect_size)}\n{_interval(row.effect_low, row.effect_high)}",
            )
        )
        firm.append(bool(row.p_corrected <= alpha))
    return Table(
        ("test", "band", "window", "channels", "estimate\n[95 %]", "t (df)", "p", "p corrected", "effect size\n[95 %]"),
        tuple(rows),
        tuple(firm),
        f"Rows with corrected p ≤ {level_text(alpha)} are marked.",
    )


def _trial_rows(counts: pd.DataFrame) -> Table:
    rows = [
        (str(subject), *(str(value) for value in counts.iloc[place].tolist()))
        for place, subject in enumerate(counts.index)
    ]
    return Table(("subject", *(str(name) for name in counts.columns)), tuple(rows), (False,) * len(rows))


def _trial_summary(counts: pd.DataFrame) -> str:
    parts = []
    for place, name in enumerate(counts.columns):
        column = counts.iloc[:, place]
        parts.append(f"{name}: median {column.median():g}, {column.min():g} to {column.max():g}")
    return f"Trials a subject over {len(counts)} subjects. " + "; ".join(parts) + "."


def _plain_table(table: pd.DataFrame) -> Table:
    rows = [tuple("" if pd.isna(value) else str(value) for value in row) for row in table.itertuples(index=False)]
    return Table(tuple(str(name) for name in table.columns), tuple(rows), (False,) * len(rows))


def provenance_rows(provenance: Mapping[str, Any], prefix: str = "") -> list[tuple[str, str]]:
    """(name, value) of every entry, nested ones with their path."""
    rows: list[tuple[str, str]] = []
    for name, value in provenance.items():
        path = f"{prefix}{name}"
        if isinstance(value, Mapping):
            rows.extend(provenance_rows(value, f"{path}: "))
        elif isinstance(value, (list, tuple)):
            rows.append((path, ", ".join(str(item) for item in value)))
        else:
            rows.append((path, str(value)))
    return rows
