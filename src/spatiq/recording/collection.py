"""Recordings of single receive channels, put together into one by their place in time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

from spatiq.errors import InputError
from spatiq.recording.dataset import Dataset
from spatiq.recording.inputs import base_name, shown
from spatiq.recording.jsontext import parse_metadata
from spatiq.recording.metadata import MAX_CHANNELS, check_extensions, check_version, section
from spatiq.recording.placement import Segment
from spatiq.recording.recording import Recording, Run
from spatiq.recording.times import Instant


@dataclass(frozen=True)
class Stream:
    """An entry of core:streams: a recording's base name and its metadata's SHA-512, if stated."""

    name: str
    sha512: str | None


@dataclass(frozen=True)
class CollectionFile:
    """A checked .sigmf-collection file."""

    raw: dict[str, Any]
    streams: tuple[Stream, ...]
    warnings: tuple[str, ...]


def read_collection(data: bytes, source: str) -> CollectionFile:
    """Check the bytes of a .sigmf-collection file.

    Raises:
        InputError: whatever cannot be read without guessing.
    """
    raw, remarks = parse_metadata(data, source)
    warnings = list(remarks)
    head = section(raw, "collection", source)
    check_version(head, source, "collection", warnings)
    check_extensions(head, source, "collection", warnings)
    items = head.get("core:streams")
    if not isinstance(items, list) or not items:
        found = shown(items) if "core:streams" in head else "nothing"
        raise InputError(source, "collection.core:streams", found, "an array of recordings")
    if len(items) > MAX_CHANNELS:
        expected = f"at most {MAX_CHANNELS}"
        raise InputError(source, "collection.core:streams", f"{len(items)} recordings", expected)
    streams = tuple(
        _stream(item, source, f"collection.core:streams[{k}]") for k, item in enumerate(items)
    )
    names = [s.name for s in streams]
    for k, name in enumerate(names):
        if name in names[:k]:
            place = f"collection.core:streams[{k}]"
            raise InputError(source, place, f"{shown(name)} again", "each recording once")
    return CollectionFile(raw, streams, tuple(warnings))


def _stream(item: object, source: str, place: str) -> Stream:
    """An object {"name", "hash"} or a tuple ["name", "hash"]: both are legal."""
    if isinstance(item, dict):
        name, sha512 = item.get("name"), item.get("hash")
    elif isinstance(item, list) and 1 <= len(item) <= 2:
        name, sha512 = item[0], item[1] if len(item) == 2 else None
    else:
        raise InputError(source, place, shown(item), 'an object with "name" and "hash"')
    if sha512 is not None and not isinstance(sha512, str):
        raise InputError(source, f"{place}.hash", shown(sha512), "128 hexadecimal digits")
    return Stream(base_name(name, source, f"{place}.name"), sha512)


def single(path: Path, dataset: Dataset) -> Recording:
    """The recording behind one data file."""
    segments = dataset.placement.segments
    carrier, remarks = _carrier(segments, dataset.metadata.source)
    return Recording(
        name=dataset.name,
        path=path,
        sample_rate=dataset.metadata.sample_rate,
        channels=dataset.metadata.channels,
        datatype=dataset.metadata.sample_type.name,
        segments=segments,
        warnings=(*dataset.warnings, *remarks),
        carrier_hz=carrier,
        datasets=(dataset,),
        runs=(Run(0, dataset.n_samples, (0,)),),
    )


def combine(
    name: str, path: Path, source: str, collection: CollectionFile, datasets: Sequence[Dataset]
) -> Recording:
    """One recording of all channels of the collection, on the samples that all of them have.

    Streams are aligned by core:global_index. Where it is not stated throughout, start times must be
    equal to within half a sample period.

    Raises:
        InputError: streams of different rate, carrier or start; no sample in common.
    """
    _check_rates(source, datasets)
    warnings = list(collection.warnings)
    for dataset in datasets:
        warnings += dataset.warnings
    segments, runs = _common(source, datasets)
    warnings += _check_times(source, datasets, runs[0])
    warnings += _lengths(source, datasets, runs)
    carrier, remarks = _carrier(segments, source)
    types = dict.fromkeys(d.metadata.sample_type.name for d in datasets)
    channels = sum(d.metadata.channels for d in datasets)
    if channels > MAX_CHANNELS:
        raise InputError(source, "", f"{channels} channels", f"at most {MAX_CHANNELS}")
    return Recording(
        name=name,
        path=path,
        sample_rate=datasets[0].metadata.sample_rate,
        channels=channels,
        datatype="+".join(types),
        segments=segments,
        warnings=(*warnings, *remarks),
        carrier_hz=carrier,
        datasets=tuple(datasets),
        runs=runs,
        collection=collection.raw["collection"],
    )


def _carrier(segments: Sequence[Segment], source: str) -> tuple[float | None, list[str]]:
    stated = {s.frequency for s in segments} - {None}
    if len(stated) > 1:
        return None, [f"{source}: captures state {len(stated)} different frequencies"]
    return (stated.pop() if stated else None), []


def _check_rates(source: str, datasets: Sequence[Dataset]) -> None:
    first = datasets[0].metadata.sample_rate
    for d in datasets[1:]:
        if d.metadata.sample_rate != first:
            expected = f"{first:.15g} Hz as {datasets[0].name} has"
            found = f"{d.metadata.sample_rate:.15g} Hz"
            raise InputError(source, f"sample rate of {d.name}", found, expected)


def _common(
    source: str, datasets: Sequence[Dataset]
) -> tuple[tuple[Segment, ...], tuple[Run, ...]]:
    """Intersection of the streams' segments on the global index."""
    lists = [d.placement.segments for d in datasets]
    for d, segments in zip(datasets, lists, strict=True):
        ends = [s.global_index + s.count for s in segments]
        if any(s.global_index < end for s, end in zip(segments[1:], ends, strict=False)):
            found = f"core:global_index of {d.name} that steps back"
            raise InputError(source, "", found, "ascending indices, to align the channels by")
    segments_out: list[Segment] = []
    runs: list[Run] = []
    at = [0] * len(lists)
    total = 0
    while all(k < len(segments) for k, segments in zip(at, lists, strict=True)):
        current = [segments[k] for k, segments in zip(at, lists, strict=True)]
        first = max(s.global_index for s in current)
        last = min(s.global_index + s.count for s in current)
        if first < last:
            runs.append(
                Run(total, last - first, tuple(s.start + first - s.global_index for s in current))
            )
            segments_out.append(
                Segment(
                    index=len(segments_out),
                    start=total,
                    count=last - first,
                    global_index=first,
                    datetime=_joint_time(current, first, datasets[0].metadata.sample_rate),
                    frequency=_joint_frequency(source, datasets, current),
                )
            )
            total += last - first
        at = [k + (s.global_index + s.count <= last) for k, s in zip(at, current, strict=True)]
    if not runs:
        expected = "channels recorded at the same time"
        raise InputError(source, "", "streams without a sample in common", expected)
    return tuple(segments_out), tuple(runs)


def _joint_time(current: Sequence[Segment], first: int, rate: float) -> Instant | None:
    times = (_at(s, first, rate) for s in current)
    return next((t for t in times if t is not None), None)


def _joint_frequency(
    source: str, datasets: Sequence[Dataset], current: Sequence[Segment]
) -> float | None:
    """Channels of one receiver share its carrier: what is stated must agree."""
    stated = [
        (d.name, s.frequency)
        for d, s in zip(datasets, current, strict=True)
        if s.frequency is not None
    ]
    for name, frequency in stated[1:]:
        if frequency != stated[0][1]:
            expected = f"{stated[0][1]:.15g} Hz as {stated[0][0]} has"
            raise InputError(source, f"frequency of {name}", f"{frequency:.15g} Hz", expected)
    return stated[0][1] if stated else None


def _at(segment: Segment, global_index: int, rate: float) -> Instant | None:
    if segment.datetime is None or global_index == segment.global_index:
        return segment.datetime
    return segment.datetime.later(global_index - segment.global_index, rate)


def _check_times(source: str, datasets: Sequence[Dataset], run: Run) -> list[str]:
    """Start times of the first common sample: they align the streams if global_index does not."""
    rate = datasets[0].metadata.sample_rate
    indexed = all(d.placement.indexed for d in datasets)
    times: list[tuple[Dataset, Instant]] = []
    for i, d in enumerate(datasets):
        segment = next(s for s in d.placement.segments if s.start <= run.starts[i] < s.stop)
        instant = _at(segment, segment.global_index + run.starts[i] - segment.start, rate)
        if instant is not None:
            times.append((d, instant))
    if len(times) < len(datasets) and not indexed:
        return [f"{source}: neither start times nor core:global_index say that streams are aligned"]
    for d, instant in times[1:]:
        apart = abs(instant.seconds - times[0][1].seconds)
        if apart * 2 * Fraction(rate) <= 1:
            continue
        text = f"{instant}, {float(apart):.3g} s from that of {times[0][0].name}"
        if indexed:
            return [f"{source}: start time of {d.name} is {text}; aligned by core:global_index"]
        raise InputError(source, f"start time of {d.name}", text, "the same start or global_index")
    return []


def _lengths(source: str, datasets: Sequence[Dataset], runs: Sequence[Run]) -> list[str]:
    common = sum(r.count for r in runs)
    longest = max(d.n_samples for d in datasets)
    if all(d.n_samples == common for d in datasets):
        return []
    return [f"{source}: streams share {common} samples of up to {longest}; the rest is left out"]
