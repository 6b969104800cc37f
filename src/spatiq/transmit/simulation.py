"""A whole recording simulated: frames, channels, offsets, noise, converter, in bounded memory."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.transmit.carrier import Offset, plan_carrier
from spatiq.transmit.frames import received_payload_power
from spatiq.transmit.front_end import Impairment, Samples, begin_all
from spatiq.transmit.noise import Noise
from spatiq.transmit.pulse_table import PulseTable, pulse_table
from spatiq.transmit.quantisation import Converter
from spatiq.transmit.randomness import Purpose, generator
from spatiq.transmit.scenario import Level, Scenario
from spatiq.transmit.shaping import FrameStream, chunks, reblock
from spatiq.transmit.spacing import frame_starts
from spatiq.transmit.truth import Truth


@dataclass(frozen=True, eq=False)
class SimulatedCapture:
    """A simulated recording, made anew each time that it is read.

    Attributes:
        truth: what was sent and what happened to it.
        sample_rate: Hz.
        n_samples: samples per receive channel.
        receive_channels: Nr.
        datatype: SigMF sample format that holds the samples exactly.
        clipped: int64 (Nr,); samples clipped by the converter so far in the latest pass.
    """

    truth: Truth
    sample_rate: float
    n_samples: int
    receive_channels: int
    datatype: str
    clipped: NDArray[np.int64]
    _table: PulseTable = field(repr=False)
    _front_end: Sequence[Impairment] = field(repr=False)

    @property
    def link(self) -> Link:
        """The link description."""
        return self.truth.link

    def blocks(self, block_size: int = 1 << 18) -> Iterator[Samples]:
        """Samples in consecutive blocks, complex64 (Nr, block_size), the last one shorter.

        The samples depend on the simulation's arguments alone, not on the block size.
        """
        return reblock(self._chunks(), block_size)

    def samples(self) -> Samples:
        """All samples at once, complex64 (Nr, n_samples)."""
        made = list(self._chunks())
        return np.concatenate(made, axis=1)

    def _chunks(self) -> Iterator[Samples]:
        truth = self.truth

        def symbols(first: int, stop: int) -> NDArray[np.complex64]:
            return truth.received_symbols(first, stop).astype(np.complex64)

        stream = FrameStream(
            table=self._table,
            starts=truth.starts,
            periods=truth.link.layout.length,
            depth=self.receive_channels,
            symbols=symbols,
            steps=2 * np.pi * truth.cfo_hz / truth.sample_rate,
            angles=truth.phase,
        )
        stages = begin_all(self._front_end, self.sample_rate, self.receive_channels, truth.seed)
        first = 0
        for chunk in chunks(stream, self.n_samples):
            count = chunk.shape[1]
            for stage in stages:
                chunk = stage(chunk, first)
            first += count
            yield chunk


def simulate(link: Link, **choices: Any) -> SimulatedCapture:
    """Simulate the recording of a link.

    Args:
        link: the link description; it must have a payload.
        choices: the attributes of `Scenario`, by name.

    Raises:
        InputError: any choice out of range; which, what was found, what is accepted.
    """
    return capture(link, Scenario(**choices))


def capture(link: Link, scenario: Scenario) -> SimulatedCapture:
    """The recording of a scenario; see `simulate`."""
    scenario.check(link)
    sample_rate, samples_per_symbol = scenario.rates(link)
    cfo_hz, clock_ppm = scenario.offsets(link)
    table = pulse_table(link.pulse, samples_per_symbol, clock_ppm)
    level = scenario.level(link, samples_per_symbol)
    truth = _truth(link, scenario, level, sample_rate, samples_per_symbol, cfo_hz, clock_ppm)
    clipped = np.zeros(scenario.receive_channels, np.int64)
    front_end: list[Impairment] = [Noise(level.noise), *scenario.impairments]
    if level.bits is not None:
        front_end.append(Converter(level.bits, clipped))
    end = truth.starts[-1] + (link.layout.length + scenario.lead_out) * table.spacing
    return SimulatedCapture(
        truth=truth,
        sample_rate=sample_rate,
        n_samples=int(np.ceil(end)),
        receive_channels=scenario.receive_channels,
        datatype=scenario.datatype,
        clipped=clipped,
        _table=table,
        _front_end=front_end,
    )


def _truth(
    link: Link,
    scenario: Scenario,
    level: Level,
    sample_rate: float,
    samples_per_symbol: float,
    cfo_hz: Offset,
    clock_ppm: float,
) -> Truth:
    """Draw starts, carriers and channels."""
    spacing = samples_per_symbol * (1 + clock_ppm * 1e-6)
    rng = generator(scenario.seed, Purpose.STARTS)
    # Drawn even when given, so that the silences drawn next stay the same.
    fraction = float(rng.uniform(0.0, 1.0))
    if scenario.start_fraction is not None:
        fraction = scenario.start_fraction
    first = scenario.lead_in * spacing + fraction
    starts = frame_starts(link, scenario.frames, scenario.spacing, first, spacing, rng)
    carrier_rng = generator(scenario.seed, Purpose.CARRIER)
    carrier = plan_carrier(cfo_hz, starts, sample_rate, carrier_rng)
    nominal = scenario.matrices(link)
    channels = nominal if level.gain == 1.0 else nominal * level.gain
    with np.errstate(divide="ignore"):
        ratio = received_payload_power(link, channels) / np.float64(level.noise)
        snr_db = 10 * np.log10(ratio)
    return Truth(
        link=link,
        frame_numbers=np.arange(scenario.first_frame, scenario.first_frame + scenario.frames),
        starts=starts,
        samples_per_symbol=samples_per_symbol,
        clock_ppm=clock_ppm,
        sample_rate=sample_rate,
        cfo_hz=carrier.cfo_hz,
        phase=carrier.phase,
        H=channels,
        N0=level.noise,
        gain=level.gain,
        snr_db=snr_db,
        seed=scenario.seed,
    )
