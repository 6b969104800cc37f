"""Waveforms to be played: one level for all antennas, below full scale by a stated headroom."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import partial

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.transmit.data_bits import random_data_bits
from spatiq.transmit.front_end import Context, Samples
from spatiq.transmit.quantisation import Converter
from spatiq.transmit.randomness import Purpose, generator
from spatiq.transmit.scenario import FORMAT_BITS
from spatiq.transmit.shaping import FrameStream, chunks, reblock
from spatiq.transmit.spacing import Spacing, frame_starts
from spatiq.transmit.waveform import waveform_length, waveform_stream

Watch = Callable[[Iterator[Samples], int], Iterator[Samples]]

CAUTION = (
    "Caution: play this only into a cabled and attenuated or shielded set-up, or as your licence "
    "and the local rules on radio and exposure allow."
)


@dataclass(frozen=True, eq=False)
class Playback:
    """Baseband of all transmit antennas, scaled for a converter of full scale 1.0.

    Attributes:
        link: the link description.
        sample_rate: Hz.
        n_samples: samples per antenna.
        datatype: SigMF sample format.
        starts: float64 (F,); instants of the frames' first symbols, samples.
        gain: from unit symbol amplitude to full scale.
        peak: largest sample magnitude on any antenna, as a fraction of full scale.
        rms: float64 (Nt,); rms of each antenna over the whole waveform, fraction of full scale.
    """

    link: Link
    sample_rate: float
    n_samples: int
    datatype: str
    starts: NDArray[np.float64]
    gain: float
    peak: float
    rms: NDArray[np.float64]
    _stream: FrameStream = field(repr=False)

    def blocks(self, block_size: int = 1 << 18) -> Iterator[Samples]:
        """Samples in consecutive blocks, complex64 (Nt, block_size), the last one shorter.

        Rounded to the levels of an integer datatype; nothing reaches full scale.
        """
        return reblock(self._chunks(), block_size)

    def _chunks(self) -> Iterator[Samples]:
        bits = FORMAT_BITS[self.datatype]
        context = Context(self.sample_rate, self.link.antennas, 0, 0)
        stage = None if bits is None else Converter(bits).begin(context)
        for chunk in chunks(self._stream, self.n_samples):
            chunk *= np.float32(self.gain)
            yield chunk if stage is None else stage(chunk, 0)


def playback(
    link: Link,
    *,
    frames: int,
    samples_per_symbol: float,
    first_frame: int = 0,
    spacing: Spacing = "link",
    datatype: str = "ci16_le",
    headroom_db: float = 3.0,
    seed: int = 0,
    watch: Watch | None = None,
) -> Playback:
    """Waveforms of consecutive frames for all transmit antennas.

    The waveform is made once to find its peak, and again when it is read; all antennas get the same
    gain, so that their relative levels are as the link description says. The first pulse begins at
    the first sample.

    Args:
        link: the link description.
        frames: number of frames, 1 or more.
        samples_per_symbol: any real number from 1 up.
        first_frame: number of the first frame.
        spacing: see `spatiq.transmit.spacing.frame_starts`.
        datatype: a key of `FORMAT_BITS`.
        headroom_db: full scale over the largest sample magnitude, 0.1 to 60 dB.
        seed: for the bits of "data" fields and random silences.
        watch: passes the blocks of the first run through, given their total number of samples; to
            show progress.

    Raises:
        InputError: an argument out of range, or nothing to send.
    """
    _check(frames, first_frame, seed, datatype, headroom_db)
    rng = generator(seed, Purpose.STARTS)
    begin = float(np.ceil(link.pulse.half_span * samples_per_symbol))
    starts = frame_starts(link, frames, spacing, begin, samples_per_symbol, rng)
    numbers = np.arange(first_frame, first_frame + frames)
    data = partial(random_data_bits, link, seed)
    stream = waveform_stream(link, numbers, starts, samples_per_symbol, 0.0, data)
    n_samples = waveform_length(stream)
    made = chunks(stream, n_samples)
    peak, rms = _levels(made if watch is None else watch(made, n_samples), stream.depth)
    if peak == 0:
        raise InputError(link.name, "frame", "nothing but silence", "something to send")
    gain = 10 ** (-headroom_db / 20) / peak
    return Playback(
        link=link,
        sample_rate=samples_per_symbol * link.symbol_rate_hz,
        n_samples=n_samples,
        datatype=datatype,
        starts=starts,
        gain=gain,
        peak=peak * gain,
        rms=rms * gain,
        _stream=stream,
    )


def _check(frames: int, first_frame: int, seed: int, datatype: str, headroom_db: float) -> None:
    if not 1 <= frames <= 100_000_000:
        raise InputError("waveform", "frames", frames, "1 to 100000000")
    if not 0 <= first_frame < 2**62:
        raise InputError("waveform", "first frame", first_frame, "0 to 2^62 - 1")
    if seed < 0:
        raise InputError("waveform", "seed", seed, "0 or more")
    if datatype not in FORMAT_BITS:
        expected = f"one of {', '.join(FORMAT_BITS)}"
        raise InputError("waveform", "datatype", repr(datatype), expected)
    if not 0.1 <= headroom_db <= 60.0:
        raise InputError("waveform", "headroom", headroom_db, "0.1 to 60 dB")


def _levels(made: Iterator[Samples], antennas: int) -> tuple[float, NDArray[np.float64]]:
    """Largest magnitude, and rms of each antenna."""
    peak = 0.0
    energy = np.zeros(antennas)
    n_samples = 0
    for chunk in made:
        n_samples += chunk.shape[1]
        power = chunk.real**2 + chunk.imag**2
        peak = max(peak, float(power.max()))
        energy += power.sum(axis=1, dtype=np.float64)
    return float(np.sqrt(peak)), np.sqrt(energy / max(n_samples, 1))
