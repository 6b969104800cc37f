"""The results file, written while the recording is measured; layout.md documents its layout.

Memory is one chunk of each dataset, whatever the length of the recording. The file appears under
its name only when it is complete.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from contextlib import ExitStack
from operator import attrgetter
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any

import h5py
import numpy as np

from spatiq.metrics.frame_table import COLUMNS, Mark, MeasuredFrames
from spatiq.metrics.path_figures import ANTENNA, RECEIVE
from spatiq.receiver.dispersive_plan import WIDEST, is_dispersive
from spatiq.receiver.frame_batch import LostFrame
from spatiq.results.growing import GrowingDataset
from spatiq.results.plain import json_text, leaves, plain
from spatiq.results.provenance import describe
from spatiq.results.whole_files import whole_file

if TYPE_CHECKING:
    from spatiq.link.description import Link
    from spatiq.receiver.options import ReceiverOptions
    from spatiq.recording.recording import Recording

FORMAT = "spatiq results"
LAYOUT_VERSION = 1

# Dataset of /lost -> stored type, unit, meaning.
LOST: dict[str, tuple[str, str, str]] = {
    "segment": ("i4", "", "index of the contiguous run of samples it was expected in"),
    "start_sample": (
        "f8",
        "samples",
        "expected centre of its first symbol, per-channel file index",
    ),
    "frame_number": ("i8", "", "number the transmitter gave it; -1 when unknown"),
    "reason": ("u2", "", "why it is not in the frame table: index into /lost/reasons"),
}


# Further figures of each transmit antenna, and their meanings; NaN where there are none.
PER_ANTENNA: dict[str, str] = {
    "channel/error_variance": "variance of each coefficient of the estimated channel",
    "antennas/error_energy": "sum of |y - h s|^2 behind evm_percent: add over frames to pool",
    "antennas/reference_energy": "sum of |h s|^2 behind evm_percent",
}
# Dataset -> field of `PathFigures`; NaN where there are none.
PER_PATH: dict[str, str] = {
    name.replace("receive_", "receive/").replace("antenna_", "antennas/"): name
    for name in (*RECEIVE, *ANTENNA)
}
# Figures of each receive channel's front end: name in `ReceiveFigures`, unit, meaning; NaN where
# they cannot be told.
PER_RECEIVE: dict[str, tuple[str, str, str]] = {
    "receive/iq_gain_db": ("iq_gain_db", "dB", "gain of Q over I"),
    "receive/iq_gain_std_db": ("iq_gain_std_db", "dB", "its standard deviation"),
    "receive/iq_phase_deg": ("iq_phase_deg", "degrees", "departure of I and Q from quadrature"),
    "receive/iq_phase_std_deg": ("iq_phase_std_deg", "degrees", "its standard deviation"),
    "receive/dc_real": ("constant.real", "", "real part of the DC offset, full scale = 1"),
    "receive/dc_imag": ("constant.imag", "", "imaginary part of the DC offset"),
    "receive/dc_variance": ("constant_var", "", "variance of the complex DC offset"),
}
LLR_SIGN = "positive: 0 is the likelier value of the bit"


class ResultsWriter:
    """Writes one results file; a context manager.

    with ResultsWriter(path, link, recording, options) as writer:
        for frames in measure(recording, link, options):
            writer.add(frames)
            summary.add(frames)
        writer.close(summary.as_dict())

    Leaving the block in any other way than through `close` leaves nothing behind.

    Args:
        path: the file to be.
        link: what was on the air.
        recording: what was measured; its digest is taken in `close`.
        options: how it was received; `keep_symbols` adds /symbols, `soft_output` /soft, a
            dispersive channel /impulse_responses.
        overwrite: replace a file that stands at `path`.

    Raises:
        InputError: the file could not be written (see `check_target`).
    """

    def __init__(
        self,
        path: Path,
        link: Link,
        recording: Recording,
        options: ReceiverOptions,
        *,
        overwrite: bool = False,
    ) -> None:
        self.path = path
        self.frames = 0
        self._recording = recording
        self._provenance = describe(link, recording, options)
        self._stack = ExitStack()
        self._overwrite = overwrite
        self._complete = False
        self._reasons: dict[str, int] = {}
        sets = link.codebook.antenna_sets
        self._set_names = link.codebook.set_names
        antennas, channels = int(link.antennas), int(recording.channels)
        self._confusion = np.zeros((len(sets), len(sets)), np.int64)
        self._set_mask = np.zeros((len(sets), antennas), np.uint8)
        for row, members in enumerate(sets):
            self._set_mask[row, list(members)] = 1
        periods = int(link.layout.payload_index.size) if options.keep_symbols else 0
        self._words = link.words_per_frame if options.keep_symbols else 0
        self._soft = options.soft_output
        self._soft_bits = 0
        if self._soft != "none":
            self._soft_bits = link.words_per_frame * link.codebook.bits
        self._shapes = (len(sets), channels, antennas, periods)
        self._lags = WIDEST.size if is_dispersive(link, options) else 0

    def __enter__(self) -> ResultsWriter:
        """Create the temporary file with all its datasets, empty."""
        with ExitStack() as stack:
            partial = stack.enter_context(whole_file(self.path, overwrite=self._overwrite))
            # No chunk cache: whole chunks are written once, and 70 caches would fill 100 MB.
            self._file = stack.enter_context(h5py.File(partial, "w", rdcc_nbytes=0))
            self._growing = self._create()
            self._stack = stack.pop_all()
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Rename the file if it is complete, else remove it."""
        if error is None and not self._complete:
            error = RuntimeError(f"{self.path}: left without a summary; nothing is kept")
            self._stack.__exit__(type(error), error, None)
            raise error
        self._stack.__exit__(kind, error, trace)

    def _create(self) -> dict[str, GrowingDataset]:
        sets, channels, antennas, periods = self._shapes
        file = self._file
        file.attrs["format"] = FORMAT
        file.attrs["layout_version"] = LAYOUT_VERSION
        frames, lost = file.create_group("frames"), file.create_group("lost")
        made = {
            f"frames/{c.name}": GrowingDataset(
                frames, c.name, c.dtype, unit=c.unit, meaning=c.meaning
            )
            for c in COLUMNS
        }
        frames["marks"].attrs["flags"] = json.dumps({m.name: int(m) for m in Mark if m})
        for name, (dtype, unit, meaning) in LOST.items():
            made[f"lost/{name}"] = GrowingDataset(lost, name, dtype, unit=unit, meaning=meaning)

        def add(
            name: str, dtype: str, shape: tuple[int, ...], meaning: str, unit: str = "", **how: bool
        ) -> None:
            group, _, leaf = name.rpartition("/")
            parent = file.require_group(group)
            made[name] = GrowingDataset(
                parent, leaf, dtype, shape, unit=unit, meaning=meaning, **how
            )

        confusion = "per frame; row = antenna set sent, column = antenna set decided"
        add("confusion/per_frame", "u4", (sets, sets), confusion, "words")
        for part in ("real", "imag"):
            channel = f"{part} part of the estimated channel, row = receive, column = transmit"
            add(f"channel/{part}", "f8", (channels, antennas), channel)
        evm = "EVM rms of the symbol periods that each antenna sent; NaN when it sent none"
        add("antennas/evm_percent", "f8", (antennas,), evm, "%")
        power = "mean over receive antennas of |h|^2, full scale squared"
        add("antennas/power", "f8", (antennas,), power)
        for name, meaning in PER_ANTENNA.items():
            add(name, "f8", (antennas,), meaning)
        for name, figure in PER_PATH.items():
            unit, meaning = (RECEIVE | ANTENNA)[figure]
            add(name, "f8", (channels if figure in RECEIVE else antennas,), meaning, unit)
        for name, (_, unit, meaning) in PER_RECEIVE.items():
            add(name, "f8", (channels,), meaning, unit)
        for part in ("real", "imag") if self._lags else ():
            meaning = f"{part} part of the estimated impulse responses, first axis the lag"
            add(f"impulse_responses/{part}", "f8", (self._lags, channels, antennas), meaning)
            dataset = file[f"impulse_responses/{part}"]
            dataset.attrs["lags"] = np.arange(WIDEST.first, WIDEST.last + 1)
        if periods:
            for part in ("real", "imag"):
                meaning = f"{part} part of the received payload vectors, carrier removed"
                # Noise does not shrink: compressing it would only cost time.
                add(f"symbols/{part}", "f4", (periods, channels), meaning, compress=False)
            add("symbols/words_decided", "i4", (self._words,), "decided words of the payload")
            add("symbols/words_sent", "i4", (self._words,), "the same as sent; -1 where unknown")
        if self._soft_bits:
            meaning = "log-likelihood ratio, natural logarithm, of each payload bit as sent"
            add("soft/llr", "f4", (self._soft_bits,), meaning, compress=False)
            file["soft/llr"].attrs.update({"sign": LLR_SIGN, "kind": self._soft})
        return made

    def add(self, frames: MeasuredFrames) -> None:
        """Append a batch of measured frames and the losses that came with it.

        Raises:
            ValueError: columns other than those of the frame table, arrays of another shape, or
                symbols or ratios missing when the options keep them.
        """
        names = {c.name for c in COLUMNS}
        if frames.columns.keys() != names:
            odd = sorted(frames.columns.keys() ^ names)
            raise ValueError(f"columns missing from, or foreign to, the frame table: {odd}")
        values: dict[str, Any] = {f"frames/{name}": v for name, v in frames.columns.items()}
        values["confusion/per_frame"] = frames.confusion
        values["channel/real"], values["channel/imag"] = frames.channel.real, frames.channel.imag
        values["antennas/evm_percent"] = frames.antenna_evm_percent
        values["antennas/power"] = frames.antenna_power
        for name, rows in zip(
            PER_ANTENNA,
            (
                frames.channel_error_variance,
                frames.antenna_error_energy,
                frames.antenna_reference_energy,
            ),
            strict=True,
        ):
            values[name] = np.full(frames.antenna_power.shape, np.nan) if rows is None else rows
        for name, figure in PER_PATH.items():
            if frames.paths is not None:
                values[name] = getattr(frames.paths, figure)
            else:
                width = frames.channel.shape[1 if figure in RECEIVE else 2]
                values[name] = np.full((frames.count, width), np.nan)
        nothing = np.full(frames.channel.shape[:2], np.nan)
        for name, (attribute, _, _) in PER_RECEIVE.items():
            found = frames.receive is not None
            values[name] = attrgetter(attribute)(frames.receive) if found else nothing
        if self._lags:
            shape = (frames.count, self._lags, *frames.channel.shape[1:])
            taps = np.full(shape, np.nan) if frames.taps is None else frames.taps
            values["impulse_responses/real"] = taps.real
            values["impulse_responses/imag"] = taps.imag
        if "symbols/real" in self._growing:
            if frames.symbols is None:
                raise ValueError("the options keep the symbols, but this batch has none")
            values["symbols/real"] = frames.symbols.real
            values["symbols/imag"] = frames.symbols.imag
            values["symbols/words_decided"] = frames.words_decided
            values["symbols/words_sent"] = frames.words_sent
        if self._soft_bits:
            if frames.llr is None:
                raise ValueError("the options keep soft output, but this batch has none")
            values["soft/llr"] = frames.llr
        for name, rows in values.items():
            if len(rows) != frames.count:
                raise ValueError(f"{name}: {len(rows)} rows for {frames.count} frames")
        for name, rows in values.items():
            self._growing[name].append(rows)
        self._confusion += frames.confusion.sum(axis=0)
        self.frames += frames.count
        self._add_lost(frames.lost)

    def _add_lost(self, lost: list[LostFrame]) -> None:
        if not lost:
            return
        reasons = [self._reasons.setdefault(f.reason, len(self._reasons)) for f in lost]
        self._growing["lost/segment"].append([f.segment for f in lost])
        self._growing["lost/start_sample"].append([f.start_sample for f in lost])
        self._growing["lost/frame_number"].append([f.frame_number for f in lost])
        self._growing["lost/reason"].append(reasons)

    def close(self, summary: Mapping[str, Any], digest: str = "") -> None:
        """Write what waits, the summary, the digest of the recording and the provenance.

        The file takes its name when the `with` block ends. Reads the whole recording once more,
        unless its digest is given.
        """
        for dataset in self._growing.values():
            dataset.finish()
        file = self._file
        total = file["confusion"].create_dataset("total", data=self._confusion)
        total.attrs["unit"] = "words"
        total.attrs["meaning"] = "sum of per_frame over all frames"
        mask = file["confusion"].create_dataset("antenna_sets", data=self._set_mask)
        mask.attrs["unit"] = ""
        mask.attrs["meaning"] = (
            "row = antenna set, column = transmit antenna; 1 = active in the set"
        )
        text = h5py.string_dtype()
        names = file["confusion"].create_dataset("names", data=list(self._set_names), dtype=text)
        names.attrs["unit"] = ""
        names.attrs["meaning"] = "name of each antenna set"
        reasons = list(self._reasons)
        file["lost"].create_dataset("reasons", (len(reasons),), text, data=reasons or None)
        group = file.create_group("summary")
        group.create_dataset("json", data=json_text(summary), dtype=text)
        for name, value in leaves(plain(summary)):
            if value is not None:
                group.attrs[name] = value
        taken = {"recording_sha256": digest or self._recording.digest()}
        provenance = file.create_group("provenance")
        for name, value in (self._provenance | taken).items():
            provenance.create_dataset(name, data=value, dtype=text)
        file.flush()
        self._complete = True
