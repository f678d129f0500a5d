"""Per-trial power of one simulated subject."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.foundations.axes import typical_step
from tfstats.foundations.errors import refusal
from tfstats.foundations.random_streams import generator
from tfstats.power_files import TrialPower
from tfstats.simulated_power.study_design import StudyDesign, planted_decibels

__all__ = ["SimulatedStudy", "simulate_study", "simulate_subject"]

MARGIN = 4.0
"""Noise reaches this many sigma_t beyond both ends, so that the ends are like the middle."""


def simulate_subject(design: StudyDesign, subject: str) -> TrialPower:
    """What would one subject of the study give?

    Parameters
    ----------
    design : StudyDesign
    subject : str
        One of `design.subjects`.

    Returns
    -------
    TrialPower
        float32, scaling "density".

    Raises
    ------
    InputError
        A subject that is not in the design.

    Notes
    -----
    Random numbers belong to (seed, subject) alone: other subjects, or leaving some out, change nothing.  Time and
    memory grow with trials x channels x frequencies x times.

    Examples
    --------
    >>> from tfstats.simulated_power import lamp_sequences, simulate_subject
    >>> design = lamp_sequences()
    >>> simulate_subject(design, design.subjects[0]).channels[:3]
    ('F3', 'Fz', 'F4')
    """
    if subject not in design.subjects:
        raise refusal("simulated subject", "a subject of the design", f'"{subject}"', "choose one of design.subjects")
    random = generator(design.seed, f"simulated power/{subject}")
    trials = _trial_table(design, random)
    level = design.level_spread * random.standard_normal()
    exponent = design.exponent + design.exponent_spread * random.standard_normal()
    # A stream of their own, so that planting an effect leaves all else as it was.
    spreads = generator(design.seed, f"simulated effects/{subject}").standard_normal(len(design.effects))
    sizes = [effect.decibels + effect.spread * draw for effect, draw in zip(design.effects, spreads)]
    trial_levels = design.trial_spread * _autocorrelated(len(trials), design.trial_autocorrelation, random)
    power = _squared_fields(design, len(trials), random)
    background = 10.0 ** (level / 10.0) * design.frequency_axis**-exponent
    power *= background.astype(np.float32)[:, None]
    power *= (10.0 ** (trial_levels / 10.0)).astype(np.float32)[:, None, None, None]
    labels = trials[design.column].to_numpy()
    for condition in design.trial_counts:
        if any(effect.condition == condition for effect in design.effects):
            gain = (10.0 ** (planted_decibels(design, condition, sizes=sizes) / 10.0)).astype(np.float32)
            for trial in np.flatnonzero(labels == condition):
                power[trial] *= gain
    return TrialPower(
        power,
        frequencies=design.frequency_axis,
        times=design.time_axis,
        channels=design.channels,
        trials=trials,
        subject=subject,
        power_unit="µV²/Hz",
        wavelet_cycles=design.wavelet_cycles,
        scaling="density",
    )


class SimulatedStudy:
    """All subjects of a design, one at a time, as often as asked."""

    def __init__(self, design: StudyDesign) -> None:
        self.design = design

    @property
    def subjects(self) -> tuple[str, ...]:
        """Subjects in order."""
        return self.design.subjects

    def __len__(self) -> int:
        return len(self.design.subjects)

    def __iter__(self) -> Iterator[TrialPower]:
        for subject in self.design.subjects:
            yield simulate_subject(self.design, subject)


def simulate_study(design: StudyDesign) -> SimulatedStudy:
    """All subjects of a design, for every argument that takes `powers`; made anew in each pass, one in memory."""
    return SimulatedStudy(design)


def _trial_table(design: StudyDesign, random: np.random.Generator) -> pd.DataFrame:
    labels: list[str] = []
    for condition, (least, most) in design.trial_counts.items():
        labels += [condition] * int(random.integers(least, most + 1))
    order = random.permutation(len(labels))
    blocks = np.arange(len(labels)) * design.blocks // max(len(labels), 1) + 1
    return pd.DataFrame({design.column: [labels[place] for place in order], "block": blocks})


def _autocorrelated(count: int, correlation: float, random: np.random.Generator) -> NDArray[np.float64]:
    """A stationary first-order series of unit variance."""
    steps = random.standard_normal(count)
    series = np.empty(count)
    previous = 0.0
    for place, step in enumerate(steps):
        previous = step if place == 0 else correlation * previous + np.sqrt(1.0 - correlation**2) * step
        series[place] = previous
    return series


def _squared_fields(design: StudyDesign, trials: int, random: np.random.Generator) -> NDArray[np.float32]:
    """(trials, channels, frequencies, times): squared modulus of smooth complex Gaussian fields, mean 1."""
    frequencies, times, channels = design.frequency_axis, design.time_axis, len(design.channels)
    step = typical_step(times) or 1.0
    widths = design.wavelet_cycles / (2.0 * np.pi * frequencies)
    margin = int(np.ceil(MARGIN * widths.max() / step))
    length = times.size + 2 * margin
    mixing = _frequency_mixing(frequencies, design.wavelet_cycles)
    kernels = [_time_smoothing(times.size, margin, step, width) for width in widths]
    power = np.empty((trials, channels, frequencies.size, times.size), dtype=np.float32)
    for trial in range(trials):  # one trial at a time: its noise stays in the processor's cache
        noise = random.standard_normal((2, channels, frequencies.size, length), dtype=np.float32)
        if design.shared:
            common = random.standard_normal((2, 1, frequencies.size, length), dtype=np.float32)
            noise *= np.float32(np.sqrt(1.0 - design.shared))
            noise += np.float32(np.sqrt(design.shared)) * common
        mixed = np.matmul(mixing, noise)
        for place, (first, last, kernel) in enumerate(kernels):
            parts = mixed[:, :, place, first:last] @ kernel
            # Real and imaginary part have a variance of one each.
            power[trial, :, place] = 0.5 * (parts[0] ** 2 + parts[1] ** 2)
    return power


def _frequency_mixing(frequencies: NDArray[np.float64], cycles: float) -> NDArray[np.float32]:
    """(frequencies, frequencies): neighbours closer than a wavelet's bandwidth f/cycles share their noise."""
    distance = (np.log(frequencies)[:, None] - np.log(frequencies)[None, :]) * cycles
    mixing = np.exp(-0.5 * distance**2)
    return np.asarray(mixing / np.sqrt(np.sum(mixing**2, axis=1, keepdims=True)), dtype=np.float32)


def _time_smoothing(times: int, margin: int, step: float, width: float) -> tuple[int, int, NDArray[np.float32]]:
    """First and last noise sample used, and the (used, times) kernel: a Gaussian of the wavelet's envelope width."""
    reach = min(margin, int(np.ceil(MARGIN * width / step)))
    used = np.arange(times + 2 * reach) - reach
    distance = (used[:, None] - np.arange(times)[None, :]) * (step / width)
    kernel = np.exp(-0.5 * distance**2)
    kernel /= np.sqrt(np.sum(kernel**2, axis=0, keepdims=True))
    first = margin - reach
    return first, first + used.size, np.ascontiguousarray(kernel, dtype=np.float32)
