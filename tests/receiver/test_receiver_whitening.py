"""Noise that is not white over the receive channels: found, whitened, and told."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from received_frames import collect, partner, record
from receiver_cases import complex_noise

from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.whitening import sphericity, whitening_matrix
from spatiq.transmit.genie import genie_symbols

LINK = """
format = 1
[air]
antennas = 4
symbol_rate_hz = 1e6
[modulation]
scheme = "spatial-modulation"
constellation = { name = "QPSK" }
[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = 24
[[frame.section]]
kind = "sync"
sequence = { type = "m-sequence", order = 6 }
antennas = [0]
[[frame.section]]
kind = "pilots"
sequence = { type = "zadoff-chu", length = 17, root = 3 }
send = "in-turn"
antennas = [0, 1, 2, 3]
[[frame.section]]
kind = "payload"
symbols = 800
[payload]
[[payload.field]]
type = "prbs"
name = "PRBS15"
bits = "rest"
"""


@pytest.mark.nojit
@pytest.mark.parametrize("channels", [2, 4])
def test_sphericity_of_white_noise_is_uniform(channels):
    """2,000 covariances of 300 vectors. Kolmogorov-Smirnov at 1e-4: fails once in 10,000 seeds."""
    rng = np.random.default_rng(channels)
    chances = []
    for _ in range(2000):
        e = complex_noise(rng, (300, channels), 1.0)
        chances.append(sphericity(e.T @ e.conj() / 300, 300))
    assert scipy.stats.kstest(chances, "uniform").pvalue > 1e-4


@pytest.mark.nojit
def test_sphericity_sees_uneven_correlated_and_dead_channels():
    assert sphericity(np.eye(3, dtype=complex), 500) == pytest.approx(1.0)
    assert sphericity(np.diag([1.0, 1.0, 2.0]).astype(complex), 500) < 1e-9
    assert sphericity(np.array([[1, 0.4j], [-0.4j, 1]]), 500) < 1e-9
    assert sphericity(np.diag([1.0, 0.0]).astype(complex), 500) == 0.0
    assert sphericity(np.zeros((2, 2), complex), 500) == 1.0  # no noise at all: nothing to whiten


@pytest.mark.nojit
def test_whitening_matrix_whitens_and_leaves_dead_directions_out():
    rng = np.random.default_rng(1)
    root = complex_noise(rng, (4, 4), 1.0)
    covariance = root @ root.conj().T
    whitener, alive = whitening_matrix(covariance)
    white = whitener @ covariance @ whitener.conj().T
    np.testing.assert_allclose(white, np.eye(4) * np.trace(covariance).real / 4, atol=1e-10)
    assert alive == 4
    whitener, alive = whitening_matrix(np.diag([2.0, 0.0]).astype(complex))
    assert alive == 1
    np.testing.assert_allclose(whitener, np.diag([np.sqrt(0.5), 0.0]), atol=1e-12)


def genie_errors(capture, which, whitened=True):
    """Wrong words of a receiver told timing, carrier, channel, and the covariance or not."""
    truth, link = capture.truth, capture.link
    y = genie_symbols(truth, capture.samples())[which][:, link.layout.payload_index]
    covariance = truth.noise_covariance if whitened else np.eye(y.shape[2])
    white = np.linalg.inv(np.linalg.cholesky(covariance))
    wrong = 0
    for k, f in enumerate(which):
        seen = (y[k] @ white.T).astype(np.complex64)
        words = maximum_likelihood(seen, white @ truth.H[f], 1.0, link.codebook)
        wrong += int(np.count_nonzero(words != truth.words()[f]))
    return wrong


@pytest.mark.parametrize(
    ("noise", "snr"),
    [({"noise_db": (0.0, 8.0)}, 15.0), ({"noise_correlation": 0.8}, 13.0)],
)
def test_errors_under_coloured_noise_are_nearly_those_of_a_genie_that_knows_it(
    tmp_path, noise, snr
):
    """At most 15 % more wrong words than the genie's, plus four times the square root of their
    number (the two err on the same noise, so that their difference scatters far less)."""
    link = parse_link(LINK)
    recording, capture = record(
        tmp_path, link, receive_channels=2, snr_db=snr, samples_per_symbol=4.0, frames=80,
        cfo_hz=(-1e4, 1e4), seed=9, **noise,
    )  # fmt: skip
    frames = collect(recording, link)
    f = partner(frames, capture)
    wrong = int(np.count_nonzero(frames.words != capture.truth.words()[f]))
    best = genie_errors(capture, f)
    assert wrong < 1.15 * best + 4 * np.sqrt(best)
    assert wrong < 0.9 * genie_errors(capture, f, whitened=False)
    (measured,) = measure(recording, link)
    marks = measured.columns["marks"] & Mark.COLOURED_NOISE
    assert np.mean(marks > 0) > 0.95
    # Figures are those at the antennas: mean noise, and the channel as it is.
    level = np.trace(capture.truth.noise_covariance).real / 2
    assert np.mean(measured.columns["noise_power"]) == pytest.approx(level, rel=0.08)
    error = np.linalg.norm(measured.channel - turned_like(measured.channel, capture.truth.H[f]))
    assert error < 0.15 * np.linalg.norm(capture.truth.H[f])


def turned_like(seen, true):
    """True channels with each frame's common phase as seen (it refers to another instant)."""
    inner = np.sum(seen * true.conj(), axis=(1, 2))
    return true * (inner / np.abs(inner))[:, None, None]


def test_white_noise_is_left_alone(tmp_path):
    """80 frames at 1e-6 each: fails once in 12,000 seeds."""
    link = parse_link(LINK)
    recording, _ = record(
        tmp_path, link, receive_channels=3, snr_db=10.0, samples_per_symbol=4.0, frames=80, seed=2
    )
    (measured,) = measure(recording, link)
    assert not np.any(measured.columns["marks"] & Mark.COLOURED_NOISE)


def test_a_dead_receive_channel_costs_nothing_but_itself(tmp_path):
    """Its samples are all zero: words, noise and prediction are those of the other channels."""
    link = parse_link(LINK)
    choices = {
        "snr_db": 16.0, "samples_per_symbol": 4.0, "frames": 40, "seed": 5,
        "receive_channels": 3,
    }  # fmt: skip
    whole, _ = record(tmp_path, link, **choices)

    def without(capture):
        samples = capture.samples()
        samples[1] = 0
        return samples

    (tmp_path / "dead").mkdir()
    dead, _ = record(tmp_path / "dead", link, samples=without, **choices)
    (tmp_path / "two").mkdir()
    two, _ = record(tmp_path / "two", link, samples=lambda c: c.samples()[[0, 2]], **choices)
    (lame,), (pair,), (three,) = (list(measure(r, link)) for r in (dead, two, whole))
    assert lame.count == pair.count
    # The lame frames are refitted once more: a few doubtful words fall otherwise.
    errors = np.sum(pair.columns["bit_errors"])
    assert abs(np.sum(lame.columns["bit_errors"]) - errors) < 0.05 * errors
    np.testing.assert_allclose(
        lame.columns["predicted_ber"], pair.columns["predicted_ber"], rtol=0.35, atol=1e-6
    )
    assert np.sum(lame.columns["predicted_ber"]) == pytest.approx(
        np.sum(pair.columns["predicted_ber"]), rel=0.1
    )
    assert np.all(lame.columns["marks"] & Mark.COLOURED_NOISE)
    assert np.sum(three.columns["bit_errors"]) < np.sum(lame.columns["bit_errors"])
