"""Delays of antennas and receive channels, a second transmitter, pauses: placement is exact."""

import numpy as np
import pytest
from transmit_links import RRC, make_link

from spatiq.errors import InputError
from spatiq.transmit.clipping import Clipping
from spatiq.transmit.dc_offset import DcOffset
from spatiq.transmit.dead_channel import DeadChannels
from spatiq.transmit.gain_steps import GainPlan
from spatiq.transmit.genie import genie_symbols
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
from spatiq.transmit.simulation import simulate


def plain_samples(truth, n):
    """The truth's own definition of the noise-free samples, in double precision."""
    pulse, channels = truth.link.pulse, truth.H.shape[1]
    sent = np.zeros(truth.link.antennas) if truth.antenna_delays is None else truth.antenna_delays
    taken = np.zeros(channels) if truth.receive_delays is None else truth.receive_delays
    out = np.zeros((channels, n), np.complex128)
    for f, vectors in enumerate(truth.vectors()):
        for r in range(channels):
            placed = np.arange(n) - taken[r] - truth.starts[f]
            frame = np.zeros(n, np.complex128)
            for k, vector in enumerate(vectors):
                for a, x in enumerate(vector):
                    late = placed - k * truth.spacing - sent[a] * truth.samples_per_symbol
                    taps = pulse.samples(late / truth.spacing, truth.samples_per_symbol)
                    frame += truth.H[f, r, a] * x * taps / np.sqrt(truth.samples_per_symbol)
            turn = truth.phase[f] + 2 * np.pi * truth.cfo_hz[f] * placed / truth.sample_rate
            out[r] += frame * np.exp(1j * turn)
    return out


@pytest.mark.nojit
@pytest.mark.parametrize(
    "choices",
    [
        {"antenna_delays": [0.0, 0.5, -0.31, 0.5]},
        {"receive_delays": [0.0, 2.37]},
        {"antenna_delays": [0.1, 0.0, -0.5, 0.2], "receive_delays": [-1.6, 0.25]},
        {"receive_gains": [0.5j, -2.0], "antenna_delays": [0.0, 0.0, 0.0, 0.25]},
    ],
)
def test_delays_are_what_the_truth_says(choices):
    link = make_link(payload=6, antennas=4, sync_order=3)
    made = simulate(
        link, samples_per_symbol=3.1, frames=2, snr_db=np.inf, lead_in=20, cfo_hz=3e4, seed=3,
        clock_ppm=50.0, **choices,
    )  # fmt: skip
    expected = plain_samples(made.truth, made.n_samples)
    np.testing.assert_allclose(made.samples(), expected, atol=5e-6)


def test_genie_at_each_antennas_instant():
    """Only one antenna radiates: sampled at its delay, nothing but the pulse's interference."""
    delays = [0.0, 0.4]
    made = simulate(
        make_link(payload=200, pulse=RRC),
        samples_per_symbol=4,
        frames=4,
        snr_db=np.inf,
        antenna_delays=delays,
        receive_delays=[0.0, 1.3],
        channels=[[0.0, 1.0], [0.0, 1j]],
        cfo_hz=1e5,
    )
    sent = made.truth.received_symbols()
    late = genie_symbols(made.truth, made.samples(), delay=0.4) - sent
    early = genie_symbols(made.truth, made.samples()) - sent
    power = np.mean(np.abs(sent) ** 2)
    assert np.mean(np.abs(late) ** 2) < 10**-4.5 * power
    assert np.mean(np.abs(early) ** 2) > 0.1 * power


def test_a_second_transmitter_is_added():
    """The recording with it, less the recording without it, is what its own truth says."""
    link = make_link(payload=8)
    choices = {"samples_per_symbol": 3.1, "frames": 3, "seed": 4, "spacing": 5.0, "lead_in": 20}
    other = OtherTransmitter(
        seed=9, delay=17.25, power_db=-6.0, cfo_hz=-9e3, clock_ppm=30.0, spacing=11.0, frames=2
    )
    plain = simulate(link, **choices)
    both = simulate(link, others=[other], **choices)
    truth = both.others[0]
    assert truth.frames == 2
    assert truth.starts[0] == pytest.approx(plain.truth.starts[0] + 17.25 * 3.1)
    expected = plain_samples(truth, both.n_samples)
    np.testing.assert_allclose(both.samples() - plain.samples(), expected, atol=5e-6)
    assert not np.allclose(truth.H[0], both.truth.H[0])
    assert np.array_equal(both.truth.H, plain.truth.H)


def test_power_of_a_second_transmitter():
    """Rayleigh, -6 dB: mean |H|^2 over 500 frames of 4 coefficients within 5 standard errors."""
    other = OtherTransmitter(power_db=-6.0)
    choices = {"samples_per_symbol": 4, "frames": 500}
    made = simulate(make_link(), others=[other], **choices)
    power = np.mean(np.abs(made.others[0].H) ** 2)
    assert abs(power / 10**-0.6 - 1) < 5 / np.sqrt(2000)


def test_long_stretches_without_frames():
    """Silence after every third frame, on top of the spacing."""
    link = make_link()
    truth = simulate(link, samples_per_symbol=4.0, frames=8, spacing=10.0, pause=(3, 1e5)).truth
    steps = np.diff(truth.starts) / 4.0
    expected = link.layout.length + 10 + np.array([0, 0, 1e5, 0, 0, 1e5, 0])
    np.testing.assert_allclose(steps, expected)


def test_frames_at_random_times():
    """Silences uniform in 5..205: their mean over 2000 frames within 5 standard errors."""
    link = make_link(payload=4)
    truth = simulate(link, samples_per_symbol=2.0, frames=2001, spacing=(5.0, 205.0)).truth
    silences = np.diff(truth.starts) / 2 - link.layout.length
    assert silences.min() >= 5 - 1e-9
    assert silences.max() <= 205 + 1e-9
    assert abs(silences.mean() - 105) < 5 * 200 / np.sqrt(12 * 2000)


EVERYTHING = {
    "antenna_delays": {"antenna_delays": [0.0, 0.3]},
    "receive_delays": {"receive_delays": [0.0, 0.7], "receive_gains": [1.0, 0.5j]},
    "drift": {"drift_hz_per_s": 1e5},
    "wiener": {"phase_noise": [WienerPhaseNoise(100.0)]},
    "mask": {"phase_noise": [PhaseNoiseMask(((5e3, -80.0), (1e5, -110.0)))]},
    "doppler": {"channels": Doppler(1e-4)},
    "other": {"others": [OtherTransmitter(delay=-3.5, spacing=(1.0, 9.0))]},
    "noise": {"noise_db": [0, 3], "noise_correlation": 0.5},
    "all-pole": {"noise_shape": NoiseShape(feedback=(-0.9,))},
    "fir": {"noise_shape": NoiseShape((1.0, 0.4, 0.1))},
    "interferer": {"arriving": [Interferer(1e5, -10.0), Interferer(-2e5, -20.0)]},
    "narrow-band noise": {"arriving": [NarrowBandNoise(1e5, 2e4, -10.0)]},
    "gain": {"gains": GainPlan(((2.5, 6.0),), 2.0)},
    "front end": {
        "impairments": [
            IqImbalance(0.5, 2.0),
            DcOffset(-30.0),
            SpectralInversion(),
            Clipping(6.0),
            DeadChannels((1,), 0.01),
        ]
    },
    "losses": {"losses": Losses(((1000, 70_000),), 20, (1, 900))},
}


@pytest.mark.parametrize("name", EVERYTHING)
def test_any_impairment_is_streaming_and_reproducible(name):
    """Same samples whatever the block size, in a second pass and in a second simulation."""
    link = make_link(payload=300)
    choices = {"samples_per_symbol": 4.0, "frames": 110, "seed": 8, "datatype": "ci16_le"}
    made = simulate(link, **choices, **EVERYTHING[name])
    assert made.n_clock > 2 << 16, "three chunks"
    whole = made.samples()
    assert whole.shape == (2, made.n_samples)
    for size in (9973, 1 << 17):
        assert np.array_equal(np.concatenate(list(made.blocks(size)), axis=1), whole)
    again = simulate(link, **choices, **EVERYTHING[name])
    assert np.array_equal(again.samples(), whole)
    plain = simulate(link, **choices).samples()
    assert plain.shape != whole.shape or not np.array_equal(plain, whole)
    other = simulate(link, **{**choices, "seed": 9}, **EVERYTHING[name]).samples()
    assert other.shape != whole.shape or not np.array_equal(other, whole)


def test_everything_at_once():
    """All impairments together run, and leave the truth's channel and words as they were."""
    together = {k: v for part in EVERYTHING.values() for k, v in part.items()}
    link = make_link(payload=300)
    made = simulate(link, samples_per_symbol=4.0, frames=110, seed=8, **together)
    samples = made.samples()
    assert np.isfinite(samples.view(np.float32)).all()
    assert samples.shape == (2, made.n_samples)
    plain = simulate(link, samples_per_symbol=4.0, frames=110, seed=8).truth
    assert np.array_equal(made.truth.words(), plain.words())
    assert np.array_equal(made.truth.starts, plain.starts)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"antenna_delays": [0.0]}, "antenna delays"),
        ({"antenna_delays": [0.0, 0.6]}, "-0.5 to 0.5"),
        ({"antenna_delays": [0.0, np.nan]}, "antenna delays"),
        ({"receive_delays": [0.0, 1.0, 2.0]}, "receive delays"),
        ({"receive_delays": [0.0, 1e7]}, "samples either way"),
        ({"pause": (0, 5.0)}, "pause"),
        ({"pause": (2, -5.0)}, "pause"),
        ({"others": [OtherTransmitter(delay=np.inf)]}, "delay"),
        ({"others": [OtherTransmitter(power_db=np.nan)]}, "power"),
        ({"others": [OtherTransmitter(seed=-1)]}, "seed"),
        ({"others": [OtherTransmitter(frames=0)]}, "frames"),
    ],
)
def test_bad_placements_are_refused(choices, message):
    with pytest.raises(InputError, match=message):
        simulate(make_link(), samples_per_symbol=4.0, **choices)
