"""Channels that move within a frame, against closed forms.

Tolerances are 5 standard errors (false failure below 6e-7 for each figure), unless stated.
"""

import numpy as np
import pytest
from scipy.special import j0
from transmit_links import RRC, make_link

from spatiq.errors import InputError
from spatiq.transmit.channel import rayleigh, rician
from spatiq.transmit.frames import received_payload_power
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.moving_channel import Doppler, Field, add_sinusoids
from spatiq.transmit.simulation import simulate
from spatiq.transmit.waveform import transmit_waveform

SIGMAS = 5


def realisations(model, count, receive=8, transmit=8):
    """Independent coefficients as fields of many antennas."""
    return [model.field(np.random.default_rng(k), receive, transmit) for k in range(count)]


@pytest.mark.nojit
def test_sinusoids():
    """Kernel against the plain sum, far from the start and across phasor resets."""
    rng = np.random.default_rng(1)
    doppler, phase = rng.uniform(-1e-2, 1e-2, (3, 9)), rng.uniform(-3, 3, (3, 9))
    out = np.empty((600, 3), np.complex128)
    add_sinusoids(out, 1e6, 1.00001, doppler, phase)
    times = 1e6 + 1.00001 * np.arange(600)
    turns = doppler[..., None] * times
    expected = np.exp(1j * (2 * np.pi * turns + phase[..., None])).sum(axis=1).T / 3
    np.testing.assert_allclose(out, expected, atol=1e-8)


@pytest.mark.parametrize(
    ("turns", "value"), [(0.05, 0.975478), (0.1, 0.903713), (0.2, 0.642512), (0.3, 0.290564)]
)
@pytest.mark.parametrize("rate", [1e-5, 1e-3])
def test_autocorrelation_is_clarkes(turns, value, rate):
    """J0(2 pi f_D tau): Clarke 1968, Jakes 1974 (from memory, recomputed).

    Mean over 20 * 64 independent coefficients, each over 60 instants that are far apart; the
    standard error is that of the coefficients' own means.
    """
    assert j0(2 * np.pi * turns) == pytest.approx(value, abs=1e-6)
    lag = turns / rate
    means = []
    for field in realisations(Doppler(rate), 20):
        early, late = (field.along(start, 3.7 / rate, 60) for start in (0.0, lag))
        means.append((late * early.conj()).mean(axis=0).ravel())
    each = np.concatenate(means)
    spread = np.std(each) / np.sqrt(each.size)
    assert spread < 0.01
    assert abs(each.mean() - value) < SIGMAS * spread


def test_moments_of_the_sum():
    """E|h|^2 = 1 and E|h|^4 = 2 - 1/N of N equal phasors with independent phases; E h^2 = 0.

    2560 independent coefficients. Var |h|^2 = 1 - 1/N; var |h|^4 below 20, that of the Gaussian.
    """
    model = Doppler(1e-3, sinusoids=8)
    h = np.concatenate([f.along(0.0, 1.0, 1).ravel() for f in realisations(model, 40)])
    power = np.abs(h) ** 2
    assert abs(power.mean() - 1) < SIGMAS / np.sqrt(h.size)
    assert abs((power**2).mean() - (2 - 1 / 8)) < SIGMAS * np.sqrt(20 / h.size)
    assert abs((h**2).mean()) < SIGMAS * np.sqrt(2 / h.size)


def test_pairs_are_independent_or_correlated():
    """E[h_ra conj(h_sb)] = Rr[r, s] Rt[a, b] (Kronecker), line of sight apart."""
    model = Doppler(1e-3, rayleigh(receive_correlation=0.6, transmit_correlation=0.3j))
    h = np.array([f.along(0.0, 1.0, 1).ravel() for f in realisations(model, 3000, 2, 2)])
    at_receiver = np.array([[1, 0.6], [0.6, 1]])
    at_transmitter = np.array([[1, 0.3j], [-0.3j, 1]])
    expected = np.kron(at_receiver, at_transmitter)
    assert np.max(np.abs(h.T @ h.conj() / len(h) - expected)) < SIGMAS * np.sqrt(2 / len(h))


def test_line_of_sight_stands_still():
    """With K the mean over a long time is sqrt(K / (K + 1)) L; the rest has power 1 / (K + 1)."""
    field = Doppler(1e-2, rician(6.0)).field(np.random.default_rng(2), 2, 2)
    k = 10**0.6
    h = field.along(0.0, 31.7, 20_000)
    # What remains of a mean over 6340 turns of the slowest sinusoids is below a percent.
    np.testing.assert_allclose(h.mean(axis=0), np.sqrt(k / (k + 1)), atol=0.02)
    assert np.mean(np.abs(h - np.sqrt(k / (k + 1))) ** 2) == pytest.approx(1 / (k + 1), rel=0.03)


@pytest.mark.nojit
def test_received_symbols_follow_the_channel():
    """H_k x_k with the channel of each symbol's own instant, clock offset included."""
    link = make_link(payload=300)
    made = simulate(
        link, samples_per_symbol=4.0, frames=3, channels=Doppler(1e-3), clock_ppm=80.0, seed=1
    )
    truth = made.truth
    received = truth.received_symbols()
    for f, vectors in enumerate(truth.vectors()):
        channels = truth.channels(f)
        expected = np.einsum("kra,ka->kr", channels, vectors)
        np.testing.assert_allclose(received[f], expected, atol=1e-9)
        instants = (truth.starts[f] + np.arange(len(vectors)) * truth.spacing) / 4.0
        one = truth.moving.along(instants[170], 1.0, 1)[0]
        np.testing.assert_allclose(channels[170], one, atol=1e-9)
    only = truth.received_symbols(1, 2, np.array([True, False]))
    other = truth.received_symbols(1, 2, np.array([False, True]))
    np.testing.assert_allclose(only + other, received[1:2], atol=1e-12)


def test_genie_finds_the_moving_symbols():
    made = simulate(
        make_link(payload=300),
        samples_per_symbol=4.0,
        frames=6,
        channels=Doppler(1e-3),
        snr_db=np.inf,
        cfo_hz=2e3,
    )
    sent = made.truth.received_symbols()
    error = genie_symbols(made.truth, made.samples()) - sent
    assert np.mean(np.abs(error) ** 2) < 10**-4.5 * np.mean(np.abs(sent) ** 2)


def test_one_channel_per_symbol_is_enough():
    """Against a channel that multiplies every sample: apart by less than -45 dB at rate 1e-3."""
    link = make_link(payload=1000, pulse=RRC)
    made = simulate(
        link,
        receive_channels=1,
        samples_per_symbol=4.0,
        frames=4,
        channels=Doppler(1e-3),
        snr_db=np.inf,
    )
    truth = made.truth
    sent = np.concatenate(
        list(
            transmit_waveform(
                link, truth.frame_numbers, truth.starts, 4.0, n_samples=made.n_samples
            )
        ),
        axis=1,
    )
    channels = truth.moving.along(0.0, 0.25, made.n_samples)
    exact = np.einsum("nra,an->rn", channels, sent)
    error = made.samples() - exact
    ratio = np.mean(np.abs(error) ** 2) / np.mean(np.abs(exact) ** 2)
    assert 1e-8 < ratio < 10**-4.5


def test_snr_is_that_of_the_payload():
    """Mean power over 16 instants of the payload, against all of its symbols: slow fading."""
    link = make_link(payload=400)
    made = simulate(
        link, samples_per_symbol=4, frames=5, channels=Doppler(1e-4), snr_db=11.0, seed=3
    )
    truth = made.truth
    for f in range(5):
        channels = truth.channels(f)[link.layout.payload_index]
        exact = np.mean(received_payload_power(link, channels)) / truth.N0
        assert 10 * np.log10(exact) == pytest.approx(truth.snr_db[f], abs=0.02)
        middle = 31 + (len(channels) - 1) / 2
        instant = truth.starts[f] / 4 + middle
        np.testing.assert_allclose(truth.H[f], truth.moving.along(instant, 1, 1)[0], atol=1e-9)


def test_average_power_over_recordings():
    """Mean of the frames' SNR over 300 independent recordings, 4 pairs: within 5 / sqrt(1200)."""
    ratios = [
        simulate(
            make_link(), samples_per_symbol=4, frames=1, snr_db=0.0, channels=Doppler(1e-4), seed=k
        ).truth.snr_db[0]
        for k in range(300)
    ]
    assert abs(np.mean(10 ** (np.array(ratios) / 10)) - 1) < SIGMAS / np.sqrt(1200)


def test_groups_and_pieces_do_not_change_samples(monkeypatch):
    link = make_link(payload=600)
    made = simulate(link, samples_per_symbol=4, frames=6, channels=Doppler(1e-3), clock_ppm=1e3)
    whole = made.samples()
    monkeypatch.setattr("spatiq.transmit.shaping.GROUP_VALUES", 1)
    assert np.array_equal(made.samples(), whole)
    monkeypatch.setattr("spatiq.transmit.moving_channel.TOGETHER", 1)
    # Another cut into pieces moves the instants' rounding only.
    np.testing.assert_allclose(made.samples(), whole, atol=1e-6)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"channels": Doppler(0.0)}, "Doppler"),
        ({"channels": Doppler(0.2)}, "Doppler"),
        ({"channels": Doppler(1e-3, sinusoids=2)}, "sinusoids"),
        ({"channels": Doppler(1e-3), "snr_reference": "frame"}, "reference"),
        ({"channels": Doppler(1e-3, rician(np.inf))}, "Rician K"),
    ],
)
def test_bad_models_are_refused(choices, message):
    with pytest.raises(InputError, match=message):
        simulate(make_link(), samples_per_symbol=4, **choices)


def test_field_scale():
    field = Doppler(1e-3).field(np.random.default_rng(0), 2, 3)
    scaled = Field(field.doppler, field.phases, field.mixing, np.array([[2.0], [1j]]))
    expected = field.along(5.0, 1.0, 4) * np.array([[2.0], [1j]])
    np.testing.assert_allclose(scaled.along(5.0, 1.0, 4), expected)
