"""A recording's metadata, checked: what the reader needs, and remarks on what it put up with."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from spatiq.errors import InputError
from spatiq.recording.datatypes import SampleType, parse_datatype
from spatiq.recording.inputs import base_name, number, shown, text_field, whole_number
from spatiq.recording.jsontext import parse_metadata
from spatiq.recording.times import Instant, parse_time

MAX_CHANNELS = 1024
_MAX_RATE = 1e12
_MISPLACED = ("core:frequency", "core:datetime")
# Namespaces whose fields do not change how samples are to be read: required or not, they are met.
_SUPPORTED = {"antenna", "capture_details", "signal", "spatial", "traceability"}


@dataclass(frozen=True)
class Capture:
    """One element of the captures array; indices count per-channel frames of the file.

    Attributes:
        start: first frame, relative to the file.
        header_bytes: bytes before this segment's frames.
        global_index: index in the original stream of samples.
        indexed: True when global_index was stated and not defaulted.
        datetime: start time, if stated.
        frequency: carrier in Hz, if stated.
    """

    start: int
    header_bytes: int
    global_index: int
    indexed: bool
    datetime: Instant | None
    frequency: float | None


@dataclass(frozen=True)
class Metadata:
    """What one metadata file says, checked.

    Attributes:
        source: file name for messages.
        raw: the whole document, as parsed.
        sample_type: datatype with its scale.
        sample_rate: Hz.
        channels: interleaved channels.
        index_base: what the file's sample indices count from (core:offset, if they honour it).
        captures: at least one, ascending, without repeated equal ones.
        dataset: name of a data file that is not `<base>.sigmf-data`, or None.
        trailing_bytes: bytes at the end of the data file that are not samples.
        metadata_only: the flag.
        sha512: of the data file, lower case, or None.
        warnings: one line each.
    """

    source: str
    raw: dict[str, Any]
    sample_type: SampleType
    sample_rate: float
    channels: int
    index_base: int
    captures: tuple[Capture, ...]
    dataset: str | None
    trailing_bytes: int
    metadata_only: bool
    sha512: str | None
    warnings: tuple[str, ...]


def read_metadata(data: bytes, source: str, full_scale: float | None = None) -> Metadata:
    """Check the bytes of a .sigmf-meta file.

    Raises:
        InputError: whatever cannot be read without guessing.
    """
    raw, remarks = parse_metadata(data, source)
    warnings = list(remarks)
    head = section(raw, "global", source)
    check_extensions(head, source, "global", warnings)
    check_version(head, source, "global", warnings)
    channels = whole_number(
        head, "core:num_channels", source, "global", default=1, low=1, high=MAX_CHANNELS
    )
    base, captures = _captures(raw, head, source, warnings)
    _remark_namespaces(raw, head, source, warnings)
    return Metadata(
        source=source,
        raw=raw,
        sample_type=parse_datatype(head.get("core:datatype"), source, full_scale),
        sample_rate=_sample_rate(head, source),
        channels=channels,
        index_base=base,
        captures=captures,
        dataset=_dataset(head, source),
        trailing_bytes=whole_number(head, "core:trailing_bytes", source, "global", default=0),
        metadata_only=_flag(head, "core:metadata_only", source),
        sha512=_sha512(head, source),
        warnings=tuple(warnings),
    )


def section(raw: dict[str, Any], key: str, source: str) -> dict[str, Any]:
    """The top-level object of that name.

    Raises:
        InputError: missing or not an object.
    """
    value = raw.get(key)
    if not isinstance(value, dict):
        raise InputError(source, key, shown(value) if key in raw else "nothing", "an object")
    return value


def object_array(
    raw: dict[str, Any], key: str, source: str, warnings: list[str]
) -> list[dict[str, Any]]:
    """The top-level array of objects of that name; empty with a warning when it is missing.

    Raises:
        InputError: not an array of objects.
    """
    if key not in raw:
        warnings.append(f"{source}: {key} is missing; taken as empty")
        return []
    value = raw[key]
    if not isinstance(value, list):
        raise InputError(source, key, shown(value), "an array of objects")
    for index, item in enumerate(value):
        if not isinstance(item, dict):
            raise InputError(source, f"{key}[{index}]", shown(item), "an object")
    return value


def _sample_rate(head: dict[str, Any], source: str) -> float:
    rate = number(head, "core:sample_rate", source, "global", low=0.0, high=_MAX_RATE)
    if not rate or rate < 1e-9:
        found = "nothing" if rate is None else shown(head["core:sample_rate"])
        raise InputError(source, "global.core:sample_rate", found, "samples per second, > 0")
    return rate


def _dataset(head: dict[str, Any], source: str) -> str | None:
    if "core:dataset" not in head:
        return None
    return base_name(head["core:dataset"], source, "global.core:dataset")


def _flag(head: dict[str, Any], key: str, source: str) -> bool:
    value = head.get(key, False)
    if not isinstance(value, bool):
        raise InputError(source, f"global.{key}", shown(value), "true or false")
    return value


def _sha512(head: dict[str, Any], source: str) -> str | None:
    value = text_field(head, "core:sha512", source, "global")
    if value is None:
        return None
    if not re.fullmatch("[0-9a-fA-F]{128}", value):
        raise InputError(source, "global.core:sha512", shown(value), "128 hexadecimal digits")
    return value.lower()


def check_version(head: dict[str, Any], source: str, place: str, warnings: list[str]) -> None:
    """Remark on a missing or unusual core:version; the fields decide, not the number."""
    version = text_field(head, "core:version", source, place)
    if version is None:
        warnings.append(f"{source}: {place}.core:version is missing")
    elif not re.fullmatch(r"1\.\d+\.\d+", version, re.ASCII):
        warnings.append(f"{source}: {place}.core:version is {shown(version)}; read as version 1")


def check_extensions(head: dict[str, Any], source: str, place: str, warnings: list[str]) -> None:
    """Refuse extensions that are required to read the samples and not known here.

    Raises:
        InputError: an unknown extension with "optional": false, or a damaged declaration.
    """
    declared = head.get("core:extensions", [])
    if not isinstance(declared, list):
        raise InputError(source, f"{place}.core:extensions", shown(declared), "an array")
    for index, item in enumerate(declared):
        where = f"{place}.core:extensions[{index}]"
        if not isinstance(item, dict) or not isinstance(item.get("name"), str):
            raise InputError(source, where, shown(item), "an object with a name")
        optional = item.get("optional")
        if optional is None:
            warnings.append(f"{source}: {where} does not say whether it is optional; taken as so")
        elif not isinstance(optional, bool):
            raise InputError(source, f"{where}.optional", shown(optional), "true or false")
        elif not optional and item["name"] not in _SUPPORTED:
            found = f"required extension {shown(item['name'])}"
            known = ", ".join(sorted(_SUPPORTED))
            raise InputError(source, where, found, f"optional ones, or one of {known}")


def _remark_namespaces(
    raw: dict[str, Any], head: dict[str, Any], source: str, warnings: list[str]
) -> None:
    known = {item["name"] for item in head.get("core:extensions", [])} | {"core"}
    annotations = object_array(raw, "annotations", source, warnings)
    objects: Iterable[dict[str, Any]] = [head, *raw.get("captures", []), *annotations]
    used = {key.partition(":")[0] for item in objects for key in item if ":" in key}
    unknown = sorted(used - known)
    if unknown:
        names = ", ".join(shown(name) for name in unknown[:5])
        warnings.append(f"{source}: namespaces that are not declared: {names}; ignored")
    starts = [item.get("core:sample_start") for item in annotations]
    plain = [s for s in starts if isinstance(s, int)]
    if plain != sorted(plain):
        warnings.append(f"{source}: annotations are not sorted")


def _captures(
    raw: dict[str, Any], head: dict[str, Any], source: str, warnings: list[str]
) -> tuple[int, tuple[Capture, ...]]:
    """Index base and checked captures; equal neighbours are one."""
    items = object_array(raw, "captures", source, warnings)
    offset = whole_number(head, "core:offset", source, "global", default=0)
    items = [item for k, item in enumerate(items) if not k or item != items[k - 1]]
    if not items:
        items = [{"core:sample_start": offset}]
    starts = [
        whole_number(item, "core:sample_start", source, f"captures[{k}]")
        for k, item in enumerate(items)
    ]
    for k in range(1, len(starts)):
        if starts[k] < starts[k - 1]:
            expected = f"at least {starts[k - 1]}, as captures are sorted"
            raise InputError(source, f"captures[{k}].core:sample_start", starts[k], expected)
    base = offset
    if starts[0] < offset:
        base = 0
        warnings.append(
            f"{source}: captures[0].core:sample_start is below core:offset; "
            "sample indices taken as relative to the file"
        )
    inherited = _misplaced(head, source, warnings)
    captures = [
        _capture(item, k, starts[k] - base, inherited, source, warnings)
        for k, item in enumerate(items)
    ]
    return base, tuple(captures)


def _misplaced(head: dict[str, Any], source: str, warnings: list[str]) -> dict[str, Any]:
    """Capture fields that a producer wrote into global."""
    found: dict[str, Any] = {k: head[k] for k in _MISPLACED if k in head}
    for key in found:
        warnings.append(f"{source}: {key} stands in global; taken for captures without their own")
    return found


def _capture(
    item: dict[str, Any],
    index: int,
    start: int,
    inherited: dict[str, Any],
    source: str,
    warnings: list[str],
) -> Capture:
    place = f"captures[{index}]"
    sample_start = item["core:sample_start"]
    stated = dict(item)
    if "core:frequency" in inherited:
        stated.setdefault("core:frequency", inherited["core:frequency"])
    if "core:datetime" in inherited and index == 0:
        stated.setdefault("core:datetime", inherited["core:datetime"])
    return Capture(
        start=start,
        header_bytes=whole_number(item, "core:header_bytes", source, place, default=0),
        global_index=whole_number(item, "core:global_index", source, place, default=sample_start),
        indexed="core:global_index" in item,
        datetime=_instant(stated, source, place, warnings),
        frequency=number(stated, "core:frequency", source, place, low=-1e12, high=1e12),
    )


def _instant(item: dict[str, Any], source: str, place: str, warnings: list[str]) -> Instant | None:
    text = text_field(item, "core:datetime", source, place)
    if text is None:
        return None
    try:
        parsed = parse_time(text)
    except ValueError as error:
        expected = f"a date and time as 2030-01-31T12:00:00.5Z ({error})"
        raise InputError(source, f"{place}.core:datetime", shown(text), expected) from error
    if parsed.remark and not any(w.endswith(parsed.remark) for w in warnings):
        warnings.append(f"{source}: {place}.core:datetime {shown(text)} {parsed.remark}")
    return parsed.instant
