"""JSON from an untrusted file: capped in size and depth, no duplicate keys, finite numbers only."""

from __future__ import annotations

import json
import math
from typing import Any

from spatiq.errors import InputError
from spatiq.recording.inputs import shown

# Room for some 300,000 annotations; a parsed file takes about ten times its size in memory.
MAX_METADATA_BYTES = 64 * 2**20
MAX_DEPTH = 64


class _RefusedError(ValueError):
    """Raised inside the parser's hooks; carries the text of what was found and expected."""

    def __init__(self, found: str, expected: str) -> None:
        self.found = found
        self.expected = expected
        super().__init__(found)


def _unique(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    fields = dict(pairs)
    if len(fields) != len(pairs):
        seen: set[str] = set()
        for key, _ in pairs:
            if key in seen:
                raise _RefusedError(f"key {shown(key)} twice in one object", "each key once")
            seen.add(key)
    return fields


def _constant(text: str) -> Any:
    raise _RefusedError(text, "finite numbers, as JSON has no other")


def _finite(text: str) -> float:
    value = float(text)
    if not math.isfinite(value):
        raise _RefusedError(f"number {shown(text)}", "numbers that fit double precision")
    return value


def _integer(text: str) -> int:
    if len(text) > 400:
        raise _RefusedError(f"a number of {len(text)} digits", "numbers of up to 400 digits")
    return int(text)


def _check_depth(document: Any, source: str) -> None:
    level = [document]
    for _ in range(MAX_DEPTH):
        inner: list[Any] = []
        for item in level:
            values = item.values() if isinstance(item, dict) else item
            inner.extend(v for v in values if isinstance(v, dict | list))
        if not inner:
            return
        level = inner
    raise InputError(source, "", f"nesting deeper than {MAX_DEPTH}", f"at most {MAX_DEPTH} levels")


def parse_metadata(data: bytes, source: str) -> tuple[dict[str, Any], tuple[str, ...]]:
    """Parse a metadata file into its top-level object.

    Args:
        data: the file's bytes, at most MAX_METADATA_BYTES.
        source: file name for messages.

    Returns:
        The object, and warnings about what was accepted though it should not be there.

    Raises:
        InputError: not UTF-8, not JSON, too large, too deep, a key twice, a number not finite.
    """
    if len(data) > MAX_METADATA_BYTES:
        raise InputError(
            source, "", f"{len(data)} bytes", f"metadata of at most {MAX_METADATA_BYTES} bytes"
        )
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise InputError(source, "", f"a bad byte at {error.start}", "UTF-8 text") from error
    warnings: tuple[str, ...] = ()
    if text.startswith("\ufeff"):
        text = text[1:]
        warnings = (f"{source}: begins with a byte-order mark; ignored",)
    try:
        document = json.loads(
            text,
            object_pairs_hook=_unique,
            parse_constant=_constant,
            parse_float=_finite,
            parse_int=_integer,
        )
    except _RefusedError as error:
        raise InputError(source, "", error.found, error.expected) from error
    except json.JSONDecodeError as error:
        found = f"bad JSON at line {error.lineno}, column {error.colno} ({error.msg})"
        raise InputError(source, "", found, "a JSON object") from error
    except RecursionError as error:
        raise InputError(
            source, "", f"nesting deeper than {MAX_DEPTH}", f"at most {MAX_DEPTH} levels"
        ) from error
    if not isinstance(document, dict):
        raise InputError(source, "", shown(document), "a JSON object")
    _check_depth(document, source)
    return document, warnings
