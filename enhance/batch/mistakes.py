"""A validation mistake in the words of someone who wrote a job file."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping
from typing import Any

from pydantic import BaseModel, ValidationError

from enhance.batch.lines import KeyPath, line_of
from enhance.batch.schema import JobTables

#: What the schema's type errors expected, in words.
_EXPECTED = {
    "string_type": 'text in quotation marks, such as "name"',
    "int_type": "a whole number",
    "bool_type": "true or false, without quotation marks",
    "list_type": "a list, such as [1, 2]",
    "model_type": "a table of keys",
    "model_attributes_type": "a table of keys",
}


def nearest(word: str, known: Iterable[str]) -> str | None:
    """Return the known word most like this one, if any is."""
    close = difflib.get_close_matches(word.lower(), list(known), n=1, cutoff=0.5)
    return close[0] if close else None


def key_text(path: KeyPath) -> str:
    """Write a key path as it is read: ``slow_motion.windows[1].from``, list entries counted from 0."""
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
    return text


def sentence(path: KeyPath, message: str, lines: Mapping[KeyPath, int]) -> str:
    """Put line, key and message into one sentence."""
    line = line_of(lines, path)
    where = f"line {line}: " if line else ""
    return f"{where}{key_text(path)}: {message}"


def validation_mistakes(error: ValidationError) -> list[tuple[KeyPath, str]]:
    """Translate every mistake that validation found.

    Parameters
    ----------
    error : ValidationError

    Returns
    -------
    list of (key path, message)
        In the order of the schema.
    """
    return [(tuple(each["loc"]), _message(dict(each))) for each in error.errors(include_url=False)]


def _message(error: dict[str, Any]) -> str:
    kind, found, context = error["type"], error["input"], error.get("ctx", {})
    if kind == "missing":
        return "is missing; this key is always required"
    if kind == "extra_forbidden":
        return _unknown_key(tuple(error["loc"]))
    if kind == "value_error":
        return str(context["error"])
    if kind == "literal_error":
        return _unknown_word(found, str(context["expected"]))
    if kind in _EXPECTED:
        return f"found {_shown(found)}; expected {_EXPECTED[kind]}"
    return _limit(kind, found, context) or f"found {_shown(found)}; {error['msg'].lower()}"


def _limit(kind: str, found: Any, context: Mapping[str, Any]) -> str | None:
    if kind == "greater_than_equal":
        return f"found {_shown(found)}; expected {context['ge']} or more"
    if kind == "less_than_equal":
        return f"found {_shown(found)}; expected {context['le']} or less"
    if kind in ("too_short", "too_long"):
        expected = context.get("min_length", context.get("max_length"))
        return f"found {len(found)} values; expected {expected}"
    if kind == "string_too_short":
        return "is empty; write a name, or leave the key out"
    return None


def _unknown_key(path: KeyPath) -> str:
    word, known = str(path[-1]), _known_keys(path[:-1])
    # a key below the wrong heading: TOML takes it for that table's own
    elsewhere = [(*table, key) for table in ((), *_tables()) for key in _known_keys(table) if key == word]
    if elsewhere:
        return f"is not a known key here; did you mean {key_text(elsewhere[0])}?"
    close = nearest(word, known)
    if close:
        return f"is not a known key; did you mean {key_text((*path[:-1], close))}?"
    return f"is not a known key; known here: {', '.join(known)}"


def _unknown_word(found: Any, expected: str) -> str:
    words = expected.replace("'", '"').replace(" or ", ", ")
    close = nearest(found, [word.strip('"') for word in words.split(", ")]) if isinstance(found, str) else None
    return f"found {_shown(found)}; expected one of {words}" + (f'; did you mean "{close}"?' if close else "")


def _known_keys(table: KeyPath) -> list[str]:
    model: type[BaseModel] = JobTables
    for part in table:
        if isinstance(part, str):
            model = _model_within(_by_key(model)[part])
    return list(_by_key(model))


def _tables() -> list[KeyPath]:
    return [(name,) for name in _known_keys(()) if name != "title"]


def _by_key(model: type[BaseModel]) -> dict[str, Any]:
    return {field.alias or name: field.annotation for name, field in model.model_fields.items()}


def _model_within(annotation: Any) -> type[BaseModel]:
    """Find the model inside ``Model | None`` or ``list[Model]``."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next(_model_within(inner) for inner in annotation.__args__ if inner is not type(None))


def _shown(value: Any) -> str:
    """Show a value as the job file writes it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        return f'"{value}"'
    return "a table" if isinstance(value, dict) else str(value)
