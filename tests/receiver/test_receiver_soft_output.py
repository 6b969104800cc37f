"""Log-likelihood ratios against their definition, closed forms, limits, and through the chain."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from received_frames import record
from receiver_cases import IN_TURN, SYNC, complex_noise, make_link, payload_section, rayleigh
from soft_oracle import ratios
from test_receiver_detection import BOOKS, case

from spatiq.errors import InputError
from spatiq.receiver.chain import receive
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.soft_output import SoftOutput, log_likelihood_ratios
from spatiq.signal.codebooks import spatial_modulation
from spatiq.signal.constellations import named

KINDS = ("exact", "max-log")
CODED = sorted(n for n in BOOKS if BOOKS[n].bits)


@pytest.mark.nojit
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", [n for n in CODED if n != "8 16QAM"])
@pytest.mark.parametrize("receive_channels", [1, 2, 3])
def test_kernel_is_the_definition(kind, name, receive_channels):
    """Amplitudes change inside and across blocks; error variances differ between antennas.

    Single precision in ||y - G x||^2 / N: 1e-6 of its largest terms, some 100 here.
    """
    book = BOOKS[name]
    _, y, channel = case(book, receive_channels, 0.3, 21, 8)
    more = {
        "variance": np.linspace(0.0, 0.2, book.antennas),
        "amplitude": np.repeat([1.0, 2.0, 0.5], [8, 2, 11]),
    }
    found = log_likelihood_ratios(y, channel, 0.3, book, kind=kind, **more)
    expected = ratios(y, channel, 0.3, book, exact=kind == "exact", **more)
    assert found.dtype == np.float32 and found.shape == (21 * book.bits,)
    np.testing.assert_allclose(found, expected, rtol=1e-5, atol=2e-4)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("noise", [1e-3, 0.1, 10.0])
def test_kernel_is_the_definition_over_several_blocks_of_a_large_codebook(kind, noise):
    """128 words of unequal power, 150 periods; 1e-6 of the largest terms of ||y - G x||^2 / N."""
    book = BOOKS["8 16QAM"]
    _, y, channel = case(book, 4, noise, 150, 9)
    variance = np.full(8, noise / 20)
    found = log_likelihood_ratios(y, channel, noise, book, kind=kind, variance=variance)
    expected = ratios(y, channel, noise, book, exact=kind == "exact", variance=variance)
    largest = np.max(np.sum(np.abs(y) ** 2, axis=1)) / noise
    np.testing.assert_allclose(found, expected, rtol=1e-5, atol=1e-6 * largest + 1e-5)


@pytest.mark.nojit
@pytest.mark.parametrize("kind", KINDS)
def test_bpsk_on_one_antenna_has_its_closed_form(kind):
    """L = 4 Re(h* y) / N0 for points +1 (bit 0) and -1: Hagenauer, Offer, Papke 1996, sec. II-A
    (there with Es/N0 and a fading amplitude; from memory). TS 38.211 5.1 turns them by 45 degrees.
    """
    book = spatial_modulation(1, named("BPSK"), [0], [])
    rng = np.random.default_rng(10)
    h = complex_noise(rng, (1, 1), 1.0)
    y = complex_noise(rng, (40, 1), 2.0).astype(np.complex64)
    turned = np.conj(h[0, 0] * book.vectors[0, 0]) * y[:, 0]
    found = log_likelihood_ratios(y, h, 0.7, book, kind=kind)
    np.testing.assert_allclose(found, 4 * turned.real / 0.7, rtol=1e-5, atol=1e-5)


@pytest.mark.nojit
def test_positive_means_zero_and_bits_stand_in_the_order_sent():
    book = BOOKS["4 BPSK"]
    sent, y, channel = case(book, 4, 1e-3, 30, 11)
    found = log_likelihood_ratios(y, channel, 1e-3, book)
    np.testing.assert_array_equal(found > 0, book.words_to_bits(sent) == 0)


@pytest.mark.nojit
@pytest.mark.parametrize("name", CODED)
def test_max_log_signs_are_the_maximum_likelihood_decisions(name):
    book = BOOKS[name]
    _, y, channel = case(book, 2, 0.4, 100, 12)
    found = log_likelihood_ratios(y, channel, 0.4, book, kind="max-log")
    bits = book.words_to_bits(maximum_likelihood(y, channel, 0.4, book))
    np.testing.assert_array_equal(found < 0, bits == 1)


@settings(max_examples=40, derandomize=True)
@given(
    st.sampled_from(CODED),
    st.floats(-14.0, 3.0),
    st.floats(-3.0, 1.0),
    st.integers(1, 3),
    st.integers(0, 99),
)
def test_finite_and_close_to_max_log_at_any_noise(name, decade, level, receive_channels, seed):
    """Each sum of C/2 terms is at least its largest term, at most C/2 times that."""
    book, noise = BOOKS[name], 10.0**decade
    _, y, channel = case(book, receive_channels, 10.0**level, 8, seed)
    exact, largest = (log_likelihood_ratios(y, channel, noise, book, kind=k) for k in KINDS)
    assert np.isfinite(exact).all() and np.isfinite(largest).all()
    bound = np.log(book.size / 2) + 1e-6 * np.abs(largest) + 1e-6
    assert np.all(np.abs(exact - largest) <= bound)


@pytest.mark.nojit
@pytest.mark.parametrize("noise", [1e-6, 1e-9, 0.0])
@pytest.mark.parametrize("name", CODED)
def test_without_noise_exact_equals_max_log(name, noise):
    """Two equally distant words add ln 2 to ratios of 1e3 and more; nothing else is left."""
    book = BOOKS[name]
    sent, y, channel = case(book, 2, noise, 60, 13)
    exact, largest = (log_likelihood_ratios(y, channel, noise, book, kind=k) for k in KINDS)
    assert np.isfinite(exact).all()
    np.testing.assert_allclose(exact, largest, rtol=1e-6, atol=np.log(2) + 1e-6)
    np.testing.assert_array_equal(exact < 0, book.words_to_bits(sent) == 1)


@pytest.mark.nojit
def test_a_link_that_is_dead_says_nothing():
    book = BOOKS["2 QPSK"]
    _, y, channel = case(book, 2, 0.1, 10, 14)
    for kind in KINDS:
        assert not log_likelihood_ratios(y, 0 * channel, 0.0, book, kind=kind).any()
    assert log_likelihood_ratios(y[:0], channel, 0.1, book).shape == (0,)


@pytest.mark.nojit
def test_the_channels_error_makes_the_ratios_smaller():
    """Equal powers and variances: every ratio times N0 / (N0 + v), by the definition."""
    book = BOOKS["4 BPSK"]
    _, y, channel = case(book, 2, 0.2, 40, 15)
    known = log_likelihood_ratios(y, channel, 0.2, book, kind="max-log")
    guessed = log_likelihood_ratios(
        y, channel, 0.2, book, kind="max-log", variance=np.full(4, 0.05)
    )
    np.testing.assert_allclose(guessed, known * 0.2 / 0.25, rtol=1e-5, atol=1e-5)


@pytest.mark.nojit
def test_unknown_kinds_are_refused():
    _, y, channel = case(BOOKS["2 QPSK"], 2, 0.1, 3, 16)
    with pytest.raises(InputError, match="found soft; expected exact or max-log"):
        log_likelihood_ratios(y, channel, 0.1, BOOKS["2 QPSK"], kind="soft")
    with pytest.raises(InputError, match="soft_output: found soft; expected none, exact, max-log"):
        ReceiverOptions(soft_output="soft")


@pytest.mark.nojit
@pytest.mark.parametrize("kind", KINDS)
def test_the_stage_takes_its_frames_noise_variance_and_amplitude(kind):
    """An antenna without energy behind its channel is one that no word uses."""
    rng = np.random.default_rng(17)
    book = spatial_modulation(3, named("QPSK"), [0, 2], [0])
    channel = np.stack([rayleigh(rng, 2, 3) for _ in range(2)])
    channel[:, :, 1] = 0
    batch = SimpleNamespace(
        moving=[],
        matched={},
        count=2,
        symbols=complex_noise(rng, (2, 12, 2), 1.0).astype(np.complex64),
        channel=channel,
        noise=np.array([0.2, 0.5]),
        antenna_energy=np.array([[4.0, 0.0, 8.0], [16.0, 0.0, 5.0]]),
    )
    amplitude = np.repeat([1.0, 1.5], 6)
    done = SoftOutput(book, amplitude, kind)(batch)
    for i, variance in enumerate([[0.05, 0.0, 0.025], [0.03125, 0.0, 0.1]]):
        expected = ratios(
            batch.symbols[i],
            channel[i],
            batch.noise[i],
            book,
            exact=kind == "exact",
            variance=np.array(variance),
            amplitude=amplitude,
        )
        np.testing.assert_allclose(done.llr[i], expected, rtol=1e-5, atol=2e-4)


TWO_POWERS = make_link(
    sections=SYNC + IN_TURN + payload_section(40) + payload_section(40, "power_db = 6.0")
)


def test_through_the_chain_power_counts_and_signs_are_the_words(tmp_path):
    """A section sent with 6 dB more has ratios 10^0.6 = 3.98 times as large, less the channel's
    error, which power does not reduce: 3.0 to 4.0 in the mean over 80 frames (their spread 2 %).
    """
    recording, _ = record(
        tmp_path, TWO_POWERS, frames=80, samples_per_symbol=4.0, snr_db=20, seed=1
    )
    got = {}
    for kind in ("none", *KINDS):
        options = ReceiverOptions(soft_output=kind)
        batches = [(b.llr, b.words) for b in receive(recording, TWO_POWERS, options)]
        got[kind] = batches
    assert all(llr is None for llr, _ in got["none"])
    llr = np.concatenate([llr for llr, _ in got["exact"]])
    bits = np.concatenate([TWO_POWERS.codebook.words_to_bits(w) for _, w in got["exact"]])
    assert llr.dtype == np.float32 and llr.shape == bits.shape and llr.shape[1] == 80 * 3
    # Near nought, error variances and sums may turn a decision.
    sure = np.abs(llr) > 3
    np.testing.assert_array_equal((llr < 0)[sure], (bits == 1)[sure])
    assert sure.mean() > 0.8
    strength = np.abs(llr).mean(axis=0).reshape(2, -1).mean(axis=1)
    assert 3.0 < strength[1] / strength[0] < 4.0
    difference = np.concatenate(
        [a - b for (a, _), (b, _) in zip(*(got[k] for k in KINDS), strict=True)]
    )
    assert 0 < np.abs(difference).max() <= np.log(4) + 1e-6 * np.abs(llr).max()
