"""Errors of the schema -> one line of the program's own kind."""

from __future__ import annotations

from typing import Any

from pydantic import ValidationError

from spatiq.errors import InputError
from spatiq.link.places import SHOWN_CHARACTERS, Place, one_of, shown
from spatiq.link.values import MISSING_KEY, NAMES_APART, NOT_ACCEPTED, UNKNOWN_KEY, UNKNOWN_VARIANT

_PLAIN = {
    "list_type": "a list",
    "string_type": "a string",
    "bool_type": "true or false",
    "int_type": "a whole number",
    "float_type": "a number",
    "model_type": "a table of keys and values",
}


def _place(location: tuple[int | str, ...], source: str) -> Place:
    """Key path of an error location: variants' tags are left out."""
    place = Place(source)
    for step in location:
        if isinstance(step, str) and step.startswith("<") and step.endswith(">"):
            continue
        place = place / step
    return place


def _expected(kind: str, context: dict[str, Any], message: str) -> str:
    if kind == NOT_ACCEPTED:
        return str(context["expected"])
    if kind in _PLAIN:
        return _PLAIN[kind]
    if kind == "too_short":
        return f"a list of at least {context['min_length']}"
    if kind == "too_long":
        return f"a list of at most {context['max_length']}"
    return message[0].lower() + message[1:]


def _variant_fault(place: Place, value: Any, context: dict[str, Any]) -> InputError:
    if not isinstance(value, dict):
        return place.fault(shown(value), "a table of keys and values")
    key = str(context["key"])
    found = value.get(key)
    text = shown(found) if key in value else "nothing"
    return (place / key).fault(text, one_of(str(context["names"]).split(NAMES_APART), found))


def input_error(error: ValidationError, source: str) -> InputError:
    """The first error of a validation as an InputError.

    Args:
        error: what pydantic raised; its unions are those of `spatiq.link.values`.
        source: file name, for people.
    """
    first = error.errors(include_url=False)[0]
    kind, value = first["type"], first["input"]
    context = first.get("ctx", {})
    place = _place(first["loc"], source)
    if kind == UNKNOWN_KEY:
        key = str(context["key"])
        step = key if key.isprintable() and len(key) <= SHOWN_CHARACTERS else shown(key)
        return (place / step).fault("an unknown key", context["expected"])
    if kind == MISSING_KEY:
        return (place / str(context["key"])).fault("nothing", context["expected"])
    if kind == UNKNOWN_VARIANT:
        return _variant_fault(place, value, context)
    return place.fault(shown(value), _expected(kind, context, first["msg"]))
