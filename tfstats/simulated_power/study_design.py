"""What a simulated study holds: axes, background, trials, and effects planted at a known place and size."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.axes import (
    WINDOW_TOLERANCE,
    checked_frequencies,
    checked_labels,
    checked_times,
    typical_step,
)
from tfstats.foundations.checks import one_of
from tfstats.foundations.errors import Problems, listed

__all__ = ["PlantedEffect", "StudyDesign", "planted_decibels"]

EDGES = ("smooth", "box")
TIME_RAMP = 0.1
"""s; outside the window, so that the window itself holds the full effect."""
BAND_RAMP = 0.25
"""Octaves; outside the band."""


@dataclass(frozen=True)
class PlantedEffect:
    """One change of power, of a known size at a known place.

    Parameters
    ----------
    condition : str
        The condition in which power changes.
    band : (low, high)
        Hz, closed.
    window : (start, stop)
        s, closed.
    channels : tuple of str
    decibels : float
        Change inside band and window, the same everywhere in them.
    spread : float
        SD of the change between subjects, in dB.
    edges : "smooth" or "box"
        "smooth": outside the band and window the change falls to nothing along half a cosine, within 0.25 octaves and
        0.1 s.  "box": at once.
    """

    condition: str
    band: tuple[float, float]
    window: tuple[float, float]
    channels: tuple[str, ...]
    decibels: float
    spread: float = 0.0
    edges: str = "smooth"

    def __post_init__(self) -> None:
        problems = Problems()
        with problems.gathering():
            one_of(self.edges, EDGES, "planted effect, edges")
        for name, (low, high) in (("band", self.band), ("window", self.window)):
            if not low <= high:
                problems.add(
                    f"planted effect, {name}", "a start not after its stop", f"{low:g} to {high:g}", "exchange them"
                )
        if self.spread < 0:
            problems.add("planted effect, spread", "a standard deviation of at least 0", self.spread, "give it in dB")
        problems.raise_if_any()

    def shape(self, frequencies: NDArray[np.float64], times: NDArray[np.float64]) -> NDArray[np.float64]:
        """(frequencies, times): 1 in the band and window, 0 away from them."""
        ramps = (BAND_RAMP, TIME_RAMP) if self.edges == "smooth" else (0.0, 0.0)
        low, high = np.log2(self.band)
        over_band = _plateau(np.log2(frequencies), low, high, ramps[0])
        return np.outer(over_band, _plateau(times, *self.window, ramps[1]))


def _plateau(axis: NDArray[np.float64], low: float, high: float, ramp: float) -> NDArray[np.float64]:
    distance = np.maximum(np.maximum(low - axis, axis - high), 0.0)
    slack = WINDOW_TOLERANCE * typical_step(axis)
    if ramp == 0.0:
        return (distance <= slack).astype(np.float64)
    share = np.clip((distance - slack) / ramp, 0.0, 1.0)
    return np.asarray(0.5 * (1.0 + np.cos(np.pi * share)))


@dataclass(frozen=True)
class StudyDesign:
    """A study to simulate; the same design and seed give the same numbers, subject by subject.

    Parameters
    ----------
    subjects, channels : tuple of str
    frequencies, times : tuple of float
        Hz; s.
    trial_counts : mapping of condition to (least, most)
        Trials of each condition; a number is drawn for each subject, uniformly.
    column : str
        Trial column that holds the condition.
    effects : tuple of PlantedEffect
    wavelet_cycles : float
        Smoothness of power: fields are as smooth in time as Morlet wavelets of so many cycles make them.
    exponent, exponent_spread : float
        Of the 1/f background: mean and SD over subjects.
    level_spread : float
        SD between subjects of overall power, dB.
    trial_spread : float
        SD over trials of overall power, dB.
    trial_autocorrelation : float
        Lag-1 autocorrelation of overall power over trials, 0 to below 1.
    shared : float
        Share of variance that the channels' fields have in common, 0 to below 1.
    blocks : int
        Trials fall into so many blocks of the session, in the column "block".
    seed : int

    Notes
    -----
    Power of a trial is the squared modulus of a complex Gaussian field, so scaled chi-square with 2 df at each point.
    Its autocorrelation over time is that of a Morlet transform of white noise, exp(-lag^2/(4 sigma_t^2)) in the field
    with sigma_t = cycles/(2 pi f).  The mean over trials is the 1/f background times the planted change.
    """

    subjects: tuple[str, ...]
    channels: tuple[str, ...]
    frequencies: tuple[float, ...]
    times: tuple[float, ...]
    trial_counts: Mapping[str, tuple[int, int]]
    column: str = "memory"
    effects: tuple[PlantedEffect, ...] = ()
    wavelet_cycles: float = 5.0
    exponent: float = 1.0
    exponent_spread: float = 0.0
    level_spread: float = 0.0
    trial_spread: float = 0.0
    trial_autocorrelation: float = 0.0
    shared: float = 0.0
    blocks: int = 1
    seed: int = 0
    frequency_axis: NDArray[np.float64] = field(init=False, repr=False, compare=False)
    time_axis: NDArray[np.float64] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        problems = Problems()
        for name in ("subjects", "channels"):
            with problems.gathering():
                object.__setattr__(
                    self, name, checked_labels(getattr(self, name), f"study design, {name}", of=name[:-1])
                )
        with problems.gathering():
            object.__setattr__(
                self, "frequency_axis", checked_frequencies(self.frequencies, "study design, frequencies")
            )
        with problems.gathering():
            object.__setattr__(self, "time_axis", checked_times(self.times, "study design, times"))
        self._check_trials(problems)
        self._check_effects(problems)
        for name, least, most in (
            ("wavelet_cycles", 0.0, np.inf),
            ("level_spread", 0.0, np.inf),
            ("trial_spread", 0.0, np.inf),
            ("exponent_spread", 0.0, np.inf),
            ("trial_autocorrelation", 0.0, 1.0),
            ("shared", 0.0, 1.0),
        ):
            value = getattr(self, name)
            if not (least < value if name == "wavelet_cycles" else least <= value) or not value < most:
                bottom = "above" if name == "wavelet_cycles" else "of at least"
                top = "" if most == np.inf else f" and below {most:g}"
                problems.add(f"study design, {name}", f"a number {bottom} {least:g}{top}", value, "choose another")
        problems.raise_if_any()

    def _check_trials(self, problems: Problems) -> None:
        for condition, (least, most) in self.trial_counts.items():
            if not 1 <= least <= most:
                problems.add(
                    f'study design, trials of "{condition}"',
                    "at least one, the smaller number first",
                    f"{least} to {most}",
                    "give (least, most)",
                )

    def _check_effects(self, problems: Problems) -> None:
        for effect in self.effects:
            absent = [name for name in effect.channels if name not in self.channels]
            if effect.condition not in self.trial_counts:
                problems.add(
                    "planted effect, condition",
                    f"one of {listed(self.trial_counts)}",
                    f'"{effect.condition}"',
                    "choose one",
                )
            if absent:
                problems.add(
                    "planted effect, channels",
                    f"channels among {listed(self.channels)}",
                    listed(absent),
                    "choose others",
                )


def planted_decibels(
    design: StudyDesign, condition: str, *, sizes: Sequence[float] | None = None
) -> NDArray[np.float64]:
    """How large is the planted change of a condition at each point?

    Parameters
    ----------
    design : StudyDesign
    condition : str
    sizes : sequence of float, optional
        Size in dB of each of the design's effects, instead of the mean over subjects.

    Returns
    -------
    array (channels, frequencies, times)
        dB; effects that overlap add up.

    Examples
    --------
    >>> from tfstats.simulated_power import lamp_sequences, planted_decibels
    >>> float(planted_decibels(lamp_sequences(), "recalled").max().round(6))
    1.6
    """
    change = np.zeros((len(design.channels), design.frequency_axis.size, design.time_axis.size))
    for number, effect in enumerate(design.effects):
        if effect.condition == condition:
            size = effect.decibels if sizes is None else sizes[number]
            places = [design.channels.index(name) for name in effect.channels]
            change[places] += size * effect.shape(design.frequency_axis, design.time_axis)
    return change
