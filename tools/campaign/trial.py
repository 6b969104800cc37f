"""One simulated recording: measured as a user would, and by a genie on the same noise.

The genie is told timing, carrier and channel, and decides by maximum likelihood.
"""

from __future__ import annotations

import tempfile
from dataclasses import dataclass, fields
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from spatiq.link.loading import Link
from spatiq.metrics.frame_table import MeasuredFrames
from spatiq.metrics.measuring import measure
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import simulate
from spatiq.transmit.truth import Truth

# Silence after a frame, symbol periods: more than the pulses of two frames reach.
_SILENCE = (40.0, 200.0)

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Setting:
    """What a recording is made of.

    Attributes:
        link: link description.
        receivers: Nr.
        samples_per_symbol: nominal.
        snr_db: over channels of unit mean power.
    """

    link: Link
    receivers: int
    samples_per_symbol: float
    snr_db: float


@dataclass(frozen=True, eq=False)
class Outcome:
    """What came out, one entry for each frame that was found, unless stated otherwise.

    Attributes:
        all_genie_errors: wrong bits of the genie in every frame that was sent.
        genie_errors: wrong bits of the genie.
        errors: wrong bits of the receiver, counted from the truth.
        channel_errors: of the genie when it is given the receiver's channel.
        sampling_errors: of the genie when it is given the receiver's symbols.
        predicted: BER that the receiver predicts.
        error_energy, reference_energy: EVM sums of the receiver.
        noise_energy, signal_energy: the same as simulated: N0 per complex symbol; |H x|^2.
        miscounts: entries of the confusion matrix, and of the bit errors, that the receiver counted
            otherwise than the truth says; of frames whose reference it knew.
        unresolved: 1 for a frame whose place in the reference it did not know.
        false_frames: one entry: detections where no frame is.
    """

    all_genie_errors: Ints
    genie_errors: Ints
    errors: Ints
    channel_errors: Ints
    sampling_errors: Ints
    predicted: Floats
    error_energy: Floats
    reference_energy: Floats
    noise_energy: Floats
    signal_energy: Floats
    miscounts: Ints
    unresolved: Ints
    false_frames: Ints


def join(outcomes: list[Outcome]) -> Outcome:
    """Outcomes of several recordings as one."""
    return Outcome(
        **{f.name: np.concatenate([getattr(o, f.name) for o in outcomes]) for f in fields(Outcome)}
    )


def run_trial(setting: Setting, frames: int, seed: int) -> Outcome:
    """Simulate a recording of `frames` frames, write it, measure it, and compare with the genie."""
    link = setting.link
    reach = ReceiverOptions().cfo_range * link.symbol_rate_hz
    capture = simulate(
        link,
        receive_channels=setting.receivers,
        snr_db=setting.snr_db,
        samples_per_symbol=setting.samples_per_symbol,
        frames=frames,
        spacing=_SILENCE,
        cfo_hz=(-reach, reach),
        seed=seed,
    )
    samples = capture.samples()
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder) / "trial"
        write_recording(base, samples, sample_rate=capture.sample_rate)
        recording = open_recording(base.with_suffix(".sigmf-meta"))
        measured = list(measure(recording, link, ReceiverOptions(keep_symbols=True)))
    truth = capture.truth
    payload = genie_symbols(truth, samples)[:, link.layout.payload_index].astype(np.complex64)
    return _Comparison(truth, payload).outcome(measured)


class _Comparison:
    """Frames of a recording against its truth."""

    def __init__(self, truth: Truth, genie: NDArray[np.complex64]) -> None:
        self._truth = truth
        self._codebook = truth.link.codebook
        self._genie = genie
        self._words = truth.words()
        self._bits_wrong = np.array(
            [bin(difference).count("1") for difference in range(self._codebook.size)]
        )

    def _wrong_bits(self, words: Ints, frame: int) -> int:
        return int(self._bits_wrong[words ^ self._words[frame]].sum())

    def _decide(self, y: NDArray[np.complex64], channel: NDArray[np.complex128]) -> Ints:
        return maximum_likelihood(y, channel, self._truth.N0, self._codebook)

    def outcome(self, measured: list[MeasuredFrames]) -> Outcome:
        """Errors and energies of all frames found."""
        truth = self._truth
        genie = np.array(
            [
                self._wrong_bits(self._decide(self._genie[f], truth.H[f]), f)
                for f in range(truth.frames)
            ]
        )
        taken: set[int] = set()
        rows: list[dict[str, float]] = []
        detections = 0
        for batch in measured:
            for i in range(batch.count):
                detections += 1
                start = batch.columns["start_sample"][i]
                f = int(np.argmin(np.abs(truth.starts - start)))
                far = abs(truth.starts[f] - start) > truth.link.layout.length * truth.spacing / 2
                if not far and f not in taken:
                    taken.add(f)
                    rows.append({"genie_errors": genie[f], **self._row(batch, i, f)})
        if not rows:
            raise RuntimeError(f"none of {truth.frames} frames was found")
        names = [f.name for f in fields(Outcome)]
        columns = {name: np.array([row[name] for row in rows]) for name in names if name in rows[0]}
        return Outcome(
            all_genie_errors=genie, false_frames=np.array([detections - len(rows)]), **columns
        )

    def _row(self, batch: MeasuredFrames, i: int, f: int) -> dict[str, float]:
        truth, columns = self._truth, batch.columns
        assert batch.symbols is not None
        words, estimate = batch.words_decided[i], batch.channel[i]
        # The receiver's carrier phase is its own: turn by the common angle to compare.
        turn = np.vdot(estimate, truth.H[f])
        turn /= abs(turn)
        symbols = batch.symbols[i] * np.complex64(turn)
        carried = truth.link.carried(self._words[f : f + 1])[0]
        vectors = self._codebook.vectors[carried]
        errors = self._wrong_bits(words, f)
        resolved = bool(columns["bits_compared"][i])
        return {
            "errors": errors,
            "channel_errors": self._wrong_bits(self._decide(self._genie[f], estimate * turn), f),
            "sampling_errors": self._wrong_bits(self._decide(symbols, truth.H[f]), f),
            "predicted": columns["predicted_ber"][i],
            "error_energy": columns["evm_error_energy"][i],
            "reference_energy": columns["evm_reference_energy"][i],
            "noise_energy": truth.N0 * batch.symbols[i].size,
            "signal_energy": float(np.sum(np.abs(vectors @ truth.H[f].T) ** 2)),
            "miscounts": self._miscounts(batch, i, f, errors) if resolved else 0,
            "unresolved": not resolved,
        }

    def _miscounts(self, batch: MeasuredFrames, i: int, f: int, errors: int) -> int:
        sets = self._codebook.set_index
        confusion = np.zeros_like(batch.confusion[i])
        np.add.at(confusion, (sets[self._words[f]], sets[batch.words_decided[i]]), 1)
        wrong = int(np.count_nonzero(confusion != batch.confusion[i]))
        return wrong + int(errors != batch.columns["bit_errors"][i])
