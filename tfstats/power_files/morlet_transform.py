"""morlet_power: from raw trials to per-trial power."""

from __future__ import annotations

from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import scipy.fft
from numpy.typing import ArrayLike, NDArray

from tfstats.foundations.axes import checked_frequencies, checked_labels, label_text
from tfstats.foundations.checks import closest, count
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.foundations.thread_count import usable_threads
from tfstats.kernels import spectral_bands
from tfstats.power_files.trial_power import TrialPower

__all__ = ["EDGE_SIGMAS", "morlet_power"]

EDGE_SIGMAS = 3.0
"""Times closer than this many sigma_t to either end of the trial are NaN."""

_SPECTRAL_SIGMAS = 6.0
"""Beyond this many sigma_f a wavelet's spectrum is below 2e-8 of its peak: power below 3e-16."""

_BATCH_VALUES = 2**15
"""Complex values of one batch of short transforms: half a MiB at most, which stays in the processor's cache."""


@dataclass(frozen=True)
class _Plan:
    """What the transform needs, computed once for all signals."""

    samples: int
    every: int
    kept: int
    length: int
    """Of the padded transform; a multiple of `every`."""
    bands: list[tuple[int, NDArray[np.float64]]]
    """Each wavelet's spectrum: the first bin where it is not zero, and its values from there, scaled for density."""
    unknown: NDArray[np.bool_]
    """(frequencies, kept): too close to an end."""


def morlet_power(
    signals: ArrayLike,
    *,
    sampling_rate: float,
    start: float,
    frequencies: ArrayLike,
    wavelet_cycles: ArrayLike,
    channels: Iterable[object],
    trials: pd.DataFrame,
    subject: object,
    every: int = 1,
    subtract_average_by: str | None = None,
) -> TrialPower:
    """Time-frequency power of raw trials by complex Morlet wavelets.

    Parameters
    ----------
    signals : array (trials, channels, samples)
        In any unit; the power's is its square per Hz.  float32 gives float32.  A trial and channel that holds a NaN
        becomes NaN.
    sampling_rate : float, Hz
    start : float, s
        Time of sample 0 relative to the event.
    frequencies : array, Hz
        Below half the sampling rate.
    wavelet_cycles : float or array
        n: one number, or one a frequency.  sigma_t = n / (2 pi f), sigma_f = f / n.
    channels : sequence of str
    trials : pandas.DataFrame
        One row a trial.
    subject : str
    every : int
        Keep each k-th time.  The kept values are the same; time and memory go down.
    subtract_average_by : str, optional
        A trial column.  The average signal over the trials of each label is subtracted first, which leaves the
        induced power.  It lowers the power of n trials by 1/n on average, the same in all times.

    Returns
    -------
    TrialPower
        scaling "density".  NaN closer than 3 sigma_t to either end, where the wavelet would reach beyond the trial.

    Raises
    ------
    InputError
        Frequencies at or above half the sampling rate, wavelets longer than the trial, signals that do not vary,
        groups of a single trial with `subtract_average_by`; all mistakes at once.

    Notes
    -----
    The mean of each trial is taken out first.  Then the signal x is convolved with the wavelet of frequency f,

        w(t) = A exp(-t^2 / (2 sigma_t^2)) exp(2 pi i f t),

    where A gives it unit energy: the sum of |w|^2 over samples, divided by the sampling rate, is 1.  The power is

        2 |sum over s of x(s) w(t - s) / sampling_rate|^2,

    which estimates the one-sided power spectral density: white noise of variance V has the expected power
    2 V / sampling_rate at every frequency.  Beyond the ends the signal counts as zero.  With fewer than about
    3 cycles a wavelet is not blind to slow drifts (its spectrum at 0 Hz is exp(-n^2 / 2) of its peak): filter them out first.

    Cost: one FFT for each trial and channel, and one inverse FFT of 1/every of its length for each frequency; in as many
    threads as this process may use CPUs (lowered by OMP_NUM_THREADS), with the same bytes for any number.

    References
    ----------
    Tallon-Baudry et al. 1996, J. Neurosci. 16:4240 (Morlet wavelets, 3 sigma); Kronland-Martinet et al. 1987.

    Examples
    --------
    >>> import numpy as np, pandas as pd, tfstats as tfs
    >>> seconds = np.arange(1000) / 250
    >>> signals = np.sin(2 * np.pi * 10 * seconds)[None, None]
    >>> power = tfs.morlet_power(signals, sampling_rate=250, start=-1.0, frequencies=[8, 10, 12], wavelet_cycles=7,
    ...     channels=["Oz"], trials=pd.DataFrame({"memory": ["recalled"]}), subject="S1", every=5)
    >>> float(power.frequencies[np.nanmax(power.values[0, 0], axis=1).argmax()])
    10.0
    """
    name = label_text(subject)
    where = f"morlet_power, subject {name}"
    problems = Problems()
    array: Any = np.empty((0, 0, 0))
    with problems.gathering():
        array = _checked_signals(signals, where)
    with problems.gathering():
        names = checked_labels(channels, f"{where}, channels", of="channel")
    with problems.gathering():
        wanted = checked_frequencies(frequencies, f"{where}, frequencies")
    with problems.gathering():
        step = count(every, f"{where}, every")
    rate = _number(sampling_rate)
    if not rate > 0:
        problems.add(
            f"{where}, sampling_rate", "a number above 0, in Hz", repr(sampling_rate), "give the sampling rate"
        )
    if not np.isfinite(_number(start)):
        problems.add(f"{where}, start", "the time of the first sample, in s", repr(start), "give a number")
    if not isinstance(trials, pd.DataFrame):
        problems.add(f"{where}, trials", "a DataFrame with one row a trial", type(trials).__name__, "make one")
    problems.raise_if_any()
    for axis, (part, length) in enumerate((("trials", len(trials)), ("channels", len(names)))):
        if array.shape[axis] != length:
            problems.add(
                f"{where}, {part}",
                f"as many as axis {axis} of the signals has, {array.shape[axis]}",
                length,
                "order the signals as (trials, channels, samples)",
            )
    with problems.gathering():
        cycles = _checked_cycles(wavelet_cycles, wanted, where)
        _check_reach(wanted, cycles, rate, array.shape[2], where)
    problems.raise_if_any()
    _check_variation(array, names, where)
    notes = [_in_words(wanted, cycles, names, step, rate)]
    if subtract_average_by is not None:
        array = _without_average(array, trials, subtract_average_by, where)
        notes.append(
            f"The average signal over trials of the same {subtract_average_by} was subtracted (induced power)."
        )
    plan = _planned(array.shape[2], rate, wanted, cycles, step)
    return TrialPower(
        _transformed(array, plan),
        frequencies=wanted,
        times=_number(start) + np.arange(plan.kept) * (step / rate),
        channels=names,
        trials=trials,
        subject=name,
        wavelet_cycles=cycles,
        scaling="density",
        notes=notes,
    )


def _number(value: Any) -> float:
    try:
        return float(value)
    except (TypeError, ValueError):
        return float("nan")


def _checked_signals(signals: ArrayLike, where: str) -> Any:
    place = f"{where}, signals"
    try:
        array = np.asarray(signals)
    except ValueError as error:
        raise refusal(
            place, "an array (trials, channels, samples)", "rows of unequal length", "cut the trials to one length"
        ) from error
    if array.dtype.kind not in "fiu":
        raise refusal(place, "real numbers", f"type {array.dtype}", "give the raw signals")
    if array.ndim != 3 or 0 in array.shape:
        raise refusal(place, "an array (trials, channels, samples)", f"shape {array.shape}", "add axes of length one")
    array = array if array.dtype == np.float32 else array.astype(np.float64, copy=False)
    infinite = int(np.count_nonzero(np.isinf(array)))
    if infinite:
        raise refusal(place, "finite numbers or NaN", f"{infinite} infinite", "set what is not known to NaN")
    return array


def _checked_cycles(cycles: ArrayLike, frequencies: NDArray[np.float64], where: str) -> NDArray[np.float64]:
    try:
        array = np.asarray(cycles, dtype=np.float64).reshape(-1)
    except (TypeError, ValueError):
        array = np.empty(0)
    if array.size not in (1, frequencies.size) or not np.all(np.isfinite(array)) or not np.all(array >= 1):
        raise refusal(
            f"{where}, wavelet_cycles",
            f"one number of at least 1, or one for each of the {frequencies.size} frequencies",
            repr(cycles) if array.size < 5 else f"{array.size} numbers, smallest {array.min():g}",
            "give the cycles, 3 to 10 for instance",
        )
    return np.broadcast_to(array, frequencies.shape).copy()


def _check_reach(
    frequencies: NDArray[np.float64], cycles: NDArray[np.float64], rate: float, samples: int, where: str
) -> None:
    problems = Problems()
    above = frequencies[frequencies >= rate / 2]
    if above.size:
        problems.add(
            f"{where}, frequencies",
            f"frequencies below half the sampling rate, {rate / 2:g} Hz",
            f"{above.size} of them up to {above[-1]:g} Hz",
            "leave them out",
        )
    reach = 2 * EDGE_SIGMAS * cycles / (2 * np.pi * frequencies)
    duration = (samples - 1) / rate
    long = reach > duration
    if long.any():
        worst = int(np.argmax(reach))
        problems.add(
            f"{where}, wavelet_cycles",
            f"wavelets no longer than the trial of {duration:g} s",
            f"{np.count_nonzero(long)} that are, up to {reach[worst]:.3g} s (6 sigma_t) at {frequencies[worst]:g} Hz",
            "use fewer cycles, higher frequencies or longer trials",
        )
    problems.raise_if_any()


def _check_variation(signals: NDArray[Any], channels: tuple[str, ...], where: str) -> None:
    """A flat signal has no power; its 0 would be no logarithm."""
    flat = np.ptp(signals, axis=2) == 0
    if flat.any():
        trial, channel = (int(number) for number in np.argwhere(flat)[0])
        raise refusal(
            f"{where}, signals",
            "signals that vary",
            f"{np.count_nonzero(flat)} flat ones (first in trial {trial}, channel {channels[channel]})",
            "set them to NaN or leave them out",
        )


def _without_average(signals: NDArray[Any], trials: pd.DataFrame, column: str, where: str) -> NDArray[Any]:
    """Signals less the average over the trials with the same label, each over its finite trials."""
    place = f"{where}, subtract_average_by"
    present = [str(one) for one in trials.columns]
    if column not in present:
        raise refusal(
            place,
            f"a trial column among {listed(present)}",
            f'"{column}"',
            f"{closest(str(column), present)}use one of them",
        )
    labels = np.array(["" if pd.isna(cell) else label_text(cell) for cell in trials[column].tolist()])
    made = np.empty_like(signals)
    alone = []
    for label in dict.fromkeys(labels.tolist()):
        mine = np.flatnonzero(labels == label)
        if mine.size < 2:
            alone.append(label)
            continue
        group = signals[mine]
        known = ~np.isnan(group)
        total = np.where(known, group, 0.0).sum(axis=0, dtype=np.float64)
        made[mine] = group - total / np.maximum(known.sum(axis=0), 1)
    if alone:
        raise refusal(
            place,
            "at least two trials of each label",
            f"one of {listed(alone)}",
            "leave it out or choose another column",
        )
    return made


def _in_words(
    frequencies: NDArray[np.float64], cycles: NDArray[np.float64], channels: tuple[str, ...], every: int, rate: float
) -> str:
    span = f"{cycles.min():g}" if cycles.min() == cycles.max() else f"{cycles.min():g} to {cycles.max():g}"
    kept = "" if every == 1 else f", kept at {rate / every:g} Hz"
    return (
        f"Power was computed from raw trials by complex Morlet wavelets of unit energy ({span} cycles, "
        f"{frequencies.size} frequencies from {frequencies[0]:g} to {frequencies[-1]:g} Hz{kept}); times closer than "
        "3 sigma_t to either end of a trial were left out."
    )


def _planned(
    samples: int, rate: float, frequencies: NDArray[np.float64], cycles: NDArray[np.float64], every: int
) -> _Plan:
    sigma_t = cycles / (2 * np.pi * frequencies)
    # What is kept lies 3 sigma_t inside, so that with this padding whatever wraps around is 6 sigma_t away.
    padded = samples + int(np.ceil(EDGE_SIGMAS * float(sigma_t.max()) * rate))
    length = every * int(scipy.fft.next_fast_len(-(-padded // every)))
    spacing = rate / length
    bands = []
    for centre, sigma_f in zip(frequencies, frequencies / cycles):
        reach = _SPECTRAL_SIGMAS * sigma_f / spacing
        first, last = int(np.ceil(centre / spacing - reach)), int(np.floor(centre / spacing + reach))
        spectrum = np.exp(-((np.arange(first, last + 1) * spacing - centre) ** 2) / (2 * sigma_f**2))
        if spectrum.size > length:
            # A wavelet this short has a spectrum wider than the sampling rate, which sampling folds.
            spectrum = np.bincount(np.arange(first, last + 1) % length, weights=spectrum, minlength=length)
            first = 0
        # Unit energy by Parseval: sum |W|^2 / length = sampling_rate.  The root of 2 makes the density one-sided.
        # Divided by the length, since the transform back is taken without.
        spectrum *= np.sqrt(2.0 / rate) * np.sqrt(length / np.sum(spectrum**2)) / length
        bands.append((first, spectrum))
    place = np.arange(0, samples, every)
    to_end = np.minimum(place, samples - 1 - place) / rate
    unknown = to_end[None, :] < EDGE_SIGMAS * sigma_t[:, None] * (1 - 1e-12)
    return _Plan(samples, every, place.size, length, bands, unknown)


def _transformed(signals: NDArray[Any], plan: _Plan) -> NDArray[Any]:
    """(trials, channels, samples) -> power (trials, channels, frequencies, kept)."""
    trials, channels, samples = signals.shape
    rows = signals.reshape(trials * channels, samples)
    power = np.empty((rows.shape[0], len(plan.bands), plan.kept), dtype=signals.dtype)
    batch = min(max(1, _BATCH_VALUES // (plan.length // plan.every)), len(rows))
    bands = [(lowest, np.repeat(wavelet, 2).astype(rows.dtype)) for lowest, wavelet in plan.bands]

    def transform(first: int) -> None:
        _transform_batch(rows[first : first + batch], plan, bands, power[first : first + batch])

    # Each batch writes its own rows, and its arithmetic does not depend on who does it.
    with ThreadPoolExecutor(usable_threads()) as pool:
        for done in pool.map(transform, range(0, len(rows), batch)):
            assert done is None
    return power.reshape(trials, channels, len(plan.bands), plan.kept)


def _transform_batch(
    rows: NDArray[Any], plan: _Plan, bands: list[tuple[int, NDArray[Any]]], power: NDArray[Any]
) -> None:
    """Write the power (rows, frequencies, kept) of some signals (rows, samples)."""
    centred = rows - rows.mean(axis=1, keepdims=True, dtype=np.float64).astype(rows.dtype)
    spectra = scipy.fft.rfft(centred, plan.length, axis=1).view(rows.dtype)
    complex_kind = np.complex64 if rows.dtype == np.float32 else np.complex128
    folded = np.empty((len(rows), plan.length // plan.every), dtype=complex_kind)
    for number, (lowest, wavelet) in enumerate(bands):
        spectral_bands.folded_bands(spectra, lowest, wavelet, plan.length, folded.view(rows.dtype))
        # Only each k-th time of the long transform is computed, by a transform k times shorter.
        transforms = scipy.fft.ifft(folded, axis=1, norm="forward", overwrite_x=True)
        spectral_bands.squared_magnitudes(transforms.view(rows.dtype), number, power)
        power[:, number, plan.unknown[number]] = np.nan
