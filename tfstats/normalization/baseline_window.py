"""The baseline window on the time axis of one subject."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.axes import closed_window, typical_step
from tfstats.foundations.errors import InputError, refusal
from tfstats.normalization.baseline_choice import Baseline

if TYPE_CHECKING:
    from tfstats.power_files import TrialPower

__all__ = ["baseline_samples", "no_finite_baseline", "window_samples"]


def baseline_samples(power: TrialPower, baseline: Baseline) -> slice:
    """The samples of the window; a window that reaches more than a step beyond the times is refused."""
    if baseline.unit == "none":
        return slice(0, 0)
    return window_samples(np.asarray(power.times), baseline, f"subject {power.subject}, baseline window")


def window_samples(times: NDArray[np.float64], baseline: Baseline, where: str) -> slice:
    """The samples of the window on a time axis."""
    low, high = baseline.window
    step = typical_step(times)
    # A little more than a step, so that a window may end halfway to the next sample that was not kept.
    if low < times[0] - 1.001 * step or high > times[-1] + 1.001 * step:
        raise refusal(
            where,
            f"a window inside the times {times[0]:g} to {times[-1]:g} s",
            f"{low:g} to {high:g} s",
            "choose a window inside the data",
        )
    window = closed_window(times, baseline.window, where, "s")
    if baseline.unit == "z_score" and baseline.order != "trial_by_reference" and window.stop - window.start < 2:
        raise refusal(where, 'at least two samples for unit "z_score"', "one", "widen the window or take another unit")
    return window


def no_finite_baseline(subject: str, baseline: Baseline, of: str) -> InputError:
    """The refusal of a window without any usable sample at any frequency."""
    usable = "finite power that varies" if baseline.unit == "z_score" else "finite power"
    return refusal(
        f"subject {subject}, baseline window",
        f"{usable} from {baseline.window[0]:g} to {baseline.window[1]:g} s in {of} at one frequency at least",
        "none at any frequency",
        "choose a window where power is known (wavelets leave the ends of a trial empty)",
    )
