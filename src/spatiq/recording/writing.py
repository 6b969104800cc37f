"""New SigMF recordings and collections, streamed to disk; they appear whole or not at all."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq import __version__
from spatiq.errors import InputError
from spatiq.recording.collection import read_collection
from spatiq.recording.datatypes import SampleType, parse_datatype
from spatiq.recording.inputs import base_name, shown
from spatiq.recording.metadata import MAX_CHANNELS, read_metadata
from spatiq.recording.placement import place
from spatiq.recording.safewrite import (
    json_bytes,
    new_file,
    refuse_existing,
    sync,
    write_all,
    write_bytes,
    writing_to,
)
from spatiq.recording.schema import check_schema
from spatiq.recording.stores import Folder
from spatiq.recording.times import Instant

STANDARD_VERSION = "1.2.0"
_META, _DATA, _COLLECTION = ".sigmf-meta", ".sigmf-data", ".sigmf-collection"
# Frames converted at a time: keeps a long array from being held twice.
_FRAMES = 1 << 16

Samples = NDArray[np.complexfloating]


@dataclass(frozen=True, eq=False)
class Written:
    """What was written.

    Attributes:
        meta_path: the .sigmf-meta file.
        data_path: the .sigmf-data file.
        n_samples: samples per channel.
        clipped: int64, shape (Nr,); samples limited to the integer range (zeros unless `saturate`).
    """

    meta_path: Path
    data_path: Path
    n_samples: int
    clipped: NDArray[np.int64]


def write_recording(
    base_path: str | os.PathLike[str],
    samples: Samples | Iterable[Samples],
    *,
    sample_rate: float,
    datatype: str = "cf32_le",
    captures: Sequence[Mapping[str, Any]] | None = None,
    annotations: Sequence[Mapping[str, Any]] = (),
    carrier_hz: float | None = None,
    datetime: str | Instant | None = None,
    description: str | None = None,
    full_scale: float | None = None,
    saturate: bool = False,
    collection: str | None = None,
    extra: Mapping[str, Any] | None = None,
    overwrite: bool = False,
) -> Written:
    """Write `<base_path>.sigmf-data` and `<base_path>.sigmf-meta`.

    Args:
        base_path: folder and base name.
        samples: complex, shape (Nr, n); or an iterable of such arrays, written one after the other.
        sample_rate: Hz.
        datatype: a complex datatype of the standard.
        captures: objects of the captures array; None: one at sample 0 with carrier_hz, datetime.
        annotations: objects of the annotations array, in order of core:sample_start.
        carrier_hz: core:frequency of the one capture.
        datetime: start time (RFC 3339) of the one capture.
        description: core:description.
        full_scale: component value that 1.0 becomes; None: 2^(bits-1) for integers, 1 for floats.
        saturate: limit values beyond the integer range and count them, as a converter does; False
            refuses them.
        collection: base name of the collection that the recording belongs to.
        extra: further fields of global.
        overwrite: replace files of that name.

    Raises:
        InputError: values out of range, arrays of different shape, metadata that the standard does
            not allow, files that exist or cannot be written. Nothing is left behind.
    """
    meta_path, data_path = (Path(os.fspath(base_path) + ending) for ending in (_META, _DATA))
    base_name(data_path.name, str(data_path), "file name")
    for path in (meta_path, data_path):
        refuse_existing(path, overwrite)
    source = str(meta_path)
    kind = parse_datatype(datatype, source, full_scale)
    _refuse_own_fields(extra or {}, captures or (), source)
    document = {
        "global": {
            **_global_fields(datatype, sample_rate, description, collection),
            **(extra or {}),
        },
        "captures": _captures(captures, carrier_hz, datetime, source),
        "annotations": [dict(item) for item in annotations],
    }
    _check(document, source)
    writer = _Writer(kind, saturate, str(data_path))
    _store(document, writer, samples, meta_path, data_path)
    return Written(meta_path, data_path, writer.frames, writer.clipped)


def _store(
    document: dict[str, Any],
    writer: _Writer,
    samples: Samples | Iterable[Samples],
    meta_path: Path,
    data_path: Path,
) -> None:
    """Data and metadata beside their targets first; then both are renamed."""
    with new_file(data_path) as (file, temporary):
        for data in writer.convert(samples):
            with writing_to(data_path):
                write_all(file, memoryview(data))
        document["global"]["core:num_channels"] = writer.channels
        document["global"]["core:sha512"] = writer.sha512.hexdigest()
        text = json_bytes(document, str(meta_path))
        _check_placement(text, str(meta_path), file.tell(), str(data_path))
        with writing_to(data_path):
            sync(file)
            # Metadata of the old data must not stand beside the new.
            meta_path.unlink(missing_ok=True)
            temporary.replace(data_path)
    write_bytes(meta_path, text)


def _global_fields(
    datatype: str, sample_rate: float, description: str | None, collection: str | None
) -> dict[str, Any]:
    optional = {"core:description": description, "core:collection": collection}
    return {
        "core:datatype": datatype,
        "core:version": STANDARD_VERSION,
        "core:sample_rate": sample_rate,
        "core:recorder": f"spatiq {__version__}",
        **{key: value for key, value in optional.items() if value is not None},
    }


def _captures(
    captures: Sequence[Mapping[str, Any]] | None,
    carrier_hz: float | None,
    datetime: str | Instant | None,
    source: str,
) -> list[dict[str, Any]]:
    if captures is not None:
        if carrier_hz is not None or datetime is not None:
            found = "captures together with carrier_hz or datetime"
            raise InputError(source, "captures", found, "either of them")
        return [dict(item) for item in captures]
    only: dict[str, Any] = {"core:sample_start": 0}
    if carrier_hz is not None:
        only["core:frequency"] = carrier_hz
    if datetime is not None:
        only["core:datetime"] = str(datetime)
    return [only]


def _check(document: dict[str, Any], source: str) -> None:
    """Before any sample is written: the schema, and this package's own reader without a remark."""
    check_schema(document, source)
    remarks = read_metadata(json_bytes(document, source), source).warnings
    if remarks:
        raise InputError(source, "", remarks[0], "metadata that can be read without a remark")


# What the writer itself knows; and what makes a data file non-conforming.
_OWN_FIELDS = frozenset(
    "core:" + name
    for name in (
        "datatype",
        "version",
        "sample_rate",
        "num_channels",
        "sha512",
        "dataset",
        "trailing_bytes",
        "metadata_only",
    )
)


def _refuse_own_fields(
    extra: Mapping[str, Any], captures: Sequence[Mapping[str, Any]], source: str
) -> None:
    own = sorted(_OWN_FIELDS & set(extra))
    if own:
        raise InputError(source, "extra", own[0], "fields that the writer does not set itself")
    for k, item in enumerate(captures):
        if "core:header_bytes" in item:
            raise InputError(source, f"captures[{k}]", "core:header_bytes", "samples without gaps")


def _check_placement(text: bytes, source: str, size: int, label: str) -> None:
    """Captures against the samples that were in fact written."""
    remarks = place(read_metadata(text, source), size, label).warnings
    if remarks:
        raise InputError(source, "captures", remarks[0], "captures that fit the samples")


class _Writer:
    """Converts arrays (Nr, n) to bytes of frames, and keeps the counts."""

    def __init__(self, kind: SampleType, saturate: bool, source: str) -> None:
        self._kind = kind
        self._saturate = saturate
        self._source = source
        self.channels = 0
        self.frames = 0
        self.clipped = np.zeros(0, np.int64)
        self.sha512 = hashlib.sha512()

    def convert(self, samples: Samples | Iterable[Samples]) -> Iterator[bytes]:
        """Bytes to append, in order.

        Raises:
            InputError: no samples, other shapes, or values that the datatype cannot hold.
        """
        arrays: Iterable[Samples] = [samples] if isinstance(samples, np.ndarray) else samples
        for array in arrays:
            self._check_shape(array)
            for first in range(0, array.shape[1], _FRAMES):
                data = self._bytes(array[:, first : first + _FRAMES])
                self.sha512.update(data)
                yield data
        if not self.frames:
            raise InputError(self._source, "", "no samples", "at least one sample")

    def _check_shape(self, array: Samples) -> None:
        expected = "complex arrays of shape (channels, samples)"
        if not isinstance(array, np.ndarray) or array.dtype.kind != "c" or array.ndim != 2:
            raise InputError(self._source, "samples", shown(type(array).__name__), expected)
        if not self.channels:
            if not 1 <= array.shape[0] <= MAX_CHANNELS:
                found = f"{array.shape[0]} channels"
                raise InputError(self._source, "samples", found, f"1..{MAX_CHANNELS} channels")
            self.channels = array.shape[0]
            self.clipped = np.zeros(self.channels, np.int64)
        if array.shape[0] != self.channels:
            found = f"{array.shape[0]} channels"
            raise InputError(self._source, "samples", found, f"{self.channels}, as before")

    def _bytes(self, array: Samples) -> bytes:
        """Frames of array (Nr, n) as they lie in the file."""
        channels, count = array.shape
        wide = np.empty((count, channels, 2), np.float64)
        wide[..., 0] = array.real.T
        wide[..., 1] = array.imag.T
        wide *= self._kind.full_scale
        if self._kind.is_integer:
            self._round(wide)
        else:
            self._check_finite(wide)
        self.frames += count
        return wide.astype(self._kind.stored).tobytes()

    def _check_finite(self, wide: NDArray[np.float64]) -> None:
        """Refuse what the stored type cannot hold: a double may become infinite in single."""
        bound = float(np.finfo(self._kind.native.name).max)
        good = (np.abs(wide) <= bound).all(axis=(1, 2))
        if not good.all():
            first = self.frames + int(np.argmin(good))
            found = "a value that is not a finite number"
            raise InputError(self._source, f"sample {first}", found, f"finite {self._kind.name}")

    def _round(self, wide: NDArray[np.float64]) -> None:
        """To the nearest integer (ties to even), in the stored range; in place."""
        np.rint(wide, out=wide)
        bits = 8 * self._kind.stored.itemsize
        low, high = -(2.0 ** (bits - 1)), 2.0 ** (bits - 1) - 1
        # Written so that NaN counts as outside.
        inside = (wide >= low) & (wide <= high)
        outside: NDArray[np.bool_] = ~(inside[..., 0] & inside[..., 1])
        if outside.any():
            first = self.frames + int(np.argmax(outside.any(axis=1)))
            if not self._saturate or np.isnan(wide).any():
                found = "a value that is not a number or beyond full scale"
                expected = f"{low:.0f}..{high:.0f} after scaling by {self._kind.full_scale:g}"
                raise InputError(self._source, f"sample {first}", found, expected)
            np.clip(wide, low, high, out=wide)
            self.clipped += outside.sum(axis=0)
        wide += self._kind.offset


def write_collection(
    path: str | os.PathLike[str],
    recordings: Sequence[str | os.PathLike[str]],
    *,
    description: str | None = None,
    overwrite: bool = False,
) -> Path:
    """Write a collection of recordings of its own folder, in order of receive channels.

    Args:
        path: the collection; `.sigmf-collection` is appended when missing.
        recordings: base names, or paths of .sigmf-meta files beside it.
        description: core:description.
        overwrite: replace a collection of that name.

    Returns:
        The path written.

    Raises:
        InputError: a recording that is not in the folder, none at all, or one twice.
    """
    name = os.fspath(path)
    target = Path(name if name.endswith(_COLLECTION) else name + _COLLECTION)
    refuse_existing(target, overwrite)
    store = Folder(target.parent)
    streams = []
    for item in recordings:
        given = Path(item)
        if given.parent != Path() and given.parent.resolve() != target.parent.resolve():
            raise InputError(target, "", shown(str(given)), "recordings of the same folder")
        base = given.name.removesuffix(_META)
        file = store.find(base + _META)
        if file is None:
            raise InputError(store.label(base + _META), "", "no such file", "a recording")
        streams.append({"name": base, "hash": file.hash("sha512")})
    names = [s["name"] for s in streams]
    if not names or len(set(names)) != len(names):
        found = "no recording" if not names else "a recording twice"
        raise InputError(target, "", found, "one or more different recordings")
    head: dict[str, Any] = {"core:version": STANDARD_VERSION, "core:streams": streams}
    if description is not None:
        head["core:description"] = description
    document = {"collection": head}
    text = json_bytes(document, str(target))
    read_collection(text, str(target))
    write_bytes(target, text)
    return target
