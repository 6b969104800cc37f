"""A scenario's random choices made: starts, carriers, channels, gains, lost samples."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.transmit.carrier import Offset, plan_carrier
from spatiq.transmit.channel import Matrix
from spatiq.transmit.echoes import Echoes, moving_figures, standing_figures
from spatiq.transmit.emission import checked_antenna_delays, checked_receive_delays
from spatiq.transmit.frames import received_payload_power
from spatiq.transmit.moving_channel import Doppler, Field
from spatiq.transmit.noise_shape import noise_covariance
from spatiq.transmit.pulse_table import PulseTable
from spatiq.transmit.randomness import Purpose, generator
from spatiq.transmit.scenario import Level, Scenario
from spatiq.transmit.second_transmitter import OtherTransmitter
from spatiq.transmit.spacing import frame_starts
from spatiq.transmit.tapped_delay_line import TappedDelayLine
from spatiq.transmit.truth import Truth

# Instants of the payload over which the SNR of a moving channel is taken.
SNR_INSTANTS = 16
FRAMES_TOGETHER = 256


@dataclass(frozen=True, eq=False)
class Terms:
    """What the rates and the converter make of a scenario.

    Attributes:
        level: noise and gain in the samples' scale.
        sample_rate: Hz.
        samples_per_symbol: nominal.
        cfo_hz: carrier offset, or its range.
        clock_ppm: clock offset.
    """

    level: Level
    sample_rate: float
    samples_per_symbol: float
    cfo_hz: Offset
    clock_ppm: float

    @property
    def spacing(self) -> float:
        """Samples per symbol period as received."""
        return self.samples_per_symbol * (1 + self.clock_ppm * 1e-6)


def draw_truth(link: Link, scenario: Scenario, terms: Terms, first: float | None = None) -> Truth:
    """Truth of one transmitter, without gain steps and lost samples.

    Args:
        link: the link description.
        scenario: the choices.
        terms: what follows from them.
        first: start of the first frame, samples; None: after the lead-in, at the drawn fraction.
    """
    rng = generator(scenario.seed, Purpose.STARTS)
    # Drawn even when given, so that the silences drawn next stay the same.
    fraction = float(rng.uniform(0.0, 1.0))
    if scenario.start_fraction is not None:
        fraction = scenario.start_fraction
    if first is None:
        first = scenario.lead_in * terms.spacing + fraction
    starts = frame_starts(
        link, scenario.frames, scenario.spacing, first, terms.spacing, rng, scenario.pause
    )
    carrier_rng = generator(scenario.seed, Purpose.CARRIER)
    carrier = plan_carrier(terms.cfo_hz, starts, terms.sample_rate, carrier_rng)
    column = scenario.gain_column()
    covariance = _covariance(scenario, terms.level.noise, column)
    noise = terms.level.noise
    if covariance is not None:
        noise = float(np.mean(np.diag(covariance).real))
    scale = terms.level.gain * column
    field, echoes = None, None
    if isinstance(scenario.channels, TappedDelayLine):
        steps = (1 / terms.samples_per_symbol, terms.spacing / terms.samples_per_symbol)
        times = (starts * steps[0], steps[1])
        echoes, channels, power = _echoes(scenario, scenario.channels, link, scale, times)
    elif isinstance(scenario.channels, Doppler):
        field = _field(scenario, scenario.channels, link, scale)
        steps = (1 / terms.samples_per_symbol, terms.spacing / terms.samples_per_symbol)
        channels, power = _moving_figures(link, field, starts * steps[0], steps[1])
    else:
        nominal = scenario.matrices(link)
        channels = nominal if np.all(scale == 1.0) else nominal * scale
        power = received_payload_power(link, channels)
    with np.errstate(divide="ignore", invalid="ignore"):
        snr_db = 10 * np.log10(power / np.float64(noise))
    return Truth(
        link=link,
        frame_numbers=np.arange(scenario.first_frame, scenario.first_frame + scenario.frames),
        starts=starts,
        samples_per_symbol=terms.samples_per_symbol,
        clock_ppm=terms.clock_ppm,
        sample_rate=terms.sample_rate,
        cfo_hz=carrier.cfo_hz,
        phase=carrier.phase,
        H=channels,
        N0=noise,
        gain=terms.level.gain,
        snr_db=snr_db,
        seed=scenario.seed,
        antenna_delays=checked_antenna_delays(scenario.antenna_delays, link.antennas),
        receive_delays=checked_receive_delays(scenario.receive_delays, scenario.receive_channels),
        noise_covariance=covariance,
        rotations=scenario.rotations(),
        moving=field,
        echoes=echoes,
        faults=tuple(scenario.faults),
    )


def _covariance(scenario: Scenario, noise: float, column: Matrix) -> Matrix | None:
    """Covariance of a sample's noise behind the receive gains; None: white and equal."""
    unit = noise_covariance(
        scenario.receive_channels, scenario.noise_db, scenario.noise_correlation
    )
    if unit is None and np.all(column == 1.0):
        return None
    unit = np.eye(len(column), dtype=np.complex128) if unit is None else unit
    return np.asarray(noise * column * unit * column.conj().T, np.complex128)


def _field(scenario: Scenario, model: Doppler, link: Link, scale: Matrix) -> Field:
    """A realisation of a moving channel in the scale of the samples."""
    if scenario.snr_reference != "average":
        expected = "average: a frame's channel is not to be scaled while it moves"
        raise InputError("SNR", "reference", repr(scenario.snr_reference), expected)
    rng = generator(scenario.seed, Purpose.CHANNEL)
    drawn = model.field(rng, scenario.receive_channels, link.antennas)
    return replace(drawn, gain=scale)


def _echoes(
    scenario: Scenario,
    model: TappedDelayLine,
    link: Link,
    scale: Matrix,
    times: tuple[NDArray[np.float64], float],
) -> tuple[Echoes, Matrix, NDArray[np.float64]]:
    """A dispersive channel in the scale of the samples, its sum over paths and its power."""
    if scenario.snr_reference != "average":
        expected = "average: a frame's paths are not to be scaled"
        raise InputError("SNR", "reference", repr(scenario.snr_reference), expected)
    rng = generator(scenario.seed, Purpose.CHANNEL)
    echoes = model.draw(rng, scenario.frames, scenario.receive_channels, link.antennas, scale)
    if echoes.matrices is not None:
        return echoes, *standing_figures(link, echoes)
    return echoes, *moving_figures(link, echoes, *times)


def _moving_figures(
    link: Link, field: Field, starts: NDArray[np.float64], step: float
) -> tuple[Matrix, NDArray[np.float64]]:
    """Channel in the middle of each payload (F, Nr, Nt), and mean payload power (F,).

    starts: frame starts in nominal symbol periods; step: received symbol period in nominal ones.
    """
    first, last = link.layout.payload_index[0] * step, link.layout.payload_index[-1] * step
    between = (last - first) / (SNR_INSTANTS - 1)
    middles, powers = [], []
    for begin in range(0, len(starts), FRAMES_TOGETHER):
        part = starts[begin : begin + FRAMES_TOGETHER]
        middles += [field.along(start + (first + last) / 2, step, 1)[0] for start in part]
        along = [field.along(start + first, between, SNR_INSTANTS) for start in part]
        power = received_payload_power(link, np.concatenate(along))
        powers.append(power.reshape(-1, SNR_INSTANTS).mean(axis=1))
    return np.array(middles, np.complex128), np.concatenate(powers)


def draw_other(
    link: Link, scenario: Scenario, terms: Terms, other: OtherTransmitter, first: float
) -> Truth:
    """Truth of a further transmitter; `first`: start of the first transmitter's first frame."""
    other.check()
    own = replace(
        scenario,
        seed=other.seed,
        channels=other.channels,
        snr_reference="average",
        spacing=scenario.spacing if other.spacing is None else other.spacing,
        first_frame=other.first_frame,
        frames=scenario.frames if other.frames is None else other.frames,
        antenna_delays=None,
    )
    own.check(link)
    level = replace(terms.level, gain=terms.level.gain * other.amplitude)
    changed = replace(terms, level=level, cfo_hz=other.cfo_hz, clock_ppm=other.clock_ppm)
    truth = draw_truth(link, own, changed, first + other.delay * terms.samples_per_symbol)
    return replace(truth, rotations=())


def with_receiver(truth: Truth, scenario: Scenario, table: PulseTable, n_samples: int) -> Truth:
    """Truth with what happens on the sampling clock: gain steps and lost samples."""
    if scenario.gains is not None:
        rng = generator(scenario.seed, Purpose.GAIN)
        length = truth.link.layout.length * table.spacing
        steps = scenario.gains.placed(truth.starts, length, table.reach, rng)
        truth = replace(truth, gain_steps=steps)
    if scenario.losses is not None:
        rng = generator(scenario.seed, Purpose.LOSSES)
        truth = replace(truth, gaps=scenario.losses.gaps(rng, n_samples))
    return truth
