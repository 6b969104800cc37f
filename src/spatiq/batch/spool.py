"""Measured frames of a share, kept in a file until all shares are there.

For each batch of a single pass, what its numbering was derived from, then the measured frames; each
with its length before it, so that either can be passed over. The objects are pickled: only the same
version of the program reads them (the folder's name says so), and they are removed once the results
are in place. Files appear whole or not at all.
"""

from __future__ import annotations

import pickle
import struct
from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from spatiq.metrics.frame_table import MeasuredFrames
from spatiq.metrics.reference_following import Numbering
from spatiq.results.whole_files import whole_file

_LENGTH = struct.Struct("<Q")


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


@dataclass(frozen=True, eq=False)
class _Packed:
    """The same with its bits packed."""

    plain: NDArray[np.uint8]
    bits: int
    rest: tuple[Any, ...]

    @classmethod
    def of(cls, basis: NumberingInput) -> _Packed:
        rest = basis.crc_ok, basis.position, basis.numbers, basis.resolved
        return cls(np.packbits(basis.plain, axis=1), basis.plain.shape[1], rest)

    def open(self) -> NumberingInput:
        plain = np.unpackbits(self.plain, axis=1)[:, : self.bits]
        return NumberingInput(np.ascontiguousarray(plain), *self.rest)


class SpoolWriter:
    """Writes a share's file; a context manager."""

    def __init__(self, path: Path) -> None:
        self._path = path
        self._stack = ExitStack()

    def __enter__(self) -> SpoolWriter:
        """Open it under a temporary name."""
        with ExitStack() as stack:
            partial = stack.enter_context(whole_file(self._path, overwrite=True))
            self._file = stack.enter_context(partial.open("wb"))
            self._stack = stack.pop_all()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Give it its name, if all went well."""
        self._stack.__exit__(kind, error, trace)

    def add(self, frames: MeasuredFrames, basis: NumberingInput) -> None:
        """Append a batch."""
        for thing in (_Packed.of(basis), frames):
            data = pickle.dumps(thing, protocol=pickle.HIGHEST_PROTOCOL)
            self._file.write(_LENGTH.pack(len(data)))
            self._file.write(data)


def read_spool(path: Path) -> Iterator[tuple[MeasuredFrames, NumberingInput]]:
    """Batches of a share's file, in order."""
    with path.open("rb") as file:
        while (length := _next_length(file)) is not None:
            basis: _Packed = pickle.loads(file.read(length))
            frames: MeasuredFrames = pickle.loads(file.read(_next_length(file) or 0))
            yield frames, basis.open()


def read_bases(path: Path) -> Iterator[NumberingInput]:
    """What the numbers of each batch of a share's file are derived from, in order."""
    with path.open("rb") as file:
        while (length := _next_length(file)) is not None:
            basis: _Packed = pickle.loads(file.read(length))
            file.seek(_next_length(file) or 0, 1)
            yield basis.open()


def _next_length(file: BinaryIO) -> int | None:
    head = file.read(_LENGTH.size)
    return _LENGTH.unpack(head)[0] if head else None
