"""How far the wavelets of the baseline window reach across the event, and how many cycles fit into it."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import special

from tfstats.baseline_review.review_result import HEADLINE, MIND, NOTE, ReviewFinding

__all__ = ["energy_across", "wavelet_width", "window_findings"]

Floats = NDArray[np.float64]

LARGE_SHARE, SOME_SHARE = 0.05, 0.01
FEW_CYCLES = 1.0
EDGE_WIDTHS = 3.0


def wavelet_width(frequencies: Floats, cycles: Floats) -> Floats:
    """sigma_t = cycles / (2 pi f) in s of the amplitude envelope of a Morlet wavelet."""
    return np.asarray(cycles / (2.0 * np.pi * frequencies))


def energy_across(distance: Floats | float, width: Floats) -> Floats:
    """Share of a wavelet's energy that lies beyond an event at `distance` s from its centre.

    Energy follows the squared envelope, a Gaussian with SD sigma_t / sqrt 2: at 2 sigma_t the share is 0.23 %.
    """
    return np.asarray(special.ndtr(-np.asarray(distance) * np.sqrt(2.0) / width))


def window_findings(
    frequencies: Floats, times: Floats, window: tuple[float, float], cycles: Floats | None, event: float
) -> tuple[list[ReviewFinding], pd.DataFrame]:
    """Window against event and edge, by frequency."""
    start, stop = window
    periods = (stop - start) * frequencies
    table = pd.DataFrame({"frequency": frequencies, "cycles_in_window": periods})
    findings = [_cycles_finding(frequencies[0], periods[0], stop - start)]
    if stop > event:
        findings.append(
            ReviewFinding(
                "window and event", HEADLINE, f"The baseline window ends at {stop:g} s, after the event at {event:g} s.",
                "Let it end before the event, or say why the response belongs to the baseline.",
            )
        )  # fmt: skip
    if cycles is None:
        findings.append(
            ReviewFinding(
                "window and event", NOTE,
                "The number of wavelet cycles is not recorded, so how far the window sees across the event is unknown.",
                "Set wavelet_cycles under [input].",
            )
        )  # fmt: skip
        return findings, table
    width = wavelet_width(frequencies, np.broadcast_to(cycles, frequencies.shape))
    at_end = energy_across(event - stop, width)
    inside = np.linspace(start, stop, 41)
    mean = np.mean([energy_across(event - time, width) for time in inside], axis=0)
    table["wavelet_sd_s"] = width
    table["energy_across_event_at_end"] = at_end
    table["energy_across_event_mean"] = mean
    table["edge_in_wavelet_sd"] = (start - times[0]) / width
    findings.append(_across_finding(frequencies, at_end, mean, stop, event))
    near = table["edge_in_wavelet_sd"] < EDGE_WIDTHS
    if near.any():
        findings.append(
            ReviewFinding(
                "window and edge", MIND,
                f"Below {frequencies[near].max():.3g} Hz the window begins less than {EDGE_WIDTHS:g} sigma_t from the "
                f"trial's first sample ({times[0]:g} s), where power is distorted or missing.",
                "Begin the window later, or cut longer trials.",
            )
        )  # fmt: skip
    return findings, table


def _cycles_finding(lowest: float, periods: float, length: float) -> ReviewFinding:
    few = periods < FEW_CYCLES
    return ReviewFinding(
        "window length",
        MIND if few else NOTE,
        f"The window of {length:g} s holds {periods:.2g} cycles of the lowest frequency, {lowest:.3g} Hz.",
        "Lengthen it, or begin at a higher frequency: its baseline is hardly more than one number." if few else "",
    )


def _across_finding(frequencies: Floats, at_end: Floats, mean: Floats, stop: float, event: float) -> ReviewFinding:
    lowest = (
        f"At {frequencies[0]:.3g} Hz, {100 * at_end[0]:.2g} % of the energy of the window's last wavelet "
        f"(centre {event - stop:.3g} s before the event) lies across the event, {100 * mean[0]:.2g} % on average over the window"
    )
    if mean.max() > LARGE_SHARE:
        above = frequencies[mean <= LARGE_SHARE]
        from_where = f"above {above[0]:.3g} Hz" if above.size else "at no frequency here"
        return ReviewFinding(
            "window and event", HEADLINE, f"{lowest}; below 5 % only {from_where}.",
            "End the window earlier: part of the response is subtracted from itself.",
        )  # fmt: skip
    severity = MIND if mean.max() > SOME_SHARE else NOTE
    return ReviewFinding(
        "window and event", severity, f"{lowest}.", "Say so for the lowest frequencies." if severity == MIND else ""
    )
