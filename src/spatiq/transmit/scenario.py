"""What is to be simulated: every choice, its default, its bounds."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.transmit.carrier import Offset, reference_offsets
from spatiq.transmit.channel import ChannelModel, Fading, Given
from spatiq.transmit.frames import mean_payload_power, received_payload_power
from spatiq.transmit.front_end import Impairment, per_channel
from spatiq.transmit.gain_steps import GainPlan
from spatiq.transmit.losses import Losses
from spatiq.transmit.moving_channel import Doppler
from spatiq.transmit.noise import noise_variance
from spatiq.transmit.noise_shape import NoiseShape
from spatiq.transmit.quantisation import converter_gain
from spatiq.transmit.randomness import Purpose, generator
from spatiq.transmit.rotation import CarrierDrift, Rotation
from spatiq.transmit.second_transmitter import OtherTransmitter
from spatiq.transmit.spacing import Spacing
from spatiq.transmit.tapped_delay_line import TappedDelayLine
from spatiq.transmit.transmitter_faults import TransmitterFault

# Bits per component that the simulator puts into each SigMF sample format; None: floating point,
# nothing to round. Samples are made in single precision, so 24 bits is the most there can be.
FORMAT_BITS: dict[str, int | None] = {
    **{f"cf{width}_{order}": None for width in (32, 64) for order in ("le", "be")},
    **{f"c{kind}32_{order}": 24 for kind in "iu" for order in ("le", "be")},
    **{f"c{kind}16_{order}": 16 for kind in "iu" for order in ("le", "be")},
    "ci8": 8,
    "cu8": 8,
}
# Channel coefficients kept in memory, 16 bytes each (and as much again while they are drawn).
LARGEST_MATRICES = 1 << 27
SNR_REFERENCES = ("average", "frame")


@dataclass(frozen=True)
class Level:
    """Scale of the samples.

    Attributes:
        noise: N0 in the samples' scale.
        gain: from unit symbol power and E|h|^2 = 1 to the samples' scale.
        bits: resolution of the converter; None: none.
    """

    noise: float
    gain: float
    bits: int | None


@dataclass(frozen=True, eq=False, kw_only=True)
class Scenario:
    """Choices of a simulation.

    SNR is the mean over payload of ||H x||^2 / (Nr N0) for equiprobable words, N0 the noise
    variance per complex sample, also that of a symbol after the unit-energy matched filter.

    Attributes:
        receive_channels: Nr, 1 to 64.
        channels: a model of `spatiq.transmit.channel`, or an array (Nr, Nt) or (F, Nr, Nt); None:
            Rayleigh, independent for each frame. Or a `Doppler`: a channel that moves.
        snr_db: SNR in dB; infinity for no noise.
        snr_reference: "average": N0 follows from channels of E|h|^2 = 1, whatever the frame's own
            channel is (a given H counts as it is); "frame": each frame's H is scaled so that its
            own SNR is the stated one.
        sample_rate: Hz; either this
        samples_per_symbol: or this, any real number from 1 up.
        frames: number of frames, F.
        first_frame: number of the first frame.
        spacing: see `spatiq.transmit.spacing.frame_starts`.
        lead_in: noise before the first frame, symbol periods; less than the pulse's half span cuts
            the first pulse off, as a recorder that starts late does.
        lead_out: noise after the last frame, symbol periods.
        start_fraction: fraction of a sample added to the first start, 0 to 1; None: drawn.
        cfo_hz: see `spatiq.transmit.carrier.plan_carrier`: one number for a steady carrier, or
            (low, high) for an offset of its own in each frame.
        clock_ppm: how much longer than nominal the received symbol period is, parts per million.
        reference_ppm: one reference for both: carrier high by this, symbol period short by this;
            cfo_hz and clock_ppm are then left at 0. The link must state carrier_hz.
        seed: seed of everything random, 0 or more.
        datatype: a key of `FORMAT_BITS`: what is to be written. Integer formats quantise.
        bits: resolution of the converter if below the format's; None with cf32_le: no converter.
        backoff_db: with a converter: full scale of I and of Q over their expected rms (payload at
            E|h|^2 = 1, plus noise).
        impairments: further front-end impairments, in order, after noise and before the converter.
        pause: (every, silence): further silence, symbol periods, after so many frames.
        others: further transmitters, each with a truth of its own.
        antenna_delays: one for each transmit antenna, symbol periods, within half of one.
        receive_delays: one for each receive channel, or one, samples, any fraction.
        receive_gains: complex amplitude gain of each receive channel, signal and noise alike.
        drift_hz_per_s: growth of the carrier offset.
        phase_noise: see `spatiq.transmit.rotation`; with drift it turns all transmitters alike.
        arriving: what is added to the frames before noise: interference.
        noise_db: noise power of each receive channel over N0, dB; SNR refers to N0.
        noise_correlation: coefficient of the exponential model, or matrix (Nr, Nr).
        noise_shape: colour of the noise; N0 stays the variance of a sample.
        gains: gain steps, straight after noise.
        losses: samples that are not recorded.
        faults: of the transmitter.
    """

    receive_channels: int = 2
    channels: ChannelModel | Doppler | TappedDelayLine | ArrayLike | None = None
    snr_db: float = 20.0
    snr_reference: str = "average"
    sample_rate: float | None = None
    samples_per_symbol: float | None = None
    frames: int = 100
    first_frame: int = 0
    spacing: Spacing = "link"
    lead_in: float = 64.0
    lead_out: float = 64.0
    start_fraction: float | None = None
    cfo_hz: Offset = 0.0
    clock_ppm: float = 0.0
    reference_ppm: float | None = None
    seed: int = 0
    datatype: str = "cf32_le"
    bits: int | None = None
    backoff_db: float = 18.0
    impairments: Sequence[Impairment] = ()
    pause: tuple[int, float] | None = None
    others: Sequence[OtherTransmitter] = ()
    antenna_delays: Sequence[float] | None = None
    receive_delays: Sequence[float] | None = None
    receive_gains: ArrayLike | None = None
    drift_hz_per_s: float = 0.0
    phase_noise: Sequence[Rotation] = ()
    arriving: Sequence[Impairment] = ()
    noise_db: ArrayLike | None = None
    noise_correlation: complex | ArrayLike | None = None
    noise_shape: NoiseShape | None = None
    gains: GainPlan | None = None
    losses: Losses | None = None
    faults: Sequence[TransmitterFault] = ()

    def check(self, link: Link) -> None:
        """Refuse counts and durations out of range; the rest is refused where it is used."""
        if not 1 <= self.receive_channels <= 64:
            raise InputError("simulation", "receive channels", self.receive_channels, "1 to 64")
        most = LARGEST_MATRICES // (self.receive_channels * link.antennas)
        if not 1 <= self.frames <= most:
            expected = f"1 to {most}: a channel matrix is kept for each"
            raise InputError("simulation", "frames", self.frames, expected)
        if not 0 <= self.first_frame < 2**62:
            raise InputError("simulation", "first frame", self.first_frame, "0 to 2^62 - 1")
        if self.seed < 0:
            raise InputError("simulation", "seed", self.seed, "0 or more")
        for name, value in (("lead-in", self.lead_in), ("lead-out", self.lead_out)):
            if not 0.0 <= value <= 1e9:
                raise InputError("simulation", name, value, "0 to 1e9 symbol periods")
        if self.start_fraction is not None and not 0.0 <= self.start_fraction <= 1.0:
            raise InputError("simulation", "start fraction", self.start_fraction, "0 to 1 sample")
        if not len(link.layout.payload_index):
            raise InputError(
                link.name, "frame", "no payload section", "a payload: SNR is defined over it"
            )

    def rates(self, link: Link) -> tuple[float, float]:
        """Sample rate in Hz and samples per symbol, from the one that is given."""
        if self.samples_per_symbol is not None and self.sample_rate is None:
            return self.samples_per_symbol * link.symbol_rate_hz, float(self.samples_per_symbol)
        if self.sample_rate is not None and self.samples_per_symbol is None:
            return float(self.sample_rate), self.sample_rate / link.symbol_rate_hz
        found = f"sample_rate={self.sample_rate}, samples_per_symbol={self.samples_per_symbol}"
        raise InputError("simulation", "sample rate", found, "one of the two")

    def offsets(self, link: Link) -> tuple[Offset, float]:
        """Carrier offset, and clock offset in ppm."""
        if self.reference_ppm is None:
            return self.cfo_hz, self.clock_ppm
        if self.cfo_hz != 0 or self.clock_ppm != 0:
            found = "a carrier or clock offset beside it"
            raise InputError("simulation", "reference offset", found, "one or the other")
        return reference_offsets(self.reference_ppm, link.carrier_hz)

    def level(self, link: Link, samples_per_symbol: float) -> Level:
        """Noise for the stated SNR, and the gain that leaves the stated headroom."""
        if self.datatype not in FORMAT_BITS:
            expected = ", ".join(FORMAT_BITS)
            raise InputError("simulation", "datatype", repr(self.datatype), f"one of {expected}")
        held = FORMAT_BITS[self.datatype]
        if self.bits is not None and held is not None and self.bits > held:
            expected = f"at most {held} for {self.datatype}"
            raise InputError("simulation", "bits", self.bits, expected)
        power = mean_payload_power(link)
        noise = noise_variance(self.snr_db, power)
        bits = held if self.bits is None else self.bits
        if bits is None:
            return Level(noise, 1.0, None)
        gain = converter_gain(power / samples_per_symbol + noise, self.backoff_db)
        return Level(noise * gain**2, gain, bits)

    def matrices(self, link: Link) -> NDArray[np.complex128]:
        """Channel matrices (F, Nr, Nt) before the converter's gain."""
        if self.snr_reference not in SNR_REFERENCES:
            expected = " or ".join(SNR_REFERENCES)
            raise InputError("SNR", "reference", repr(self.snr_reference), expected)
        rng = generator(self.seed, Purpose.CHANNEL)
        if isinstance(self.channels, Doppler | TappedDelayLine):
            raise InputError(
                "channel", "matrices", "a moving channel", "one that is drawn by frame"
            )
        drawn = _model(self.channels).draw(rng, self.frames, self.receive_channels, link.antennas)
        if self.snr_reference == "average":
            return drawn
        power = received_payload_power(link, drawn)
        if not np.all(power > 0):
            found = "a frame without power"
            raise InputError("channel", "matrices", found, "signal in each frame")
        scale = np.sqrt(mean_payload_power(link) / power)
        return np.asarray(drawn * scale[:, None, None], np.complex128)

    def gain_column(self) -> NDArray[np.complex128]:
        """Receive gains, complex128 (Nr, 1)."""
        given = 1.0 if self.receive_gains is None else self.receive_gains
        return per_channel(given, self.receive_channels, "receive gains", "")[:, None]

    def rotations(self) -> tuple[Rotation, ...]:
        """Everything that turns the carrier's phase: phase noise first, then drift."""
        drift = (CarrierDrift(self.drift_hz_per_s),) if self.drift_hz_per_s else ()
        return (*self.phase_noise, *drift)


def _model(channels: ChannelModel | ArrayLike | None) -> ChannelModel:
    if channels is None:
        return Fading()
    return channels if isinstance(channels, ChannelModel) else Given(channels)
