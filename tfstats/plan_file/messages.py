"""pydantic's findings as refusals of our own: file, line, key, what was expected, what was got, what to do."""

from __future__ import annotations

import json
import re
from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from tfstats.foundations.checks import closest
from tfstats.foundations.errors import listed, refusal_text
from tfstats.plan_file.line_numbers import KeyPath, line_of

__all__ = ["key_text", "place_text", "refusals_of", "shown"]

LONGEST_VALUE = 80

_EXPECTED = {
    "string_type": "a text",
    "float_type": "a number",
    "float_parsing": "a number",
    "int_type": "a whole number",
    "int_parsing": "a whole number",
    "int_from_float": "a whole number",
    "bool_type": "true or false",
    "bool_parsing": "true or false",
    "list_type": "a list",
    "tuple_type": "a list of two",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
    "string_too_short": "a text that is not empty",
    "too_short": "a list that is not empty",
    "too_long": "a list of two",
    "finite_number": "a finite number",
}

_BAND_EDGES = "two edges in Hz, or the names of two bands"


def key_text(path: KeyPath, data: dict[str, Any]) -> str:
    """`contrast "recalled against missed", first` from ("contrast", 0, "first")."""
    words: list[str] = []
    here: Any = data
    for part in path:
        if isinstance(part, int):
            entry = here[part] if isinstance(here, list) and part < len(here) else {}
            name = entry.get("name") if isinstance(entry, dict) else None
            words[-1] += f' "{name}"' if isinstance(name, str) else f" {part + 1}"
            here = entry
        else:
            words.append(part)
            here = here.get(part, {}) if isinstance(here, dict) else {}
    return ", ".join(words)


def place_text(file: str, path: KeyPath, data: dict[str, Any], lines: dict[KeyPath, int]) -> str:
    """`plan.toml, line 12, test, times`."""
    line = line_of(path, lines)
    where = f"{file}, line {line}" if line is not None else file
    key = key_text(path, data)
    return f"{where}, {key}" if key else where


def refusals_of(
    error: ValidationError, model: type[BaseModel], file: str, data: dict[str, Any], lines: dict[KeyPath, int]
) -> list[str]:
    """One sentence a mistake; the branches of a union that pydantic tries are one mistake."""
    said: dict[str, str] = {}
    for found in error.errors(include_url=False):
        path = _in_file(found["loc"], data)
        if path[:1] == ("band",) and "frequencies" in path and _value_at(path[:3], data) is not None:
            # Two kinds of edges are tried in turn, and each says something else.
            path = path[:3]
            got = shown(_value_at(path, data))
            text = refusal_text(place_text(file, path, data, lines), _BAND_EDGES, got, "write [4, 8] for instance")
        elif found["type"] == "missing" and isinstance(found["loc"][-1], int):
            text = refusal_text(
                place_text(file, path, data, lines), "a list of two", shown(_value_at(path, data)), "correct the value"
            )
        elif found["type"] == "missing":
            text = _missing(path, file, data, lines)
        elif found["type"] == "extra_forbidden":
            text = _unknown(path, model, file, data, lines)
        else:
            text = _wrong(path, found, file, data, lines)
        said.setdefault(repr(path), text)
    return list(said.values())


def _in_file(location: tuple[Any, ...], data: dict[str, Any]) -> KeyPath:
    """The part of pydantic's location that exists in the file (it adds the names of union branches)."""
    path: list[str | int] = []
    here: Any = data
    for place, part in enumerate(location):
        if isinstance(here, dict) and (part in here or place == len(location) - 1):
            path.append(part)
            here = here.get(part)
        elif isinstance(here, list) and isinstance(part, int) and part < len(here):
            path.append(part)
            here = here[part]
    return tuple(path)


def _value_at(path: KeyPath, data: Any) -> Any:
    for part in path:
        try:
            data = data[part]
        except (KeyError, IndexError, TypeError):
            return None
    return data


def _missing(path: KeyPath, file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> str:
    parent = place_text(file, path[:-1], data, lines)
    key = str(path[-1])
    if len(path) == 1:
        return refusal_text(parent, f"a table [{key}]", "none", f"add [{key}]")
    return refusal_text(parent, f'the key "{key}"', "none", "add it")


def _unknown(path: KeyPath, model: type[BaseModel], file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> str:
    known = _fields_at(model, path[:-1])
    hint = closest(str(path[-1]), known)
    return refusal_text(
        place_text(file, path, data, lines),
        f"a key among {listed(known, most=20)}",
        f'"{path[-1]}"',
        f"{hint}correct or remove it",
    )


def _fields_at(model: Any, path: KeyPath) -> list[str]:
    here: Any = model
    for part in path:
        if isinstance(part, int):
            continue
        annotation = here.model_fields[part].annotation
        models = [
            kind
            for kind in (annotation, *_nested(annotation))
            if isinstance(kind, type) and issubclass(kind, BaseModel)
        ]
        if not models:
            return []
        here = models[0]
    return sorted(here.model_fields)


def _nested(annotation: Any) -> list[Any]:
    found = []
    for argument in get_args(annotation):
        found.extend([argument, *_nested(argument)])
    return found


def _wrong(path: KeyPath, found: Any, file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> str:
    place = place_text(file, path, data, lines)
    context = found.get("ctx", {})
    kind = found["type"]
    got = shown(found["input"])
    if kind == "literal_error":
        options = re.findall(r"'([^']*)'", str(context.get("expected", "")))
        return refusal_text(place, f"one of {listed(options)}", got, "choose one of them")
    bounds = {
        "greater_than": "above {gt:g}",
        "greater_than_equal": "of at least {ge:g}",
        "less_than": "below {lt:.20g}",
        "less_than_equal": "of at most {le:.20g}",
    }
    if kind in bounds:
        return refusal_text(place, f"a number {bounds[kind].format(**context)}", got, "correct the number")
    if kind in ("model_type", "model_attributes_type", "dict_type") and isinstance(found["input"], list):
        return refusal_text(
            place, "one table", f"{len(found['input'])} in a list", f"write [{path[-1]}] in single brackets"
        )
    if kind == "list_type" and isinstance(found["input"], dict) and len(path) == 1:
        return refusal_text(place, "a list of tables", "one table", f"write [[{path[-1]}]] in double brackets")
    remedy = (
        f'write ["{found["input"]}"]'
        if kind == "list_type" and isinstance(found["input"], str)
        else "correct the value"
    )
    expected = _EXPECTED.get(kind, found["msg"][:1].lower() + found["msg"][1:])
    return refusal_text(place, expected, got, remedy)


def shown(value: Any) -> str:
    """A value as it is written in TOML."""
    text = json.dumps(value, ensure_ascii=False, default=str).replace("NaN", "nan").replace("Infinity", "inf")
    return text if len(text) <= LONGEST_VALUE else text[: LONGEST_VALUE - 3] + "..."
