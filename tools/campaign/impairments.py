"""The table of impairments: one entry, one row of the campaign."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from spatiq.transmit.clipping import Clipping
from spatiq.transmit.dc_offset import DcOffset
from spatiq.transmit.dead_channel import DeadChannels
from spatiq.transmit.gain_steps import GainPlan
from spatiq.transmit.interferer import Interferer
from spatiq.transmit.inversion import SpectralInversion
from spatiq.transmit.iq_imbalance import IqImbalance
from spatiq.transmit.losses import Losses
from spatiq.transmit.moving_channel import Doppler
from spatiq.transmit.narrow_band import NarrowBandNoise
from spatiq.transmit.noise_shape import NoiseShape
from spatiq.transmit.phase_noise_mask import PhaseNoiseMask
from spatiq.transmit.rotation import WienerPhaseNoise
from spatiq.transmit.second_transmitter import OtherTransmitter

# The links' symbol rate is 1 MHz: hertz and parts of it stand for one another.
RATE = 1e6
_LONG = {"payload": 50_000, "span": 32}
# Silence after a frame, symbol periods, and of frames between which another transmitter's fit.
SILENCE = (40.0, 200.0)
_WIDE = 1400.0


@dataclass(frozen=True, eq=False)
class Impairment:
    """A row.

    Attributes:
        scenario: choices of the simulation.
        clean: choices that the genie's capture has in place of these, the same noise otherwise;
            None: the genie is given the same capture.
        clean_is: what that is, in words.
        link: choices of `campaign_text`; antennas and constellation are keys as well.
        receivers: Nr.
        samples_per_symbol: nominal.
        ber: about the genie's, which places the SNR; `snr_db` states it instead.
        options: receiver options.
        whiten: the genie knows the noise's covariance over the channels.
        dead: receive channels that the genie leaves out.
        frames: of the whole campaign, and of the quick one; 0: not in that.
        quick: see frames.
        lossy: frames may be lost: as samples are, or where antenna 0, which alone sends the sync
            section, fades on the only receive channel.
    """

    scenario: dict[str, Any] = field(default_factory=dict)
    clean: dict[str, Any] | None = None
    clean_is: str = ""
    link: dict[str, Any] = field(default_factory=dict)
    receivers: int = 2
    samples_per_symbol: float = 4.0690104
    ber: float = 1e-2
    snr_db: float | None = None
    options: dict[str, Any] = field(default_factory=dict)
    whiten: bool = False
    dead: tuple[int, ...] = ()
    frames: int = 150
    quick: int = 0
    lossy: bool = False


def _undone(**scenario: Any) -> dict[str, Any]:
    """A capture that the genie sees without the impairment, on the same noise."""
    nothing = {"impairments": (), "arriving": (), "gains": None, "losses": None}
    clean = {name: nothing.get(name) for name in scenario}
    return {"scenario": scenario, "clean": clean, "clean_is": "the same capture without it"}


def _front_end(*impairments: Any) -> dict[str, Any]:
    return _undone(impairments=impairments)


def _steps(count: int, share: float, size_db: float) -> GainPlan:
    """In every other frame a step up, in the next one down."""
    signs = [(2 * i + share, size_db if i % 2 == 0 else -size_db) for i in range(count)]
    return GainPlan(steps=tuple(signs))


def _inside(count: int, every: int, length: int) -> Losses:
    """Samples lost silently in the middle of every so many-th frame of evenly spaced ones."""
    period = (_PERIOD) * 4.0
    first = 64 * 4.0 + 600 * 4.0
    places = [(int(first + (every * i + 1) * period), length) for i in range(count // every)]
    return Losses(at=places, marked=False)


_PERIOD = 63 + 64 + 1000 + 100.0

IMPAIRMENTS: dict[str, Impairment] = {
    "none": Impairment(quick=60),
    "carrier +-25 % of the symbol rate": Impairment(
        scenario={"cfo_hz": (-0.25 * RATE, 0.25 * RATE)}, options={"cfo_range": 0.25}
    ),
    "carrier drift 160 kHz/s": Impairment(scenario={"cfo_hz": -15e3, "drift_hz_per_s": 1.6e5}),
    "phase noise, linewidth 1e-5 of the symbol rate": Impairment(
        scenario={"phase_noise": (WienerPhaseNoise(1e-5 * RATE),)}
    ),
    "phase noise, linewidth 1e-4 of the symbol rate": Impairment(
        scenario={"phase_noise": (WienerPhaseNoise(1e-4 * RATE),)}, quick=40
    ),
    "phase noise mask, -70 dBc/Hz to 10 kHz, -90 at 100 kHz, -110 at 1 MHz": Impairment(
        scenario={"phase_noise": (PhaseNoiseMask(((1e4, -70.0), (1e5, -90.0), (1e6, -110.0))),)}
    ),
    "clock 20 ppm, 50,000-symbol frames": Impairment(
        scenario={"clock_ppm": 20.0}, link=_LONG, frames=12, quick=2
    ),
    "clock +100 ppm, 50,000-symbol frames": Impairment(
        scenario={"clock_ppm": 100.0}, link=_LONG, frames=12, options={"max_clock_ppm": 100.0}
    ),
    "clock -100 ppm, 50,000-symbol frames": Impairment(
        scenario={"clock_ppm": -100.0}, link=_LONG, frames=12, options={"max_clock_ppm": 100.0}
    ),
    "clock and carrier locked, 100 ppm, 50,000-symbol frames": Impairment(
        scenario={"cfo_hz": 0.0, "reference_ppm": 100.0},
        link={**_LONG, "clock": "locked"},
        frames=12,
        options={"max_clock_ppm": 100.0, "cfo_range": 0.25},
    ),
    "clock 100 ppm, default options, 1000-symbol frames": Impairment(scenario={"clock_ppm": 100.0}),
    "1.25 samples per symbol, roll-off 0.2": Impairment(
        samples_per_symbol=1.25, link={"rolloff": 0.2, "span": 64}
    ),
    "1.7320508 samples per symbol": Impairment(samples_per_symbol=1.7320508),
    "64 samples per symbol": Impairment(samples_per_symbol=64.0, frames=60),
    # Delays are signatures of their own: who uses them does better than a genie without delays.
    "antenna delays -0.5, -0.17, 0.17, 0.5 symbol": Impairment(
        scenario={"antenna_delays": (-0.5, -0.17, 0.17, 0.5)},
        clean={"antenna_delays": None},
        clean_is="a capture without delays",
        quick=30,
    ),
    "antenna delays 0, 0.2, 0.1, -0.1 symbol": Impairment(
        scenario={"antenna_delays": (0.0, 0.2, 0.1, -0.1)},
        clean={"antenna_delays": None},
        clean_is="a capture without delays",
    ),
    "receive delays 0, 1.7 samples; gains 1, 0.5j": Impairment(
        scenario={"receive_delays": (0.0, 1.7), "receive_gains": (1.0, 0.5j)}, whiten=True
    ),
    "DC -10 dB": Impairment(**_front_end(DcOffset(-10.0))),
    "DC +10 dB": Impairment(**_front_end(DcOffset(10.0)), quick=30),
    "IQ imbalance 1 dB, 5 degrees": Impairment(**_front_end(IqImbalance(1.0, 5.0)), quick=40),
    "IQ imbalance 1 dB, 5 degrees, DC -10 dB, 8 x 4 16QAM": Impairment(
        **_front_end(IqImbalance(1.0, 5.0), DcOffset(-10.0)),
        link={"antennas": 8, "constellation": "16QAM"},
        receivers=4,
    ),
    "spectral inversion": Impairment(**_front_end(SpectralInversion())),
    "clipping 6 dB over rms": Impairment(scenario={"impairments": (Clipping(6.0),)}),
    "tone +10 dB at 0.13/T, 2 channels": Impairment(
        **_undone(arriving=(Interferer(0.13 * RATE, 10.0),)), quick=30
    ),
    "tone +10 dB at 0.13/T, 1 channel, 16 dB in each frame": Impairment(
        scenario={"arriving": (Interferer(0.13 * RATE, 10.0),), "snr_reference": "frame"},
        clean={"arriving": ()},
        clean_is="the same capture without it",
        receivers=1,
        snr_db=16.0,
        lossy=True,
    ),
    "tone 0 dB at 0.13/T, 2 channels": Impairment(
        **_undone(arriving=(Interferer(0.13 * RATE, 0.0),))
    ),
    "narrow-band noise 0 dB, 0.02/T wide, 2 channels": Impairment(
        scenario={"arriving": (NarrowBandNoise(0.13 * RATE, 0.02 * RATE, 0.0),)},
        whiten=True,
        snr_db=20.0,
        options={"narrow_band": True},
    ),
    "narrow-band noise +10 dB, 0.02/T wide, 2 channels": Impairment(
        scenario={"arriving": (NarrowBandNoise(0.13 * RATE, 0.02 * RATE, 10.0),)},
        whiten=True,
        snr_db=20.0,
        options={"narrow_band": True},
    ),
    # Without the noise the genie has some 2.5 dB that no receiver can have (Kolmogorov's bound).
    "narrow-band noise 0 dB, 0.002/T wide, 1 channel, 20 dB in each frame": Impairment(
        scenario={
            "arriving": (NarrowBandNoise(0.13 * RATE, 0.002 * RATE, 0.0),),
            "snr_reference": "frame",
        },
        clean={"arriving": ()},
        clean_is="the same capture without it",
        receivers=1,
        snr_db=20.0,
        options={"narrow_band": True},
    ),
    "narrow-band noise -15 dB, 0.02/T wide, 1 channel, 16 dB in each frame": Impairment(
        scenario={
            "arriving": (NarrowBandNoise(0.13 * RATE, 0.02 * RATE, -15.0),),
            "snr_reference": "frame",
        },
        receivers=1,
        snr_db=16.0,
        lossy=True,
        options={"narrow_band": True},
    ),
    "coloured noise, pole 0.9": Impairment(
        scenario={"noise_shape": NoiseShape(feedback=(-0.9,))}, snr_db=20.0
    ),
    "noise of the channels 0, +8 dB": Impairment(
        scenario={"noise_db": (0.0, 8.0)}, whiten=True, snr_db=16.0, quick=60
    ),
    "noise correlation 0.8 over the channels": Impairment(
        scenario={"noise_correlation": 0.8}, whiten=True
    ),
    "one dead channel of 3": Impairment(
        scenario={"impairments": (DeadChannels((1,)),)}, receivers=3, dead=(1,), snr_db=13.0
    ),
    "known gaps": Impairment(
        **_undone(losses=Losses(random=40, length=(10, 2000))), lossy=True, quick=40
    ),
    "unknown gaps of 7 samples in every third frame": Impairment(
        scenario={"losses": _inside(75, 3, 7), "spacing": 100.0},
        clean={"losses": None},
        clean_is="the same capture without it",
        samples_per_symbol=4.0,
        lossy=True,
    ),
    "gain of each frame +-6 dB": Impairment(**_undone(gains=GainPlan(each_frame_db=6.0))),
    "gain steps +-1 dB within frames": Impairment(**_undone(gains=_steps(37, 0.6, 1.0))),
    "gain steps +-6 dB within frames": Impairment(**_undone(gains=_steps(37, 0.6, 6.0))),
    "another transmitter's frames in between, 0 dB": Impairment(
        scenario={
            "others": (OtherTransmitter(seed=9, delay=1250.0, first_frame=700),),
            "spacing": _WIDE,
        },
    ),
    "another transmitter over some frames, +3 dB: the other frames": Impairment(
        scenario={
            "others": (
                OtherTransmitter(
                    seed=9,
                    delay=2000.0,
                    power_db=3.0,
                    spacing=(2000.0, 6000.0),
                    cfo_hz=(-0.02 * RATE, 0.02 * RATE),
                    first_frame=700,
                ),
            ),
        },
    ),
    "Doppler 1e-4, pilots in front": Impairment(
        scenario={"channels": Doppler(1e-4)}, frames=200, quick=40
    ),
    "Doppler 1e-3, one known symbol in ten": Impairment(
        scenario={"channels": Doppler(1e-3)}, link={"known_every": 10}, frames=200
    ),
    "16 x 64 QPSK": Impairment(
        link={"antennas": 64}, receivers=16, frames=24, samples_per_symbol=2.0
    ),
    # Frames of 1000 words tell an antenna's channel by 32 symbols: least squares from all of them,
    # as if all were known, with an error independent of the noise, would lose 1.26.
    "16 x 64 QPSK, 5000 payload words": Impairment(
        link={"antennas": 64, "payload": 5000}, receivers=16, frames=8, samples_per_symbol=2.0
    ),
    "1 channel, 4-antenna space-shift keying, 20 dB in each frame": Impairment(
        scenario={"snr_reference": "frame"},
        link={"constellation": None},
        receivers=1,
        snr_db=20.0,
    ),
}


def impaired_link_text(choices: dict[str, Any]) -> tuple[int, str | None, dict[str, Any]]:
    """Antennas, constellation and the other choices of a row's link."""
    rest = dict(choices)
    return rest.pop("antennas", 4), rest.pop("constellation", "QPSK"), rest
