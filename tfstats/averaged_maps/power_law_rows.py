"""Exponent and level of the power law as maps of one point, so that contrasts work on them as on a band."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.averaged_maps.maps_of_conditions import ConditionMaps
from tfstats.foundations.axes import closed_window, label_text
from tfstats.foundations.errors import Problems, refusal
from tfstats.normalization.power_law import PowerLawFit, fit_power_law, kept_frequencies, scaling_problem
from tfstats.normalization.trial_labels import JOINT
from tfstats.normalization.window_statistics import masked_mean

__all__ = ["EXPONENT", "LEVEL", "PowerLawMaps", "power_law_maps"]

EXPONENT, LEVEL = "exponent", "log10 power"
WHERE = "power_law_maps"


@dataclass(frozen=True)
class PowerLawMaps:
    """The power law of each subject, condition and channel; each part stands at 1 Hz and the middle of the windows.

    Parameters
    ----------
    exponent, level : ConditionMaps
        Units "exponent" and "log10 power" (at 1 Hz).
    fit_quality : ConditionMaps
        R squared.
    residual_spread : ConditionMaps
        dB.
    bend_frequency : ConditionMaps or None
        Hz; None where no bend was asked for.
    """

    exponent: ConditionMaps
    level: ConditionMaps
    fit_quality: ConditionMaps
    residual_spread: ConditionMaps
    bend_frequency: ConditionMaps | None


def power_law_maps(
    maps: ConditionMaps,
    windows: Sequence[float] | Mapping[str, Sequence[float]],
    *,
    exclude: Sequence[Sequence[float]] = (),
    bend: bool = False,
) -> PowerLawMaps:
    """How steep, and how high, is the 1/f spectrum of each subject in each condition?

    The parts are ConditionMaps of one frequency and one time: `paired`, `between_groups`, `slope` and the other designs
    take them as they take a band.

    Parameters
    ----------
    maps : ConditionMaps
        Averaged linear power, unit "power" (`condition_maps` with `Baseline(unit="none")`), with known scaling.
    windows : (start, stop) in s, or mapping of name to (start, stop)
        Power is averaged over each closed window before the fit.  A mapping such as {"baseline": (-0.5, -0.2),
        "activity": (0.2, 1.0)} gives the conditions "recalled/baseline", "recalled/activity" and so on.
    exclude, bend : as in `fit_power_law`

    Returns
    -------
    PowerLawMaps

    Raises
    ------
    InputError
        Maps in another unit or of differences, unknown scaling, a window that holds no point, too few frequencies; all
        mistakes at once.

    Notes
    -----
    No randomness.  With scaling "amplitude" the exponent is that of the density (1 is added, and the wavelets' cycles
    are taken into account where the maps know them).  The level of few trials lies low by the bias of a logarithm
    (`tfstats.normalization.decibel_bias_of_mean`); the exponent does not mind.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_study
    >>> powers = simulate_study(lamp_sequences(subjects=3))
    >>> maps = tfs.condition_maps(powers, "memory", tfs.Baseline(unit="none"))
    >>> rows = tfs.power_law_maps(maps, {"baseline": (-0.5, -0.2), "activity": (0.2, 0.8)}, exclude=[(8, 13)])
    >>> rows.exponent.conditions
    ('missed/baseline', 'missed/activity', 'recalled/baseline', 'recalled/activity')
    >>> tfs.paired(rows.exponent, "recalled/activity", "recalled/baseline").estimate_unit
    'exponent'
    """
    named = _checked(maps, windows, exclude)
    several = isinstance(windows, Mapping)
    spectra, centres = [], []
    for part in named.values():
        spectra.append(_mean_over_times(maps.values[..., part]))
        centres.append((maps.times[part][0] + maps.times[part][-1]) / 2)
    # (subjects, conditions, windows, channels, frequencies)
    power = np.stack(spectra, axis=2)
    fit = fit_power_law(
        power,
        maps.frequencies,
        scaling=maps.scaling,
        exclude=exclude,
        bend=bend,
        wavelet_cycles=maps.wavelet_cycles if maps.scaling == "amplitude" else None,
    )
    conditions = maps.conditions
    if several:
        conditions = tuple(f"{condition}{JOINT}{name}" for condition in maps.conditions for name in named)
    counts = maps.trial_counts
    common: dict[str, Any] = {
        "subjects": maps.subjects,
        "conditions": conditions,
        "channels": maps.channels,
        "frequencies": [1.0],
        "times": [float(np.mean(centres))],
        "trial_counts": None if counts is None else np.repeat(counts.to_numpy(), len(named), axis=1),
        "participants": maps.participants,
        "history": (*maps.history, _in_words(maps, named, fit, exclude, bend)),
        "cautions": maps.cautions,
        "scaling": "density",
    }

    def made(values: Any, unit: str) -> ConditionMaps:
        array = np.asarray(values).reshape(len(maps.subjects), len(conditions), len(maps.channels), 1, 1)
        return ConditionMaps(array, unit=unit, **common)

    return PowerLawMaps(
        made(fit.exponent, EXPONENT),
        made(fit.level_at_1_hz, LEVEL),
        made(fit.fit_quality, "R squared"),
        made(fit.residual_spread, "dB"),
        None if fit.bend_frequency is None else made(fit.bend_frequency, "Hz"),
    )


def _checked(
    maps: ConditionMaps, windows: Sequence[float] | Mapping[str, Sequence[float]], exclude: Sequence[Sequence[float]]
) -> dict[str, slice]:
    if not isinstance(maps, ConditionMaps):
        raise refusal(f"{WHERE}, maps", "ConditionMaps", type(maps).__name__, "make them with condition_maps")
    problems = Problems()
    if maps.unit != "power" or maps.of_differences:
        got = "differences of power" if maps.of_differences else f'unit "{maps.unit}"'
        problems.add(
            f"{WHERE}, maps",
            'averaged linear power (unit "power")',
            got,
            'average with Baseline(unit="none"); a power law is divided out by a baseline',
        )
    if maps.scaling is None:
        problems.found.append(str(scaling_problem(WHERE)))
    with problems.gathering():
        kept_frequencies(maps.frequencies, exclude, WHERE)
    named: dict[str, slice] = {}
    given = windows if isinstance(windows, Mapping) else {"": windows}
    if not given:
        problems.add(f"{WHERE}, windows", "at least one window", "none", "give (start, stop) in s")
    for name, window in given.items():
        place = f'{WHERE}, window "{name}"' if isinstance(windows, Mapping) else f"{WHERE}, window"
        with problems.gathering():
            named[label_text(name)] = closed_window(maps.times, window, place, "s")
    problems.raise_if_any()
    return named


def _mean_over_times(values: NDArray[Any]) -> NDArray[np.float64]:
    return masked_mean(values.astype(np.float64), axis=-1)


def _in_words(
    maps: ConditionMaps,
    named: Mapping[str, slice],
    fit: PowerLawFit,
    exclude: Sequence[Sequence[float]],
    bend: bool,
) -> str:
    spans = [
        f"{name + ': ' if name else ''}{maps.times[part][0]:g} to {maps.times[part][-1]:g} s"
        for name, part in named.items()
    ]
    without = ""
    if len(exclude):
        without = ", without " + " and ".join(f"{low:g} to {high:g} Hz" for low, high in exclude)
    model = "a line (median of all pairwise slopes)"
    if bend:
        model += ", or a power law with a bend where that was better,"
    return (
        f"Power was averaged over time ({'; '.join(spans)}) and {model} was fitted to log10 power over log10 frequency from "
        f"{fit.frequencies[0]:g} to {fit.frequencies[-1]:g} Hz{without}; the exponent is minus its slope, the level its "
        "height at 1 Hz."
    )
