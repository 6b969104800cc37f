"""Measured frames of a share, kept in a file until all shares are there.

One HDF5 group for each batch of a single pass: the measured frames, and what their numbering was
derived from. Files appear whole or not at all; they are removed once the results are in place.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import asdict, dataclass, fields
from pathlib import Path
from types import TracebackType
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from spatiq.metrics.frame_table import MeasuredFrames
from spatiq.metrics.reference_following import Numbering
from spatiq.receiver.frame_batch import LostFrame
from spatiq.results.whole_files import whole_file


@dataclass(frozen=True, eq=False)
class NumberingInput:
    """What a batch's numbers are derived from, and the numbers that the share came to alone.

    Attributes:
        plain: bits as decided, uint8 (F, n_bits).
        crc_ok: (F,), or None.
        position: of each frame in the original stream, samples (F,).
        numbers, resolved: as in `Numbering`.
    """

    plain: NDArray[np.uint8]
    crc_ok: NDArray[np.bool_] | None
    position: NDArray[np.float64]
    numbers: NDArray[np.int64]
    resolved: NDArray[np.bool_]

    @classmethod
    def of(
        cls,
        plain: NDArray[np.uint8],
        crc_ok: NDArray[np.bool_] | None,
        position: NDArray[np.float64],
        numbering: Numbering,
    ) -> NumberingInput:
        """Input and outcome of one call of a numberer."""
        return cls(plain, crc_ok, position, numbering.numbers, numbering.resolved)


class SpoolWriter:
    """Writes a share's file; a context manager."""

    def __init__(self, path: Path) -> None:
        self._whole = whole_file(path, overwrite=True)
        self._count = 0

    def __enter__(self) -> SpoolWriter:
        """Open it under a temporary name."""
        self._file = h5py.File(self._whole.__enter__(), "w", rdcc_nbytes=0)
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Give it its name, if all went well."""
        try:
            self._file.close()
        finally:
            self._whole.__exit__(kind, error, trace)

    def add(self, frames: MeasuredFrames, basis: NumberingInput) -> None:
        """Append a batch.

        Raises:
            TypeError: frames hold something that no file of this kind can.
        """
        group = self._file.create_group(f"{self._count:08d}")
        self._count += 1
        for one in fields(frames):
            value = getattr(frames, one.name)
            if one.name == "lost":
                group.attrs["lost"] = len(value)
                text = json.dumps([asdict(frame) for frame in value])
                group.create_dataset("lost", data=np.frombuffer(text.encode(), np.uint8))
            elif isinstance(value, dict):
                for name, column in value.items():
                    group.create_dataset(f"{one.name}/{name}", data=column)
            elif isinstance(value, np.ndarray):
                group.create_dataset(one.name, data=value)
            elif value is not None:
                raise TypeError(f"measured frames: {one.name} is a {type(value).__name__}")
        bits = group.create_dataset("basis/plain", data=np.packbits(basis.plain, axis=1))
        bits.attrs["bits"] = basis.plain.shape[1]
        for name in ("crc_ok", "position", "numbers", "resolved"):
            value = getattr(basis, name)
            if value is not None:
                group.create_dataset(f"basis/{name}", data=value)


def read_spool(path: Path) -> Iterator[tuple[MeasuredFrames, NumberingInput]]:
    """Batches of a share's file, in order."""
    with h5py.File(path, "r", locking=False) as file:
        for name in file:
            group = file[name]
            yield _frames(group), _basis(group)


def read_bases(path: Path) -> Iterator[NumberingInput]:
    """What the numbers of each batch of a share's file are derived from, in order."""
    with h5py.File(path, "r", locking=False) as file:
        for name in file:
            yield _basis(file[name])


def _frames(group: h5py.Group) -> MeasuredFrames:
    values: dict[str, Any] = {}
    for one in fields(MeasuredFrames):
        if one.name == "lost":
            listed = json.loads(group["lost"][:].tobytes() or b"[]")
            values["lost"] = [LostFrame(**frame) for frame in listed]
        elif one.name not in group:
            values[one.name] = None
        elif isinstance(group[one.name], h5py.Group):
            values[one.name] = {name: data[:] for name, data in group[one.name].items()}
        else:
            values[one.name] = group[one.name][:]
    return MeasuredFrames(**values)


def _basis(group: h5py.Group) -> NumberingInput:
    basis = group["basis"]
    count = int(basis["plain"].attrs["bits"])
    packed = basis["plain"][:]
    plain = np.unpackbits(packed, axis=1, count=count) if packed.size else packed[:, :0]
    if not packed.size:
        plain = np.zeros((packed.shape[0], count), np.uint8)
    crc = basis["crc_ok"][:] if "crc_ok" in basis else None
    return NumberingInput(
        plain, crc, basis["position"][:], basis["numbers"][:], basis["resolved"][:]
    )
