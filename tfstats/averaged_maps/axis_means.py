"""Means of maps over channels, frequencies or times."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.axes import closed_window, label_positions
from tfstats.foundations.checks import one_of
from tfstats.foundations.errors import Problems, refusal
from tfstats.foundations.units import decibels

__all__ = ["AxisMean", "mean_over_axis"]

_AXIS_NUMBERS = {"channels": 2, "frequencies": 3, "times": 4}
_UNITS_OF_AXES = {"frequencies": "Hz", "times": "s"}
_OPTIONS = ("units", "ratios")


@dataclass(frozen=True)
class AxisMean:
    """What averaging over one axis gave."""

    values: NDArray[Any]
    labels: Any
    history: tuple[str, ...]


def mean_over_axis(
    values: NDArray[Any],
    axis: str,
    groups: Mapping[str, Sequence[Any]] | None,
    of: str,
    *,
    decibel: bool,
    channels: Sequence[str],
    frequencies: NDArray[np.float64],
    times: NDArray[np.float64],
) -> AxisMean:
    """Validate the groups, average each, and say in words what was done."""
    problems = Problems()
    with problems.gathering():
        one_of(axis, _AXIS_NUMBERS, "mean_across, axis")
    with problems.gathering():
        one_of(of, _OPTIONS, "mean_across, of")
    problems.raise_if_any()
    points: Any = {"channels": channels, "frequencies": frequencies, "times": times}[axis]
    members = _members(axis, points, groups)
    means, left_out = [], 0
    for positions in members.values():
        mean, missing = _mean_of_group(np.take(values, positions, axis=_AXIS_NUMBERS[axis]), axis, of, decibel)
        means.append(mean)
        left_out += missing
    labels: Any = list(members)
    if axis != "channels":
        labels = [float(np.mean(points[positions])) for positions in members.values()]
        if any(later <= earlier for earlier, later in zip(labels, labels[1:])):
            raise refusal(
                f"mean_across, {axis}",
                "groups in ascending order with different centres",
                ", ".join(f"{name} at {centre:g}" for name, centre in zip(members, labels)),
                "sort them, or average them one by one",
            )
    sentence = _in_words(axis, points, members, of, decibel)
    history = [sentence]
    if left_out:
        history.append(f"In that mean {left_out} points that were missing in a map were left out of every map alike.")
    return AxisMean(np.concatenate(means, axis=_AXIS_NUMBERS[axis]), labels, tuple(history))


def _members(axis: str, points: Any, groups: Mapping[str, Sequence[Any]] | None) -> dict[str, list[int]]:
    if groups is None:
        name = f"mean of {len(points)} channels" if axis == "channels" else "all"
        return {name: list(range(len(points)))}
    where = f"mean_across, {axis}"
    if not isinstance(groups, Mapping) or not groups:
        raise refusal(
            where, "a mapping of group name to members", repr(groups), 'write {"frontal": ["F3", "Fz"]} for instance'
        )
    members: dict[str, list[int]] = {}
    problems = Problems()
    for name, wanted in groups.items():
        place = f'{where}, group "{name}"'
        with problems.gathering():
            if axis == "channels":
                # dict.fromkeys: a channel named twice must not weigh twice.
                members[str(name)] = list(dict.fromkeys(label_positions(wanted, points, place, of="channel")))
                if not members[str(name)]:
                    problems.add(place, "at least one channel", "none", "name its channels")
            else:
                window = closed_window(points, wanted, place, _UNITS_OF_AXES[axis])
                members[str(name)] = list(range(len(points)))[window]
    problems.raise_if_any()
    return members


def _mean_of_group(part: NDArray[Any], axis: str, of: str, decibel: bool) -> tuple[NDArray[Any], int]:
    """The mean along the axis (kept with length one), and how many points were left out of all maps."""
    number = _AXIS_NUMBERS[axis]
    missing = np.isnan(part)
    left_out = 0
    if missing.any():
        # A map without any finite point of the group cannot say which points to leave out.
        silent = missing.all(axis=number, keepdims=True)
        dropped = (missing & ~silent).any(axis=(0, 1), keepdims=True)
        left_out = int(np.count_nonzero(dropped))
        weights = np.broadcast_to(~dropped, part.shape)
    else:
        weights = None
    exact = part.astype(np.float64)
    ratios = decibel and of == "ratios"
    if ratios:
        exact = 10.0 ** (exact / 10.0)
    if weights is None:
        mean = exact.mean(axis=number, keepdims=True)
    else:
        number_of_points = weights.sum(axis=number, keepdims=True)
        total = np.where(weights, exact, 0.0).sum(axis=number, keepdims=True)
        with np.errstate(invalid="ignore", divide="ignore"):
            mean = np.where(number_of_points > 0, total / number_of_points, np.nan)
    if ratios:
        mean = decibels(mean)
    return mean.astype(part.dtype), left_out


def _in_words(axis: str, points: Any, members: Mapping[str, list[int]], of: str, decibel: bool) -> str:
    groups = []
    for name, positions in members.items():
        if axis == "channels":
            inside = ", ".join(points[place] for place in positions)
        else:
            inside = f"{points[positions[0]]:g} to {points[positions[-1]]:g} {_UNITS_OF_AXES[axis]}"
        groups.append(f"{name}: {inside}" if len(members) > 1 or axis == "channels" or name != "all" else inside)
    what = "Relative values"
    if decibel:
        what = "Decibels" if of == "units" else "Ratios (turned back into decibels afterwards)"
    return f"{what} were averaged over {axis} ({'; '.join(groups)}), each point weighing the same."
