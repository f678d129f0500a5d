"""Single trials in a relative unit."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.foundations.axes import closed_window, label_positions, label_text
from tfstats.foundations.errors import Problems, refusal
from tfstats.foundations.units import symbol_of
from tfstats.normalization.baseline_choice import Baseline
from tfstats.normalization.baseline_window import baseline_samples, no_finite_baseline
from tfstats.normalization.power_blocks import read_windows, whole_blocks
from tfstats.normalization.reference_rows import reference_rows
from tfstats.normalization.relative_values import relative_trial_values
from tfstats.normalization.trial_labels import checked_columns, trial_labels
from tfstats.normalization.window_statistics import TrialWindows, references_from_trials, trial_runs

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["HEAVY_TAIL", "RelativeTrials", "normalized_trials"]

HEAVY_TAIL = (
    "Each trial was divided by its own short baseline, a noisy number: such values have a heavy right tail "
    "(Grandchamp & Delorme 2011)."
)


class RelativeTrials:
    """One subject's trials in a relative unit; made by `normalized_trials`.

    Attributes
    ----------
    values : array (trials, channels, frequencies, times)
        Any sign, in `unit`; NaN where not estimable.
    frequencies, times : arrays
        Hz; s.
    channels : tuple of str
    trials : DataFrame
        One row a trial, in the order of recording.
    subject, unit : str
    baseline : Baseline or None
    history, cautions : tuple of str
        What was done, for a methods paragraph, and what to mind.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_subject
    >>> power = simulate_subject(lamp_sequences(), "01").select(frequencies=(4, 8))
    >>> trials = tfs.normalized_trials(power, tfs.Baseline((-0.5, -0.2), order="trial_first"))
    >>> trials.unit, trials.values.shape == power.values.shape
    ('decibel', True)
    """

    def __init__(
        self,
        values: NDArray[Any],
        *,
        frequencies: NDArray[np.float64],
        times: NDArray[np.float64],
        channels: Sequence[str],
        trials: pd.DataFrame,
        subject: str,
        unit: str,
        baseline: Baseline | None = None,
        wavelet_cycles: Any = None,
        scaling: str | None = None,
        history: Iterable[str] = (),
        cautions: Iterable[str] = (),
    ) -> None:
        self.values = values
        self.frequencies = frequencies
        self.times = times
        self.channels = tuple(channels)
        self.trials = trials.reset_index(drop=True)
        self.subject = subject
        self.unit = unit
        self.baseline = baseline
        self.wavelet_cycles = wavelet_cycles
        self.scaling = scaling
        self.history = tuple(history)
        self.cautions = tuple(cautions)
        problems = Problems()
        for axis, (name, length) in enumerate(
            (
                ("trials", len(self.trials)),
                ("channels", len(self.channels)),
                ("frequencies", len(frequencies)),
                ("times", len(times)),
            )
        ):
            if values.ndim != 4 or values.shape[axis] != length:
                problems.add(
                    f"relative trials, {name}",
                    f"as many as axis {axis} of the values has",
                    f"{length} for values of shape {values.shape}",
                    "order the values as (trials, channels, frequencies, times)",
                )
        problems.raise_if_any()

    def __repr__(self) -> str:
        trials, channels, frequencies, times = self.values.shape
        return (
            f"<RelativeTrials subject {self.subject}: {trials} trials x {channels} channels x "
            f"{frequencies} frequencies x {times} times, {symbol_of(self.unit)}>"
        )

    def select(
        self,
        *,
        trials: Any = None,
        channels: Iterable[object] | None = None,
        frequencies: Sequence[float] | None = None,
        times: Sequence[float] | None = None,
    ) -> RelativeTrials:
        """A part: trials by position, a bool a trial or labels by column, channels by name, closed windows (low, high).

        Raises
        ------
        InputError
            Labels that are not there, windows that hold no point; all mistakes at once.
        """
        problems = Problems()
        rows = np.arange(len(self.trials))
        if trials is not None:
            with problems.gathering():
                rows = _trial_positions(trials, self.trials, self.subject)
        places = list(range(len(self.channels)))
        if channels is not None:
            with problems.gathering():
                places = label_positions(channels, self.channels, "select, channels", of="channel")
        windows = [slice(None), slice(None)]
        for axis, (name, window, unit) in enumerate((("frequencies", frequencies, "Hz"), ("times", times, "s"))):
            if window is not None:
                with problems.gathering():
                    windows[axis] = closed_window(getattr(self, name), window, f"select, {name}", unit)
        problems.raise_if_any()
        cycles = self.wavelet_cycles
        return RelativeTrials(
            self.values[:, :, windows[0], windows[1]][np.ix_(rows, np.array(places))],
            frequencies=self.frequencies[windows[0]],
            times=self.times[windows[1]],
            channels=[self.channels[place] for place in places],
            trials=self.trials.iloc[rows],
            subject=self.subject,
            unit=self.unit,
            baseline=self.baseline,
            wavelet_cycles=cycles[windows[0]] if np.size(cycles) > 1 else cycles,
            scaling=self.scaling,
            history=self.history,
            cautions=self.cautions,
        )


def _trial_positions(trials: Any, table: pd.DataFrame, subject: str) -> NDArray[np.int64]:
    where, count = "select, trials", len(table)
    if isinstance(trials, Mapping):
        chosen = np.ones(count, dtype=bool)
        for column, wanted in trials.items():
            several = isinstance(wanted, (list, tuple, set, frozenset, np.ndarray))
            texts = {label_text(one) for one in wanted} if several else {label_text(wanted)}
            labels = trial_labels(table, (str(column),), subject)
            chosen &= np.array([label in texts for label in labels], dtype=bool)
        if not chosen.any():
            words = ", ".join(f"{column} {wanted!r}" for column, wanted in trials.items())
            raise refusal(where, "labels that some trial has together", words, "choose other labels")
        return np.flatnonzero(chosen)
    chosen = np.asarray(trials)
    if chosen.dtype.kind == "b":
        if chosen.shape != (count,):
            raise refusal(
                where, f"one bool for each of the {count} trials", f"shape {chosen.shape}", "give one a trial"
            )
        return np.flatnonzero(chosen)
    if chosen.ndim != 1 or chosen.dtype.kind not in "iu" or np.any((chosen < 0) | (chosen >= count)):
        raise refusal(where, f"positions from 0 to {count - 1}, or a bool a trial", repr(trials), "count trials from 0")
    return chosen.astype(np.int64)


def normalized_trials(
    power: TrialPower, baseline: Baseline, *, by: str | Sequence[str] | None = None
) -> RelativeTrials:
    """What is each trial's power relative to a baseline?

    For comparisons of trials within one subject (`trialwise`).  Not for a second level: averages over trials come
    from `condition_maps`, where the order of averaging and dividing is part of the choice.

    Parameters
    ----------
    power : TrialPower
        Per-trial linear power of one subject.
    baseline : Baseline
        Order "trial_first" or "trial_by_reference".
    by : str or sequence of str, optional
        Trial column or columns that hold the condition; needed for reference "own" or "named" by
        "trial_by_reference".  Without it "pooled" is over all trials.

    Returns
    -------
    RelativeTrials
        float32 power gives float32 values; computed in float64.  Trials without a usable baseline are NaN.

    Raises
    ------
    InputError
        Order "average_first"; a missing column, condition or label; a baseline window outside the times or
        without a finite sample at any frequency.

    Notes
    -----
    No randomness.  Memory is that of the result and one block.  Values divided by a single trial's baseline have a
    heavy right tail (Grandchamp & Delorme 2011, Front. Psychol. 2:236).

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_subject
    >>> design = lamp_sequences()
    >>> power = simulate_subject(design, design.subjects[0])
    >>> tfs.normalized_trials(power, tfs.Baseline((-0.5, -0.2), order="trial_first")).unit
    'decibel'
    """
    _check_arguments(power, baseline, by)
    count = len(power.trials)
    window = baseline_samples(power, baseline)
    labels: list[str | None] = [None] * count
    if by is not None:
        labels = trial_labels(power.trials, checked_columns(by), power.subject)
    if baseline.reference == "own" and baseline.order == "trial_by_reference" and None in labels:
        raise refusal(
            f"subject {power.subject}, trials",
            "a condition for every trial",
            f"{labels.count(None)} trials without",
            'leave them out with select, or use reference "pooled"',
        )
    groups = None
    if baseline.within is not None:
        groups = trial_labels(power.trials, (baseline.within,), power.subject)
    rows = reference_rows(baseline, labels, np.ones(count, dtype=bool), groups, power.subject)
    of_trial = rows.of_trial
    windows = TrialWindows.for_baseline(baseline, power.values.shape[:3])
    references = windows.own_references((slice(None), slice(None), slice(None)))
    if baseline.unit != "none":
        read_windows(power, window, windows)
        if rows.members:
            references = references_from_trials(windows, rows)
        else:
            references = windows.own_references((slice(None), slice(None), slice(None)))
            of_trial = np.arange(count)
        usable = np.isfinite(references.level if references.spread is None else references.spread + references.level)
        if not usable.any():
            raise no_finite_baseline(power.subject, baseline, "the baseline")
    values = np.empty(power.values.shape, dtype=power.values.dtype)
    for place, block in whole_blocks(power):
        for some in trial_runs(block.shape):
            run = slice(place[0].start + some.start, place[0].start + some.stop)
            values[(run, *place[1:])] = relative_trial_values(
                block[some], baseline.unit, references, of_trial[run], place[1], place[2]
            )
    cautions = []
    if baseline.order == "trial_first" and baseline.unit != "none":
        cautions.append(HEAVY_TAIL)
    return RelativeTrials(
        values,
        frequencies=power.frequencies,
        times=power.times,
        channels=power.channels,
        trials=power.trials,
        subject=power.subject,
        unit="power" if baseline.unit == "none" else baseline.unit,
        baseline=baseline,
        wavelet_cycles=power.wavelet_cycles,
        scaling=power.scaling,
        history=(*power.notes, baseline.describe(averaged=False)),
        cautions=cautions,
    )


def _check_arguments(power: TrialPower, baseline: Baseline, by: object) -> None:
    from tfstats.power_files import TrialPower

    problems = Problems()
    if not isinstance(power, TrialPower):
        problems.add("normalized_trials", "the power of one subject", type(power).__name__, "give a TrialPower")
    if not isinstance(baseline, Baseline):
        problems.add("normalized_trials", "a Baseline", type(baseline).__name__, "make one with Baseline(...)")
        problems.raise_if_any()
    if baseline.order == "average_first":
        problems.add(
            "normalized_trials, order",
            'one of "trial_by_reference", "trial_first"',
            '"average_first", which is about averages',
            'set Baseline(order="trial_first") or use condition_maps',
        )
    if by is None and baseline.reference != "pooled" and baseline.order == "trial_by_reference":
        problems.add(
            "normalized_trials, by",
            f'the trial column with the conditions for reference "{baseline.reference}"',
            "None",
            'name it, or use reference "pooled"',
        )
    problems.raise_if_any()
