"""The standard's own schema, applied to what this program writes (never on the way in)."""

from __future__ import annotations

from typing import Any

from sigmf import schema

# jsonschema as the library brings it along: the validator that its schema is written for.
from sigmf.validate import jsonschema

from spatiq.errors import InputError
from spatiq.recording.inputs import shown


def check_schema(document: dict[str, Any], source: str) -> None:
    """Check a .sigmf-meta document before it is written.

    Collections have no such check: their schema knows only the tuple form of streams, against the
    standard's own text, which asks for objects.

    Args:
        document: the whole metadata document.
        source: file name for messages.

    Raises:
        InputError: the first breach of the schema.
    """
    error = next(jsonschema.Draft202012Validator(schema.get_schema()).iter_errors(document), None)
    if error is not None:
        field = ".".join(str(part) for part in error.absolute_path)
        message = error.message if len(error.message) < 200 else f"a breach of {error.validator}"
        raise InputError(source, field, shown(error.instance), f"what the schema asks: {message}")
