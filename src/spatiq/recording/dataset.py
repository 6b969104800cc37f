"""One data file with its metadata: frames in, complex64 by channel out."""

from __future__ import annotations

from bisect import bisect_right
from dataclasses import dataclass
from io import FileIO

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.recording.datatypes import SampleType
from spatiq.recording.kernels import convert_floats, convert_integers
from spatiq.recording.metadata import Metadata, read_metadata
from spatiq.recording.placement import Placement, place
from spatiq.recording.stores import ByteRange, Store


@dataclass(frozen=True)
class Dataset:
    """A single SigMF recording: metadata, data file, and where the frames lie."""

    name: str
    metadata: Metadata
    metadata_file: ByteRange
    data: ByteRange
    placement: Placement
    warnings: tuple[str, ...]

    @property
    def n_samples(self) -> int:
        """Whole frames in the file."""
        last = self.placement.segments[-1]
        return last.stop


def load_dataset(
    store: Store, name: str, full_scale: float | None = None, verify_hash: bool = False
) -> Dataset:
    """Look up and check the recording `name` (base name) of a folder.

    Raises:
        InputError: missing files, refused metadata, or a hash that differs.
    """
    source = store.label(f"{name}.sigmf-meta")
    metadata_file = store.find(f"{name}.sigmf-meta")
    if metadata_file is None:
        raise InputError(source, "", "no such file", "the recording's metadata")
    metadata = read_metadata(metadata_file.metadata_bytes(), source, full_scale)
    data_name = metadata.dataset or f"{name}.sigmf-data"
    data = store.find(data_name)
    warnings: list[str] = list(metadata.warnings)
    if data is None:
        if metadata.metadata_only:
            found = "core:metadata_only, so no samples"
            raise InputError(source, "", found, f"a recording with {data_name}")
        raise InputError(store.label(data_name), "", "no such file", f"the data of {name}")
    if metadata.metadata_only:
        warnings.append(f"{source}: core:metadata_only is set, yet the data are here; ignored")
    if metadata.dataset is None and _is_non_conforming(metadata):
        warnings.append(f"{source}: header or trailing bytes without core:dataset; honoured")
    placement = place(metadata, data.size, data.label)
    if verify_hash:
        warnings += _verify(metadata, data)
    warnings += placement.warnings
    return Dataset(name, metadata, metadata_file, data, placement, tuple(warnings))


def _is_non_conforming(metadata: Metadata) -> bool:
    return metadata.trailing_bytes > 0 or any(c.header_bytes for c in metadata.captures)


def _verify(metadata: Metadata, data: ByteRange) -> list[str]:
    if metadata.sha512 is None:
        return [f"{metadata.source}: no core:sha512; the data cannot be verified"]
    found = data.hash("sha512")
    if found != metadata.sha512:
        expected = f"{metadata.sha512[:16]}... as core:sha512 says"
        raise InputError(data.label, "", f"SHA-512 {found[:16]}...", expected)
    return []


class FrameReader:
    """Reads frames of one dataset into rows of a block; its byte buffer is reused."""

    def __init__(self, dataset: Dataset, file: FileIO, frames: int) -> None:
        self._data = dataset.data
        self._file = file
        self._channels = dataset.metadata.channels
        self._extents = dataset.placement.extents
        self._starts = [e.start for e in self._extents]
        self._type = dataset.metadata.sample_type
        self._rule = conversion_rule(self._type)
        self._frame = self._channels * self._type.sample_bytes
        self._bytes = bytearray(frames * self._frame)
        self._buffer = np.frombuffer(self._bytes, np.uint8)

    def read(
        self,
        start: int,
        out: NDArray[np.complex64],
        clipped: NDArray[np.int64],
        invalid: NDArray[np.int64],
    ) -> None:
        """Fill out, shape (Nr, n), with frames start..start+n-1; counts are added to.

        Raises:
            InputError: the file became shorter, or cannot be read.
        """
        frames = out.shape[1]
        view = memoryview(self._bytes)
        done = 0
        k = bisect_right(self._starts, start) - 1
        while done < frames:
            extent = self._extents[k]
            skip = start + done - extent.start
            take = min(frames - done, extent.count - skip)
            part = view[done * self._frame : (done + take) * self._frame]
            self._data.read_into(self._file, extent.byte + skip * self._frame, part)
            done += take
            k += 1
        raw = self._buffer[: frames * self._frame].view(self._type.native)
        if self._type.swapped:
            raw.byteswap(inplace=True)
        raw = raw.reshape(frames, self._channels, 2)
        target = out.view(np.float32).reshape(self._channels, frames, 2)
        if self._type.is_integer:
            convert_integers(raw, self._rule, target, clipped)
        else:
            convert_floats(raw, self._rule, target, invalid)


def conversion_rule(sample_type: SampleType) -> NDArray[np.floating]:
    """The numbers that the conversion kernels take, in the type they calculate in."""
    scale = 1.0 / sample_type.full_scale
    if not sample_type.is_integer:
        return np.array([scale], sample_type.native)
    wide = sample_type.stored.itemsize > 2
    numbers = [sample_type.offset, scale, *sample_type.range_ends]
    return np.array(numbers, np.float64 if wide else np.float32)
