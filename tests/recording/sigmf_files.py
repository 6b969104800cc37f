"""Hand-made SigMF files for the tests of the reader: independent of the package's own writer."""

from __future__ import annotations

import io
import json
import tarfile
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

# Written out from the standard's list of formats, not taken from the code under test.
LAYOUTS = {
    "cf64_le": "<f8",
    "cf64_be": ">f8",
    "cf32_le": "<f4",
    "cf32_be": ">f4",
    "ci32_le": "<i4",
    "ci32_be": ">i4",
    "ci16_le": "<i2",
    "ci16_be": ">i2",
    "cu32_le": "<u4",
    "cu32_be": ">u4",
    "cu16_le": "<u2",
    "cu16_be": ">u2",
    "ci8": "i1",
    "cu8": "u1",
}


def random_components(
    datatype: str, frames: int, channels: int, seed: int = 0
) -> NDArray[np.generic]:
    """Components as stored, shape (n, Nr, 2); integers reach both ends of their range."""
    layout = np.dtype(LAYOUTS[datatype])
    rng = np.random.default_rng(seed)
    shape = (frames, channels, 2)
    if layout.kind == "f":
        return rng.standard_normal(shape).astype(layout)
    limits = np.iinfo(layout)
    values = rng.integers(limits.min, limits.max, shape, dtype=np.int64, endpoint=True)
    ends = rng.random(shape) < 0.05
    values[ends] = rng.choice([limits.min, limits.max], int(ends.sum()))
    return values.astype(layout)


def oracle(
    components: NDArray[np.generic], full_scale: float | None = None
) -> NDArray[np.complex128]:
    """Plain conversion of components (n, Nr, 2) to complex128 (Nr, n)."""
    kind, size = components.dtype.kind, components.dtype.itemsize
    wide = components.astype(np.float64)
    half = 2.0 ** (8 * size - 1)
    if kind == "u":
        wide -= half
    wide /= full_scale or (1.0 if kind == "f" else half)
    return (wide[..., 0] + 1j * wide[..., 1]).T


def document(
    datatype: str = "ci16_le",
    channels: int | None = None,
    captures: list[dict[str, Any]] | None = None,
    **fields: Any,
) -> dict[str, Any]:
    """A metadata document; further global fields as core_x=..., None removes a field."""
    head: dict[str, Any] = {
        "core:datatype": datatype,
        "core:version": "1.2.0",
        "core:sample_rate": 1e6,
    }
    if channels is not None:
        head["core:num_channels"] = channels
    for key, value in fields.items():
        name = key.replace("core_", "core:", 1)
        if value is None:
            head.pop(name, None)
        else:
            head[name] = value
    starts = [{"core:sample_start": 0}] if captures is None else captures
    return {"global": head, "captures": starts, "annotations": []}


def put(
    folder: Path,
    name: str,
    meta: dict[str, Any] | bytes | str,
    data: bytes | None,
    data_name: str | None = None,
) -> Path:
    """Write name.sigmf-meta and its data file; gives the path of the metadata."""
    path = folder / f"{name}.sigmf-meta"
    if isinstance(meta, dict):
        meta = json.dumps(meta)
    path.write_bytes(meta if isinstance(meta, bytes) else meta.encode())
    if data is not None:
        (folder / (data_name or f"{name}.sigmf-data")).write_bytes(data)
    return path


def counting(frames: int, channels: int = 1, first: int = 0) -> NDArray[np.int16]:
    """ci16 components whose I is the frame number and whose Q is the channel number."""
    values = np.zeros((frames, channels, 2), "<i2")
    values[..., 0] = first + np.arange(frames)[:, None]
    values[..., 1] = np.arange(channels)
    return values


def numbers(samples: NDArray[np.complexfloating]) -> list[list[int]]:
    """Frame numbers of `counting` samples by channel."""
    return [[int(v) for v in row] for row in np.rint(samples.real * 32768)]


def tar(path: Path, files: list[tuple[str, bytes]], form: int = tarfile.PAX_FORMAT) -> Path:
    """A plain tar of these files."""
    with tarfile.open(path, "w", format=form) as archive:
        for name, data in files:
            info = tarfile.TarInfo(name)
            info.size = len(data)
            archive.addfile(info, io.BytesIO(data))
    return path
