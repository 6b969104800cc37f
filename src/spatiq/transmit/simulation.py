"""A whole recording simulated: frames, channels, offsets, noise, converter, in bounded memory."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.transmit.clipping import Clipping
from spatiq.transmit.drawing import Terms, draw_other, draw_truth, with_receiver
from spatiq.transmit.emission import emission
from spatiq.transmit.frames import mean_payload_power
from spatiq.transmit.front_end import Impairment, InTurn, Samples, Stage, begin_all
from spatiq.transmit.losses import capture_segments, kept
from spatiq.transmit.noise import Noise
from spatiq.transmit.noise_shape import ShapedNoise
from spatiq.transmit.pulse_table import PulseTable, pulse_table
from spatiq.transmit.quantisation import Converter
from spatiq.transmit.rotation import FIRST_PLACE, Rotated
from spatiq.transmit.scenario import Scenario
from spatiq.transmit.shaping import CHUNK, reblock
from spatiq.transmit.truth import Truth

# Places of what arrives before noise; those of the front end count from 0.
FIRST_ARRIVING = 1000


@dataclass(frozen=True, eq=False)
class SimulatedCapture:
    """A simulated recording, made anew each time that it is read.

    Attributes:
        truth: what was sent and what happened to it.
        others: the same for further transmitters.
        sample_rate: Hz.
        n_samples: samples per receive channel that are recorded.
        n_clock: samples per receive channel, lost ones included.
        receive_channels: Nr.
        datatype: SigMF sample format that holds the samples exactly.
        clipped: int64 (Nr,); samples clipped by the converter so far in the latest pass.
        limited: int64 (Nr,); the same by `Clipping` ahead of the converter.
    """

    truth: Truth
    others: tuple[Truth, ...]
    sample_rate: float
    n_samples: int
    n_clock: int
    receive_channels: int
    datatype: str
    clipped: NDArray[np.int64]
    limited: NDArray[np.int64]
    _tables: Sequence[PulseTable] = field(repr=False)
    _front_end: Sequence[Impairment] = field(repr=False)
    _arriving: Sequence[Impairment] = field(repr=False)
    _signal_power: float = field(repr=False)
    _marked: bool = field(repr=False)

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

    def captures(self) -> list[dict[str, Any]] | None:
        """SigMF captures that tell where samples were lost; None when there is nothing to tell."""
        if not (self._marked and len(self.truth.gaps)):
            return None
        return capture_segments(self.truth.gaps, self.n_samples, self.link.carrier_hz)

    def _stages(self) -> list[Stage]:
        """Everything that is done to the sum of the transmitters' samples, in order."""
        truth = self.truth
        begin = partial(
            begin_all,
            sample_rate=self.sample_rate,
            receive_channels=self.receive_channels,
            seed=truth.seed,
            signal_power=self._signal_power,
            noise_power=truth.N0,
        )
        turned = [Rotated(truth.rotations)] if truth.rotations else []
        return [
            *begin(turned, first_place=FIRST_PLACE),
            *begin(self._arriving, first_place=FIRST_ARRIVING),
            *begin(self._front_end),
        ]

    def _chunks(self) -> Iterator[Samples]:
        truths = (self.truth, *self.others)
        emissions = [emission(*pair) for pair in zip(truths, self._tables, strict=True)]
        stages = self._stages()
        for first in range(0, self.n_clock, CHUNK):
            count = min(CHUNK, self.n_clock - first)
            chunk = emissions[0].chunk(first, count)
            for other in emissions[1:]:
                chunk += other.chunk(first, count)
            for stage in stages:
                chunk = stage(chunk, first)
            yield kept(chunk, first, self.truth.gaps)


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
    terms = Terms(level, sample_rate, samples_per_symbol, cfo_hz, clock_ppm)
    truth = draw_truth(link, scenario, terms)
    end = truth.starts[-1] + (link.layout.length + scenario.lead_out) * table.spacing
    n_clock = int(np.ceil(end))
    _check_drift(truth, n_clock)
    truth = with_receiver(truth, scenario, table, n_clock)
    first = float(truth.starts[0])
    clipped, limited = np.zeros((2, scenario.receive_channels), np.int64)
    return SimulatedCapture(
        truth=truth,
        others=tuple(draw_other(link, scenario, terms, o, first) for o in scenario.others),
        sample_rate=sample_rate,
        n_samples=n_clock - int(truth.gaps[:, 1].sum()),
        n_clock=n_clock,
        receive_channels=scenario.receive_channels,
        datatype=scenario.datatype,
        clipped=clipped,
        limited=limited,
        _tables=[
            table,
            *(pulse_table(link.pulse, samples_per_symbol, o.clock_ppm) for o in scenario.others),
        ],
        _front_end=_front_end(scenario, truth, level.bits, clipped, limited),
        _arriving=scenario.arriving,
        _signal_power=mean_payload_power(link) * level.gain**2 / samples_per_symbol,
        _marked=scenario.losses is not None and scenario.losses.marked,
    )


def _front_end(
    scenario: Scenario,
    truth: Truth,
    bits: int | None,
    clipped: NDArray[np.int64],
    limited: NDArray[np.int64],
) -> list[Impairment]:
    """Noise, gain steps, the scenario's own impairments, converter."""
    noise: Impairment = Noise(truth.N0)
    if truth.noise_covariance is not None or scenario.noise_shape is not None:
        covariance = truth.noise_covariance
        if covariance is None:
            covariance = truth.N0 * np.eye(scenario.receive_channels, dtype=np.complex128)
        noise = ShapedNoise(covariance, scenario.noise_shape)
    counted = [
        replace(item, clipped=limited)
        if isinstance(item, Clipping) and item.clipped is None
        else item
        for item in scenario.impairments
    ]
    front_end: list[Impairment] = [noise, *counted]
    if bits is not None:
        front_end.append(Converter(bits, clipped))
    if truth.gain_steps is not None:
        # It draws nothing, so that it may take a place without moving those of the others.
        front_end[0] = InTurn((noise, truth.gain_steps))
    return front_end


def _check_drift(truth: Truth, n_samples: int) -> None:
    """Refuse a drift that takes the carrier beyond half the sample rate."""
    limit = truth.sample_rate / 2
    furthest = np.max(np.abs(truth.cfo_hz)) + abs(
        truth.drift_hz_per_s * n_samples / truth.sample_rate
    )
    if not furthest < limit:
        found = f"{truth.drift_hz_per_s:g} Hz/s, in the end {furthest:g} Hz"
        raise InputError("carrier drift", "", found, f"less than {limit:g} Hz either way")
