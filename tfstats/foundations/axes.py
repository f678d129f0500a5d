"""Frequency, time and label axes: what is accepted, and how closed windows pick their points."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from tfstats.foundations.errors import InputError, Problems, listed, refusal

__all__ = [
    "MILLISECOND_SUSPICION",
    "WINDOW_TOLERANCE",
    "checked_frequencies",
    "checked_labels",
    "checked_times",
    "closed_window",
    "label_positions",
    "label_text",
    "typical_step",
]

Floats = NDArray[np.float64]

WINDOW_TOLERANCE = 1e-6
"""Closed windows take points beyond their edge by up to this share of a step, for rounding in files."""

MILLISECOND_SUSPICION = 100.0
"""No trial lasts 100 s: times beyond it are milliseconds whose unit was not given."""


def label_text(value: object) -> str:
    """A condition, group or channel label as text: 2.0 becomes "2", logical true "1", bytes are decoded."""
    if isinstance(value, (bool, np.bool_)):
        return "1" if value else "0"
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace").strip()
    if isinstance(value, (float, np.floating)) and np.isfinite(value) and float(value).is_integer():
        return str(int(value))
    return str(value).strip()


def checked_labels(values: Iterable[object], where: str, *, of: str = "label") -> tuple[str, ...]:
    """Labels as text, none empty and none twice."""
    if isinstance(values, str):
        raise refusal(where, f"a list of {of}s", f'the single text "{values}"', f'write ["{values}"]')
    labels = tuple(label_text(value) for value in values)
    problems = Problems()
    if not labels:
        problems.add(where, f"at least one {of}", "none", f"give the {of}s")
    if any(not label for label in labels):
        problems.add(where, f"a name for every {of}", "an empty one", f"name every {of}")
    twice = [label for label, count in Counter(labels).items() if count > 1]
    if twice:
        problems.add(where, f"each {of} once", f"{listed(twice)} more than once", "rename or drop the repeated ones")
    problems.raise_if_any()
    return labels


def _axis(values: ArrayLike, where: str, unit: str) -> Floats:
    try:
        axis = np.array(values, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise refusal(where, f"numbers in {unit}", f"{type(values).__name__}", "give a one-dimensional list") from error
    if axis.ndim == 0:
        axis = axis.reshape(1)
    if axis.ndim != 1 or axis.size == 0:
        raise refusal(where, f"a one-dimensional list of numbers in {unit}", f"shape {axis.shape}", "flatten it")
    if not np.all(np.isfinite(axis)):
        raise refusal(
            where, "finite numbers", f"{np.count_nonzero(~np.isfinite(axis))} NaN or infinite", "mend the axis"
        )
    return axis


def checked_frequencies(values: ArrayLike, where: str = "frequencies") -> Floats:
    """Frequencies in Hz: positive and ascending, any spacing."""
    axis = _axis(values, where, "Hz")
    problems = Problems()
    if axis[0] <= 0:
        problems.add(where, "frequencies above 0 Hz", f"{axis.min():g}", "leave out 0 Hz and what lies below")
    if np.any(np.diff(axis) <= 0):
        problems.add(
            where, "ascending frequencies without repeats", _first_descent(axis), "sort the axis and the power with it"
        )
    problems.raise_if_any()
    return axis


def checked_times(values: ArrayLike, where: str = "times") -> Floats:
    """Times in s: ascending and even to within half a step; beyond 100 s they are probably milliseconds."""
    axis = _axis(values, where, "s")
    problems = Problems()
    if np.abs(axis).max() > MILLISECOND_SUSPICION:
        problems.add(
            where,
            f"seconds within {MILLISECOND_SUSPICION:g} of the event",
            f"{axis[0]:g} to {axis[-1]:g}, probably milliseconds",
            'set time_unit = "ms"',
        )
    steps = np.diff(axis)
    if np.any(steps <= 0):
        problems.add(
            where, "ascending times without repeats", _first_descent(axis), "sort the axis and the power with it"
        )
    elif steps.size and np.any(np.abs(axis - np.linspace(axis[0], axis[-1], axis.size)) > typical_step(axis) / 2):
        problems.add(
            where,
            "evenly spaced times (to within half a step)",
            f"steps from {steps.min():g} to {steps.max():g} s",
            "give the times of the samples, or resample the power to an even axis",
        )
    problems.raise_if_any()
    return axis


def _first_descent(axis: Floats) -> str:
    place = int(np.argmax(np.diff(axis) <= 0))
    return f"{axis[place]:g} followed by {axis[place + 1]:g}"


def typical_step(axis: Floats) -> float:
    """Median distance of neighbouring points; 0 for an axis of one point."""
    return float(np.median(np.diff(axis))) if axis.size > 1 else 0.0


def closed_window(axis: Floats, window: Sequence[float], where: str, unit: str) -> slice:
    """The points of an ascending axis inside a closed window, as a slice.

    The edges belong to the window; points beyond an edge by at most 1e-6 of the local step count as on it.
    """
    try:
        low, high = (float(edge) for edge in window)
    except (TypeError, ValueError) as error:
        raise refusal(where, f"two numbers, start and stop in {unit}", repr(window), "write both edges") from error
    if not low <= high:
        raise refusal(where, f"a start not after its stop, in {unit}", f"{low:g} to {high:g}", "exchange the two edges")
    steps = np.diff(axis)
    before = np.concatenate([steps[:1], steps]) if steps.size else np.zeros(1)
    after = np.concatenate([steps, steps[-1:]]) if steps.size else np.zeros(1)
    inside = (axis >= low - WINDOW_TOLERANCE * after) & (axis <= high + WINDOW_TOLERANCE * before)
    chosen = np.flatnonzero(inside)
    if chosen.size == 0:
        raise refusal(
            where,
            f"a window that holds at least one point of the axis {axis[0]:g} to {axis[-1]:g} {unit}",
            f"{low:g} to {high:g} {unit}",
            "choose a window inside the data",
        )
    return slice(int(chosen[0]), int(chosen[-1]) + 1)


def label_positions(wanted: Iterable[object], present: Sequence[str], where: str, *, of: str = "label") -> list[int]:
    """Positions of the wanted labels among those present; all that are missing are named together."""
    if isinstance(wanted, str):
        wanted = [wanted]
    names = [label_text(value) for value in wanted]
    missing = [name for name in names if name not in present]
    if missing:
        raise InputError(
            f"{where}: expected {of}s among {listed(present)}, got {listed(missing)}; use the spelling of the data."
        )
    return [list(present).index(name) for name in names]
