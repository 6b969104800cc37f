"""Results read back: figures by name, in blocks or whole."""

from __future__ import annotations

import json
from collections.abc import Iterator
from pathlib import Path
from types import TracebackType
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.receiver.frame_batch import LostFrame
from spatiq.results.hdf5 import FORMAT, LAYOUT_VERSION
from spatiq.results.wording import antenna_set


class Results:
    """A results file, open for reading; a context manager. Made by `open_results`.

    Attributes:
        path: the file.
        file: the open `h5py.File`, for what has no method here.
    """

    def __init__(self, path: Path, file: h5py.File) -> None:
        self.path = path
        self.file = file

    def __enter__(self) -> Results:
        """Itself."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Close the file."""
        self.close()

    def close(self) -> None:
        """Close the file; arrays that were read stay."""
        self.file.close()

    @property
    def count(self) -> int:
        """Number of frames, F."""
        return int(self.file["frames/frame"].shape[0])

    @property
    def column_names(self) -> tuple[str, ...]:
        """Names of the frame table's columns that this file holds."""
        return tuple(self.file["frames"])

    def column(self, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
        """Rows start..stop-1 of a column, shape (n,).

        Raises:
            InputError: no column of that name.
        """
        if name not in self.file["frames"]:
            raise InputError(self.path, "frames", name, f"one of {', '.join(self.column_names)}")
        return self.rows(f"frames/{name}", start, stop)

    def blocks(self, rows: int = 4096) -> Iterator[dict[str, NDArray[Any]]]:
        """The frame table in blocks of `rows` frames: column name -> array of shape (n,)."""
        for start in range(0, self.count, rows):
            yield {name: self.column(name, start, start + rows) for name in self.column_names}

    def rows(self, name: str, start: int = 0, stop: int | None = None) -> NDArray[Any]:
        """Rows start..stop-1 of any dataset of figures by its path, as layout.md lists them.

        Raises:
            InputError: no such dataset.
        """
        if not isinstance(self.file.get(name), h5py.Dataset):
            raise InputError(self.path, name, "nothing", "a dataset that the layout lists")
        rows: NDArray[Any] = self.file[name][start:stop]
        return rows

    def channel(self, start: int = 0, stop: int | None = None) -> NDArray[np.complex128]:
        """Estimated channels of frames start..stop-1, complex128, shape (n, Nr, Nt)."""
        return self._complex("channel", np.complex128, start, stop)

    def antenna_evm_percent(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]:
        """EVM of each transmit antenna in percent, shape (n, Nt); NaN where it sent nothing."""
        return self.rows("antennas/evm_percent", start, stop)

    def antenna_power(self, start: int = 0, stop: int | None = None) -> NDArray[np.float64]:
        """Received power of each transmit antenna, full scale squared, shape (n, Nt)."""
        return self.rows("antennas/power", start, stop)

    def confusion(self, start: int = 0, stop: int | None = None) -> NDArray[np.uint32]:
        """Antenna confusion of frames start..stop-1, shape (n, A, A); row sent, column decided."""
        return self.rows("confusion/per_frame", start, stop)

    @property
    def confusion_total(self) -> NDArray[np.int64]:
        """Antenna confusion of all frames, shape (A, A)."""
        return self.rows("confusion/total", 0, None)

    @property
    def antenna_sets(self) -> tuple[tuple[int, ...], ...]:
        """Antennas of each set, in the order of the confusion matrix."""
        mask = self.file["confusion/antenna_sets"][:]
        return tuple(tuple(int(a) for a in np.flatnonzero(row)) for row in mask)

    @property
    def set_names(self) -> tuple[str, ...]:
        """Name of each antenna set, in the order of the confusion matrix."""
        if "confusion/names" not in self.file:  # files of earlier versions: sets tell themselves
            return tuple(antenna_set(s) for s in self.antenna_sets)
        return tuple(str(name) for name in self.file["confusion/names"].asstr()[:])

    @property
    def has_symbols(self) -> bool:
        """Whether received symbols and words were kept."""
        return "symbols" in self.file

    def symbols(self, start: int = 0, stop: int | None = None) -> NDArray[np.complex64]:
        """Received payload vectors, carrier removed, complex64, shape (n, Kp, Nr).

        Raises:
            InputError: they were not kept.
        """
        self._need_symbols()
        return self._complex("symbols", np.complex64, start, stop)

    def words(
        self, start: int = 0, stop: int | None = None
    ) -> tuple[NDArray[np.int32], NDArray[np.int32]]:
        """Words decided and words sent (-1 where unknown), each of shape (n, Kw).

        Raises:
            InputError: they were not kept.
        """
        self._need_symbols()
        decided = self.rows("symbols/words_decided", start, stop)
        return decided, self.rows("symbols/words_sent", start, stop)

    def impulse_responses(
        self, start: int = 0, stop: int | None = None
    ) -> tuple[NDArray[np.int64], NDArray[np.complex128]]:
        """Lags in symbol periods, (L,), and impulse responses, complex128, shape (n, L, Nr, Nt).

        Raises:
            InputError: the channel was taken for flat.
        """
        if "impulse_responses" not in self.file:
            expected = "results measured on a dispersive channel"
            raise InputError(self.path, "impulse_responses", "none", expected)
        lags = np.asarray(self.file["impulse_responses/real"].attrs["lags"], np.int64)
        return lags, self._complex("impulse_responses", np.complex128, start, stop)

    @property
    def llr_kind(self) -> str:
        """How the log-likelihood ratios were taken: "exact", "max-log", or "none" when not."""
        return str(self.file["soft/llr"].attrs["kind"]) if "soft" in self.file else "none"

    def llr(self, start: int = 0, stop: int | None = None) -> NDArray[np.float32]:
        """Log-likelihood ratios of the payload bits as sent, float32, shape (n, Kw * b).

        Natural logarithm; positive when 0 is the likelier value.

        Raises:
            InputError: they were not asked for.
        """
        if "soft" not in self.file:
            raise InputError(self.path, "soft", "none", "results measured with soft output")
        return self.rows("soft/llr", start, stop)

    def lost(self, rows: int = 4096) -> Iterator[LostFrame]:
        """Frames that were expected and are not in the table."""
        group = self.file["lost"]
        reasons = [r.decode() if isinstance(r, bytes) else r for r in group["reasons"][:]]
        for start in range(0, group["segment"].shape[0], rows):
            part = slice(start, start + rows)
            for segment, sample, number, code in zip(
                group["segment"][part].tolist(),
                group["start_sample"][part].tolist(),
                group["frame_number"][part].tolist(),
                group["reason"][part].tolist(),
                strict=True,
            ):
                yield LostFrame(segment, sample, number, reasons[code])

    @property
    def summary(self) -> dict[str, Any]:
        """Figures of the whole recording, nested; what is missing is None."""
        figures: dict[str, Any] = json.loads(self._text("summary/json"))
        return figures

    @property
    def provenance(self) -> dict[str, str]:
        """Where the figures come from: name -> text."""
        return {name: self._text(f"provenance/{name}") for name in self.file["provenance"]}

    def _text(self, name: str) -> str:
        return str(self.file[name].asstr()[()])

    def _complex(
        self, group: str, dtype: type[np.complexfloating[Any, Any]], start: int, stop: int | None
    ) -> NDArray[Any]:
        real = self.rows(f"{group}/real", start, stop)
        values: NDArray[Any] = np.empty(real.shape, dtype)
        values.real = real
        values.imag = self.rows(f"{group}/imag", start, stop)
        return values

    def _need_symbols(self) -> None:
        if not self.has_symbols:
            raise InputError(self.path, "symbols", "none", "results measured with symbols kept")


def open_results(path: str | Path) -> Results:
    """Open a results file.

    Raises:
        InputError: the file is absent, not a results file, or of a newer layout.
    """
    place = Path(path)
    expected = "a results file of this program (HDF5)"
    if not place.is_file():
        raise InputError(place, "", "no such file", expected)
    if not h5py.is_hdf5(place):
        raise InputError(place, "", "no HDF5 file", expected)
    # Finished files are never changed in place: no lock is needed, and some drives have none.
    try:
        file = h5py.File(place, "r", locking=False)
    except OSError as error:  # cut short, or damaged: the library says it in several lines
        raise InputError(place, "", f"a damaged file ({error})", expected) from error
    found = file.attrs.get("format"), file.attrs.get("layout_version")
    if found[0] != FORMAT or found[1] != LAYOUT_VERSION:
        file.close()
        shown = f"format {found[0]!a}, layout_version {found[1]}"
        raise InputError(place, "", shown, f"format {FORMAT!r}, layout_version {LAYOUT_VERSION}")
    return Results(place, file)
