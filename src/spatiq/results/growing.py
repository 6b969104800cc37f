"""Datasets that grow by rows, a whole number of chunks at a time."""

from __future__ import annotations

import math
from typing import Any

import h5py
import numpy as np
from numpy.typing import ArrayLike, NDArray

_CHUNK_BYTES = 1 << 18
_MOST_ROWS = 4096
_WIDEST = 1 << 16  # symbol periods of one frame in one chunk


class GrowingDataset:
    """One dataset with a leading row axis, appended through a buffer of one chunk.

    A chunk is compressed once: rows wait until it is full. `finish` writes what is left.

    Args:
        group: HDF5 group it is created in.
        name: its name.
        dtype: stored type.
        row_shape: shape of one row; no axis may be 0.
        unit: stored as attribute; "" when there is none.
        meaning: stored as attribute.
        compress: gzip with byte shuffle; off for data that does not shrink.
    """

    def __init__(
        self,
        group: h5py.Group,
        name: str,
        dtype: str,
        row_shape: tuple[int, ...] = (),
        *,
        unit: str = "",
        meaning: str,
        compress: bool = True,
    ) -> None:
        row_bytes = np.dtype(dtype).itemsize * math.prod(row_shape)
        rows = max(1, min(_MOST_ROWS, _CHUNK_BYTES // row_bytes))
        inner = tuple(min(n, _WIDEST) for n in row_shape)
        # Level 1: higher levels take several times longer for a few percent on such columns.
        packing = {"compression": "gzip", "compression_opts": 1, "shuffle": True}
        self.dataset = group.create_dataset(
            name,
            shape=(0, *row_shape),
            maxshape=(None, *row_shape),
            chunks=(rows, *inner),
            dtype=dtype,
            **(packing if compress else {}),
        )
        self.dataset.attrs["unit"] = unit
        self.dataset.attrs["meaning"] = meaning
        self._buffer: NDArray[Any] = np.empty((rows, *row_shape), dtype)
        self._waiting = 0
        self._written = 0

    def append(self, values: ArrayLike) -> None:
        """Add rows, shape (n, *row_shape).

        Raises:
            ValueError: rows of another shape.
        """
        rows = np.asarray(values)
        if rows.shape[1:] != self._buffer.shape[1:]:
            raise ValueError(
                f"{self.dataset.name}: rows of shape {rows.shape[1:]}; "
                f"expected {self._buffer.shape[1:]}"
            )
        done = 0
        while done < rows.shape[0]:
            take = min(rows.shape[0] - done, self._buffer.shape[0] - self._waiting)
            self._buffer[self._waiting : self._waiting + take] = rows[done : done + take]
            self._waiting += take
            done += take
            if self._waiting == self._buffer.shape[0]:
                self.finish()

    def finish(self) -> None:
        """Write the rows that wait in the buffer."""
        if not self._waiting:
            return
        stop = self._written + self._waiting
        self.dataset.resize(stop, axis=0)
        self.dataset[self._written : stop] = self._buffer[: self._waiting]
        self._written = stop
        self._waiting = 0
