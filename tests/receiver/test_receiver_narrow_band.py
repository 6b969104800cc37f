"""Narrow-band noise: recognised, frames found and decided nearly as by a genie that knows it."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg
from received_frames import FIGURES, bit_errors, collect, partner, record
from scipy.signal import lfilter
from test_receiver_whitening import LINK

from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.receiver.chain import chain_parts
from spatiq.receiver.matched_filter import filter_bank
from spatiq.receiver.narrow_band_reception import modulated
from spatiq.receiver.noise_interpolation import interpolated
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.interferer import Interferer
from spatiq.transmit.narrow_band import NarrowBandNoise
from spatiq.transmit.simulation import simulate

BASE = {"samples_per_symbol": 4.0, "cfo_hz": (-1e4, 1e4)}


def narrow_noise(rng, count, width, centre):
    """Unit power, first-order autoregressive."""
    pole = np.exp(-np.pi * width)
    white = (rng.standard_normal(count + 4000) + 1j * rng.standard_normal(count + 4000)) / 2**0.5
    feedback = [1.0, -pole * np.exp(2j * np.pi * centre)]
    return lfilter([np.sqrt(1 - pole**2)], feedback, white)[4000:]


@pytest.mark.nojit
@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize(("width", "power"), [(0.002, 100.0), (0.02, 1000.0)])
def test_interpolation_error_is_the_inverse_mean_of_the_inverse_spectrum(channels, width, power):
    """A. N. Kolmogorov's theorem (see P. Masani, Acta Math. 104, 1960), for noise from one
    direction beside white noise: one direction has that error, the others the white noise's. 20
    frames of 1,100: the mean of 22,000 squares is right to 1 %; 6 % fails once in 1e8 seeds."""
    rng = np.random.default_rng(channels)
    direction = np.array([1.0, 1j])[:channels]
    seen = []
    for _ in range(20):
        white = rng.standard_normal((1100, channels, 2)) @ np.array([1, 1j]) / np.sqrt(2)
        narrow = narrow_noise(rng, 1100, width, 0.13)
        left, _ = interpolated(np.sqrt(power) * narrow[:, None] * direction + white)
        seen.append(np.sum(np.abs(left) ** 2) / 1100)
    f, pole = np.arange(1 << 14) / (1 << 14), np.exp(-np.pi * width)
    shape = (1 - pole**2) / np.abs(1 - pole * np.exp(-2j * np.pi * f)) ** 2
    told = 1 / np.mean(1 / (channels * power * shape + 1)) + channels - 1
    assert np.mean(seen) == pytest.approx(told, rel=0.06)


@pytest.mark.nojit
def test_modulated_signal_gives_its_values_back_at_the_matched_filter():
    """The pulse's own floor, and the table's step (-78 dB), are all that is left."""
    link = parse_link(LINK)
    bank = filter_bank(link.pulse, 2.7182)
    rng = np.random.default_rng(1)
    values = rng.standard_normal((60, 2)) + 1j * rng.standard_normal((60, 2))
    instants = 100.3 + 2.7182 * np.arange(60)
    wave = modulated(values, instants, bank, 400)
    for t, value in zip(instants, values, strict=True):
        taps = bank.taps[round((t % 1) * bank.phases)]
        first = int(t) - bank.half + 1
        assert np.abs(wave[:, first : first + 2 * bank.half] @ taps - value).max() < 0.01


def genie_words(link, capture, clean, width):
    """Told channel, timing, carrier, all other symbols, and the noise's covariance over time and
    channels: exact interpolation by the inverse covariance, then maximum likelihood."""
    truth = capture.truth
    heard = (capture.samples() - clean.samples()).astype(np.complex128)
    directions = np.linalg.svd(heard[:, :4096], full_matrices=True)[0]
    power = np.sum(np.mean(np.abs(heard) ** 2, axis=1))
    symbols, sent = genie_symbols(truth, capture.samples()), truth.received_symbols()
    sps, rate = truth.samples_per_symbol, truth.sample_rate
    instants = np.arange(-int(link.pulse.half_span * sps) - 1, int(link.pulse.half_span * sps) + 2)
    pulse = link.pulse.samples(instants / sps, sps) / np.sqrt(sps)
    own = np.correlate(pulse, pulse, "full")
    apart = np.arange(symbols.shape[1])[:, None] * sps - (np.arange(own.size) - own.size // 2)
    words = []
    for f in range(truth.frames):
        away = (1.3e5 - truth.cfo_hz[f]) / rate
        decay = np.exp(-np.pi * width / rate * np.abs(apart) + 2j * np.pi * away * apart)
        lagged = power * (decay @ own)
        lagged[0] += truth.N0
        inverse = scipy.linalg.inv(scipy.linalg.toeplitz(lagged))
        error = (symbols[f] - sent[f]) @ directions.conj()
        scale = np.full(error.shape, truth.N0**-0.5)
        scale[:, 0] = np.sqrt(np.diag(inverse).real)
        error[:, 0] = (inverse @ error[:, 0]) / np.diag(inverse)
        payload = link.layout.payload_index
        y = (sent[f] @ directions.conj() + error)[payload]
        book = directions.conj().T @ truth.H[f] @ link.codebook.vectors.T
        distance = np.sum(np.abs((y[..., None] - book) * scale[payload][..., None]) ** 2, axis=1)
        words.append(distance.argmin(axis=1))
    return np.array(words)


@pytest.mark.parametrize(
    ("channels", "width", "level", "factor"), [(2, 2e4, 0.0, 1.3), (2, 2e3, 0.0, 1.3)]
)
def test_errors_under_narrow_band_noise_beside_a_genie_that_knows_its_covariance(
    tmp_path, channels, width, level, factor
):
    """The bar is 1.15; 1.13 to 1.21 has been seen on two channels at 20 dB. Plus four times the
    square root of their number."""
    link = parse_link(LINK)
    choices = {
        **BASE, "receive_channels": channels, "snr_db": 18.0, "frames": 20, "seed": 3,
    }  # fmt: skip
    noise = NarrowBandNoise(1.3e5, width, level)
    recording, capture = record(tmp_path, link, arriving=(noise,), **choices)
    frames = collect(recording, link, ReceiverOptions(narrow_band=True))
    f = partner(frames, capture)
    assert f.size == 20
    words = capture.truth.words()[f]
    best = bit_errors(link, genie_words(link, capture, simulate(link, **choices), width)[f], words)
    assert bit_errors(link, frames.words, words) < factor * best + 4 * np.sqrt(best)
    (measured,) = measure(recording, link, ReceiverOptions(narrow_band=True))
    assert np.all(measured.columns["marks"] & Mark.INTERFERER)
    assert np.all(np.abs(measured.columns["interferer_hz"] - 1.3e5) < width / 2 + 2e3)
    power = measured.receive.sample_power * 10 ** (measured.columns["interferer_db"] / 10)
    # A frame holds 1,000 periods times the width of independent samples: some 3 to 30.
    assert abs(10 * np.log10(np.mean(power) / capture._signal_power) - level) < 2.0


def test_narrow_band_noise_is_told_from_lines_and_from_the_signal(tmp_path):
    link = parse_link(LINK)
    for arriving in ((), (Interferer(9e4, 3.0),), (Interferer(9e4, 0.0), Interferer(9.3e4, 0.0))):
        recording, _ = record(
            tmp_path, link, arriving=arriving, receive_channels=1, frames=40, seed=4,
            snr_db=20.0, **BASE,
        )  # fmt: skip
        assert chain_parts(recording, link, ReceiverOptions(narrow_band=True)).survey.band is None


def test_the_result_does_not_depend_on_block_size_where_a_band_is_excised(tmp_path):
    link = parse_link(LINK)
    recording, _ = record(
        tmp_path, link, arriving=(NarrowBandNoise(9e4, 2e3, 0.0),), receive_channels=2,
        snr_db=20.0, frames=12, seed=5, **BASE,
    )  # fmt: skip
    assert chain_parts(recording, link, ReceiverOptions(narrow_band=True)).survey.band is not None
    whole = collect(recording, link, ReceiverOptions(narrow_band=True))
    for size in (4096, 1 << 16):
        other = collect(recording, link, ReceiverOptions(narrow_band=True, block_size=size))
        for name in FIGURES:
            np.testing.assert_array_equal(whole.columns[name], other.columns[name])
