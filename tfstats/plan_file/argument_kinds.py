"""Of what kind an argument of a design must be, told from its annotation, so that a plan cannot hand over another."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

__all__ = ["KINDS", "expected_kind"]


def _is_label(value: Any) -> bool:
    return isinstance(value, (str, int, float))


def _is_number(value: Any) -> bool:
    return isinstance(value, (int, float)) and not isinstance(value, bool)


def _are_labels(value: Any) -> bool:
    return isinstance(value, list) and bool(value) and all(_is_label(one) for one in value)


KINDS: dict[str, tuple[str, str, Callable[[Any], bool]]] = {
    "str": ("one label or name", 'write "recalled" for instance', _is_label),
    "bool": ("true or false", "write one of them without quotes", lambda value: isinstance(value, bool)),
    "Sequence[str]": ("a list of labels or names", 'write ["recalled", "missed"] for instance', _are_labels),
    "Sequence[float]": (
        "a list of two numbers", "write [-0.5, -0.2] for instance",
        lambda value: isinstance(value, list) and len(value) == 2 and all(_is_number(one) for one in value),
    ),
    "Mapping[str, float]": (
        "a table of label to number", "write { recalled = 1, missed = -1 } for instance",
        lambda value: isinstance(value, dict) and bool(value) and all(_is_number(one) for one in value.values()),
    ),
    "Mapping[str, Sequence[str]]": (
        "a table of factor to its labels", 'write { load = ["2", "4"] } for instance',
        lambda value: isinstance(value, dict) and bool(value) and all(_are_labels(one) for one in value.values()),
    ),
}  # fmt: skip
"""By annotation: what is expected, how it is written, and whether a value fits."""


def expected_kind(annotation: object, value: Any) -> tuple[str, str] | None:
    """What was expected and what to do, when the value does not fit; None when it does."""
    kind = KINDS.get(str(annotation).removesuffix(" | None"))
    if kind is None or kind[2](value):
        return None
    return kind[0], kind[1]
