"""pydantic's findings as refusals of our own: file, line, key, what was expected, what was got, what to do."""

from __future__ import annotations

from typing import Any, get_args

from pydantic import BaseModel, ValidationError

from tfstats.foundations.checks import closest
from tfstats.foundations.errors import listed, refusal_text
from tfstats.plan_file.line_numbers import KeyPath, line_of

__all__ = ["key_text", "place_text", "refusals_of"]

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
    "too_short": "more entries",
    "too_long": "a list of two",
}


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
        if found["type"] == "missing":
            place, text = path, _missing(path, file, data, lines)
        elif found["type"] == "extra_forbidden":
            place, text = path, _unknown(path, model, file, data, lines)
        else:
            place, text = path, _wrong(path, found, file, data, lines)
        said.setdefault(repr(place), text)
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


def _missing(path: KeyPath, file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> str:
    parent = place_text(file, path[:-1], data, lines)
    key = str(path[-1])
    if len(path) == 1:
        return refusal_text(parent, f"a table [{key}]", "none", f"add [{key}]")
    return refusal_text(parent, f'the key "{key}"', "none", f"add {key} = ...")


def _unknown(path: KeyPath, model: type[BaseModel], file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> str:
    known = _fields_at(model, path[:-1])
    hint = closest(str(path[-1]), known)
    return refusal_text(
        place_text(file, path, data, lines),
        f"a key among {listed(known)}",
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
    if kind == "literal_error":
        options = str(context.get("expected", "")).replace("'", '"').replace(" or ", ", ")
        return refusal_text(place, f"one of {options}", _shown(found["input"]), "choose one of them")
    bounds = {
        "greater_than": "above {gt}",
        "greater_than_equal": "of at least {ge}",
        "less_than": "below {lt}",
        "less_than_equal": "of at most {le}",
    }
    if kind in bounds:
        return refusal_text(
            place, f"a number {bounds[kind].format(**context)}", _shown(found["input"]), "correct the number"
        )
    expected = _EXPECTED.get(kind, found["msg"][:1].lower() + found["msg"][1:])
    return refusal_text(place, expected, _shown(found["input"]), "correct the value")


def _shown(value: Any) -> str:
    text = f'"{value}"' if isinstance(value, str) else repr(value)
    return text if len(text) <= 80 else text[:77] + "..."
