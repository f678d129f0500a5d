"""How power lies in a file: names, axes, contents and units, as the plan's `[input]` states them."""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from os import PathLike, fspath
from typing import Any

from tfstats.foundations.axes import label_text
from tfstats.foundations.checks import closest, one_of
from tfstats.foundations.errors import Problems, listed, refusal
from tfstats.power_files.trial_power import SCALINGS

__all__ = ["CONTENTS", "DIMENSIONS", "Layout", "TIME_UNITS", "assigned_axes", "quoted"]

DIMENSIONS = ("trial", "channel", "frequency", "time")
CONTENTS = ("linear_power", "amplitude", "complex", "decibel")
TIME_UNITS = ("s", "ms")
ROLES = ("power", "frequencies", "times", "channels", "subject", "power_unit", "scaling", "wavelet_cycles", "axes")
_KEEP_WORDS = ("at_least", "at_most", "one_of")


def quoted(names: Sequence[str]) -> str:
    """A list as it is written in a plan."""
    return "[" + ", ".join(f'"{name}"' for name in names) + "]"


@dataclass(frozen=True)
class Layout:
    """All layout keywords, checked; see `read_power`."""

    names: Mapping[str, str]
    axes: tuple[str, ...] | None = None
    contents: str = "linear_power"
    time_unit: str = "s"
    power_unit: str | None = None
    scaling: str | None = None
    wavelet_cycles: Any = None
    trial_table: str | None = None
    recode: Mapping[str, Mapping[str, str]] | None = None
    keep: Mapping[str, Mapping[str, Any]] | None = None
    frequencies: Any = None
    times: Any = None
    channels: Any = None

    @classmethod
    def of(cls, keywords: Mapping[str, Any], where: str) -> Layout:
        """Check the keywords, all mistakes at once."""
        problems, made = Problems(), {}
        known = [field.name for field in fields(cls)]
        for name in keywords:
            if name not in known:
                problems.add(
                    where,
                    f"layout keywords among {listed(known, most=20)}",
                    f'"{name}"',
                    f"{closest(name, known)}use one of them",
                )
        for name, value in keywords.items():
            if name in known and (value is not None or name == "names"):
                check = _CHECKS.get(name)
                with problems.gathering():
                    made[name] = value if check is None else check(value, where)
        problems.raise_if_any()
        made.setdefault("names", {})
        return cls(**made)

    def name(self, role: str) -> str:
        """Where a part lies in the file."""
        return self.names.get(role, role)


def _names(value: Any, where: str) -> dict[str, str]:
    if value is None:
        return {}
    if not isinstance(value, Mapping):
        raise refusal(
            f"{where}, names", "a mapping of part to name in the file", repr(value), 'write {"power": "dat.pow"}'
        )
    flat: dict[str, Any] = {}
    for role, name in value.items():
        if isinstance(name, Mapping):
            flat |= {f"{role}.{column}": inner for column, inner in name.items()}
        else:
            flat[str(role)] = name
    problems = Problems()
    for role, name in flat.items():
        if role not in (*ROLES, "trials") and not (role.startswith("trials.") and len(role) > 7):
            problems.add(
                f"{where}, names",
                f"parts among {listed((*ROLES, 'trials', 'trials.COLUMN'))}",
                f'"{role}"',
                f"{closest(role, ROLES)}use one of them",
            )
        elif not isinstance(name, str) or not name:
            problems.add(f"{where}, names, {role}", "the name in the file, as text", repr(name), "write its name")
    problems.raise_if_any()
    return flat


def _axes(value: Any, where: str) -> tuple[str, ...]:
    names = [value] if isinstance(value, str) else list(value)
    if len(set(names)) < len(names) or not names or any(name not in DIMENSIONS for name in names):
        raise refusal(
            f"{where}, axes",
            f"the names of the file's axes in order, each of {listed(DIMENSIONS)} once at most",
            quoted([str(name) for name in names]),
            f"write axes = {quoted(DIMENSIONS)} in the order of the file",
        )
    return tuple(names)


def _recode(value: Any, where: str) -> dict[str, dict[str, str]]:
    if not isinstance(value, Mapping) or not all(isinstance(one, Mapping) and one for one in value.values()):
        raise refusal(
            f"{where}, recode",
            "a mapping of trial column to {label: new label}",
            repr(value),
            'write {"memory": {"1": "recalled"}}',
        )
    return {
        str(column): {label_text(old): label_text(new) for old, new in labels.items()}
        for column, labels in value.items()
    }


def _keep(value: Any, where: str) -> dict[str, dict[str, Any]]:
    if not isinstance(value, Mapping):
        raise refusal(
            f"{where}, keep", "a mapping of trial column to what is kept", repr(value), 'write {"artefact": 0}'
        )
    problems, rules = Problems(), {}
    for column, rule in value.items():
        place = f"{where}, keep, {column}"
        if not isinstance(rule, Mapping):
            several = isinstance(rule, (list, tuple, set))
            rules[str(column)] = {"one_of": [label_text(one) for one in rule] if several else [label_text(rule)]}
            continue
        unknown = [str(word) for word in rule if word not in _KEEP_WORDS]
        if unknown or not rule:
            problems.add(place, f"a label, or some of {listed(_KEEP_WORDS)}", listed(unknown), "use these words")
            continue
        made: dict[str, Any] = {}
        for word, bound in rule.items():
            if word == "one_of":
                made[word] = [label_text(one) for one in ([bound] if isinstance(bound, str) else bound)]
            elif isinstance(bound, bool) or not isinstance(bound, (int, float)):
                problems.add(f"{place}, {word}", "a number", repr(bound), "write a number")
            else:
                made[word] = float(bound)
        rules[str(column)] = made
    problems.raise_if_any()
    return rules


def _path(value: Any, where: str) -> str:
    if not isinstance(value, (str, PathLike)):
        raise refusal(f"{where}, trial_table", "a path", repr(value), "write the path of a .tsv or .csv file")
    return str(fspath(value))


_CHECKS: dict[str, Any] = {
    "names": _names,
    "axes": _axes,
    "contents": lambda value, where: one_of(value, CONTENTS, f"{where}, contents"),
    "time_unit": lambda value, where: one_of(value, TIME_UNITS, f"{where}, time_unit"),
    "scaling": lambda value, where: one_of(value, SCALINGS, f"{where}, scaling"),
    "trial_table": _path,
    "recode": _recode,
    "keep": _keep,
}


def assigned_axes(
    shape: Sequence[int],
    lengths: Mapping[str, int | None],
    axes: Sequence[str] | None,
    where: str,
    *,
    stated: str = "axes",
) -> tuple[int | None, ...]:
    """Which axis of an array holds trials, channels, frequencies and times.

    Parameters
    ----------
    shape : of the array in the file
    lengths : dimension to its length, None where unknown
    axes : names of the file's axes, or None to tell them by their lengths
    where : how refusals begin
    stated : str
        What states the axes, for refusals.

    Returns
    -------
    tuple
        One axis number a dimension; None where the file has no such axis because its length is 1.
    """
    if axes is not None:
        return _stated(shape, lengths, axes, where, stated)
    long_axes = [axis for axis, length in enumerate(shape) if length != 1]
    found: dict[tuple[int | None, ...], None] = {}
    if len(long_axes) <= 4:
        for chosen in itertools.permutations(DIMENSIONS, len(long_axes)):
            place = dict(zip(chosen, long_axes))
            fits = all(
                lengths[name] in (None, shape[place[name]]) if name in place else lengths[name] in (None, 1)
                for name in DIMENSIONS
            )
            if fits:
                found[tuple(place.get(name) for name in DIMENSIONS)] = None
    if len(found) == 1:
        return next(iter(found))
    if found:
        candidates = " or ".join(quoted(_in_file_order(one)) for one in found)
        raise refusal(
            where,
            "axes that their lengths tell apart",
            f"shape {tuple(shape)}, which may be {candidates}",
            "set axes under [input] to the right one",
        )
    raise refusal(
        where,
        f"axes of {_lengths_in_words(lengths)}",
        f"shape {tuple(shape)}",
        "check which arrays [input.names] gives for power, frequencies, times and channels",
    )


def _in_file_order(assignment: Sequence[int | None]) -> list[str]:
    pairs = [(axis, name) for axis, name in zip(assignment, DIMENSIONS) if axis is not None]
    return [name for _, name in sorted(pairs)]


def _lengths_in_words(lengths: Mapping[str, int | None]) -> str:
    plural = {"trial": "trials", "channel": "channels", "frequency": "frequencies", "time": "times"}
    known = [f"{length} {plural[name]}" for name, length in lengths.items() if length is not None]
    unknown = [plural[name] for name, length in lengths.items() if length is None]
    return ", ".join([*known, *(f"any number of {name}" for name in unknown)])


def _stated(
    shape: Sequence[int], lengths: Mapping[str, int | None], axes: Sequence[str], where: str, stated: str
) -> tuple[int | None, ...]:
    numbers = list(range(len(shape)))
    if len(axes) < len(shape):
        numbers = [axis for axis in numbers if shape[axis] != 1]
    # MATLAB drops axes of length 1 at the end: what is stated beyond the shape has that length.
    if len(numbers) > len(axes):
        raise refusal(
            where, f"{len(axes)} axes, {quoted(axes)}", f"shape {tuple(shape)}", f"give each axis its name in {stated}"
        )
    place: dict[str, int | None] = dict(zip(axes, numbers))
    problems = Problems()
    for name in DIMENSIONS:
        axis = place.get(name)
        got = 1 if axis is None else shape[axis]
        if lengths[name] is not None and got != lengths[name]:
            at = "no such axis" if axis is None else f"{got} (axis {axis} of shape {tuple(shape)})"
            problems.add(f"{where}, axis {name}", f"length {lengths[name]}", at, f"correct {stated} = {quoted(axes)}")
    problems.raise_if_any()
    return tuple(place.get(name) for name in DIMENSIONS)
