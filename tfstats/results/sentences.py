"""Sentences about one result: what was found, worded so that it claims no more than was tested."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from tfstats.corrections import FalseDiscoveryRate
from tfstats.results.apa_numbers import (
    count_text,
    interval_text,
    level_text,
    number_text,
    p_interval_text,
    p_text,
    span_text,
)
from tfstats.results.contrast_result import APPROXIMATED

if TYPE_CHECKING:
    from tfstats.results.contrast_result import ContrastResult

__all__ = ["finding_text", "summary_text"]

MOST_TOLD = 3  # clusters told in full; the table has the rest
MOST_CHANNELS = 8


def finding_text(result: ContrastResult) -> str:
    """The finding of a contrast in sentences."""
    found = result.significant
    name = result.contrast.difference
    what = _correction_in_words(result)
    if not len(found):
        return f"{name}: {_nothing_found(result)}"
    plural = {True: "cluster", False: "clusters"}[len(found) == 1]
    noun = plural if result.record.correction.clusterwise else plural.replace("cluster", "region")
    parts = [f"{name}: {len(found)} {noun} with corrected p <= {level_text(result.alpha)} ({what})."]
    parts.extend(_cluster_in_words(result, row) for row in found.head(MOST_TOLD).itertuples())
    if len(found) > MOST_TOLD:
        parts.append(f"The other {len(found) - MOST_TOLD} are in the cluster table.")
    return " ".join(parts)


def _nothing_found(result: ContrastResult) -> str:
    what = _correction_in_words(result)
    if not len(result.clusters):
        beyond = (
            "no point exceeded the forming threshold"
            if result.record.correction.clusterwise
            else f"no point reached a corrected p of {level_text(result.alpha)}"
        )
        return f"{beyond} ({what}). This does not show that the conditions are equal."
    smallest = result.clusters.loc[result.clusters["p"].idxmin()]
    return (
        f"no cluster reached {level_text(result.alpha)} ({what}; smallest {p_text(smallest['p'])}). "
        "This does not show that the conditions are equal."
    )


def _correction_in_words(result: ContrastResult) -> str:
    correction = result.record.correction
    side = "upper tail" if result.contrast.is_f else result.record.alternative
    if isinstance(correction, FalseDiscoveryRate):
        method = {"benjamini_hochberg": "Benjamini-Hochberg", "benjamini_yekutieli": "Benjamini-Yekutieli"}
        return f"{method[correction.method]} false discovery rate, {side}"
    return f"{correction.words}, {side}"


def _cluster_in_words(result: ContrastResult, row: Any) -> str:
    noun = "cluster" if result.record.correction.clusterwise else "region"
    start = f"{'Positive' if row.sign > 0 else 'Negative'} {noun}" if not result.contrast.is_f else noun.capitalize()
    channels = row.channels.split(";")
    where = ", ".join(channels[:MOST_CHANNELS]) + (
        f" and {len(channels) - MOST_CHANNELS} more" if len(channels) > MOST_CHANNELS else ""
    )
    return (
        f"{start} {row.cluster}: {_p_with_interval(result, row)}, mass {row.mass:.0f}, {row.points} points, observed at "
        f"{span_text(row.frequency_low, row.frequency_high, 'Hz')}, {span_text(row.time_start, row.time_stop, 's')}, "
        f"{where}; {_effect_in_words(result, row)} (region chosen on these data)."
    )


def _effect_in_words(result: ContrastResult, row: Any) -> str:
    unit, name = result.estimate_unit, result.effect_name
    size = f"{name} = {number_text(row.effect_size)}"
    if result.contrast.is_f:
        bounds = interval_text(row.effect_low, row.effect_high).replace("95", "90", 1)
        return f"largest less smallest mean {number_text(row.estimate)} {unit}, {size}, {bounds}"
    what = "mean value"
    if result.contrast.predictor is not None:
        what = "slope"
    elif result.contrast.labels is not None:
        what = "mean difference"
    return (
        f"{what} {number_text(row.estimate)} {unit}, {interval_text(row.estimate_low, row.estimate_high)}, "
        f"{size}, {interval_text(row.effect_low, row.effect_high)}"
    )


def _p_with_interval(result: ContrastResult, row: Any) -> str:
    if result.enumerated or not row.p_low < row.p_high:
        return p_text(row.p)
    kind = "sequential" if result.record.sequential else "Monte Carlo"
    if getattr(row, APPROXIMATED, False):
        kind = "by a fitted tail; the count's Monte Carlo"
    return f"{p_text(row.p)} ({kind} {p_interval_text(row.p_low, row.p_high)})"


def summary_text(result: ContrastResult) -> str:
    """A few lines for the terminal: hypotheses, finding, test, cautions."""
    contrast, record = result.contrast, result.record
    channels, frequencies, times = contrast.shape
    visited = (
        f"until resolved, but for {record.unresolved}"
        if record.unresolved
        else "until resolved"
        if record.sequential
        else "all distinct"
        if record.enumerated
        else f"drawn of {count_text(record.distinct)}"
    )
    lines = [
        f"{contrast.design}: {contrast.difference}, in {result.estimate_unit}",
        f"  null hypothesis  {contrast.null_hypothesis}",
        f"  alternative      {contrast.alternatives[record.alternative]}",
        f"  plane            {channels} channels x {frequencies} frequencies x {times} times, "
        f"{int(result.tested.sum())} points tested",
        f"  relabellings     {record.rows} ({visited}{', exact' if record.exact else ''}), seed {record.seed}",
        f"  finding          {result.sentence()}",
    ]
    lines.extend(f"  mind             {caution}" for caution in result.cautions)
    return "\n".join(lines)
