"""Any ratio of sample rate to symbol rate, up to 16 receive channels and 64 antennas, and one."""

from __future__ import annotations

import math

import numpy as np
import pytest
from received_frames import bit_errors, collect, genie_words, partner, record
from receiver_cases import IN_TURN, SYNC, make_link, payload_section

from spatiq.errors import InputError
from spatiq.metrics.measuring import measure
from spatiq.receiver.matched_filter import filter_bank
from spatiq.signal.pulses import root_raised_cosine

# Samples per symbol, and a roll-off whose bandwidth 1 + roll-off fits.
RATES = (
    (1.25, 0.25),
    (1.3, 0.3),
    (1.5, 0.35),
    (math.sqrt(3), 0.5),
    (2.0, 0.25),
    (2.5, 0.25),
    (3.999, 0.25),
    (7.3, 0.25),
    (16.0, 0.25),
    (33.3, 0.25),
    (64.0, 0.35),
)


def link_of(rolloff, span, payload=400):
    pulse = f'shape = "root-raised-cosine"\nrolloff = {rolloff}\nspan_symbols = {span}'
    return make_link(pulse=pulse, sections=SYNC + IN_TURN + payload_section(payload))


@pytest.mark.parametrize(("rate", "rolloff"), RATES)
def test_errors_at_any_ratio_are_nearly_the_genies(tmp_path, rate, rolloff):
    """At most 15 % more wrong bits than the genie's, plus four times the root of their number."""
    link = link_of(rolloff, 24)
    recording, capture = record(
        tmp_path, link, receive_channels=2, snr_db=13.0, samples_per_symbol=rate, frames=16,
        cfo_hz=(-5e3, 5e3), clock_ppm=11.0, seed=3,
    )  # fmt: skip
    frames = collect(recording, link)
    f = partner(frames, capture)
    assert f.size == 16
    sent = capture.truth.words()[f]
    wrong = bit_errors(link, frames.words, sent)
    best = bit_errors(link, genie_words(capture)[f], sent)
    assert best > 50
    assert wrong < 1.15 * best + 4 * np.sqrt(best)


@pytest.mark.parametrize(("rate", "rolloff"), [r for r in RATES if r[0] != int(r[0])])
def test_floor_of_the_error_vector_without_noise(tmp_path, rate, rolloff):
    """cf32, 90 dB of SNR, span 64: at most -55 dB at any ratio that is no whole number."""
    link = link_of(rolloff, 64)
    recording, _ = record(
        tmp_path, link, receive_channels=2, snr_db=90.0, samples_per_symbol=rate, frames=3,
        cfo_hz=(-5e3, 5e3), clock_ppm=11.0, seed=3,
    )  # fmt: skip
    (measured,) = measure(recording, link)
    assert measured.count == 3
    assert np.max(measured.columns["evm_db"]) < -55.0


@pytest.mark.parametrize(("rate", "rolloff"), [(1.25, 0.3), (1.3, 0.35), (1.49, 0.5)])
def test_a_pulse_that_does_not_fit_the_sample_rate_is_refused(rate, rolloff):
    with pytest.raises(InputError, match=r"sample rate.*samples per symbol.*at least"):
        filter_bank(root_raised_cosine(rolloff, 16.0), rate)


@pytest.mark.parametrize("rate", [1.25, math.sqrt(3), 33.3, 64.0])
def test_tables_stay_small_at_any_ratio(rate):
    """Taps and slopes of a span of 24 symbols: a few megabytes."""
    bank = filter_bank(root_raised_cosine(0.25, 24.0), rate)
    assert bank.taps.nbytes + bank.slopes.nbytes < 8 << 20


def test_sixteen_channels_and_sixty_four_antennas(tmp_path):
    """256 codewords; one pilot sequence an antenna. At most 15 % over the genie, and four roots."""
    sections = SYNC + IN_TURN.replace("length = 16", "length = 61") + payload_section(2000)
    link = make_link(antennas=64, sections=sections)
    recording, capture = record(
        tmp_path, link, receive_channels=16, snr_db=0.5, samples_per_symbol=2.0, frames=4,
        cfo_hz=(-5e3, 5e3), seed=3,
    )  # fmt: skip
    (measured,) = measure(recording, link)
    assert measured.count == 4
    truth = capture.truth
    wrong = bit_errors(link, measured.words_decided, truth.words())
    best = bit_errors(link, genie_words(capture), truth.words())
    assert best > 100
    assert wrong < 1.15 * best + 4 * np.sqrt(best)
    np.testing.assert_array_equal(measured.confusion.sum(axis=(1, 2)), 2000)
    sent = link.codebook.set_index[truth.words()]
    assert np.trace(measured.confusion.sum(axis=0)) == np.sum(
        sent == link.codebook.set_index[measured.words_decided]
    )


def test_space_shift_keying_with_one_receive_channel_is_exact(tmp_path):
    """Two antennas: BER = Q(|h1 - h2| sqrt(1 / (2 N0))) on a fixed channel (J. Jeganathan et al.,
    IEEE J. Lightwave Technol. 2009; textbook). Genie within four binomial sigmas of its mean over
    the frames' channels; the receiver within 15 % of the genie and four roots."""
    link = make_link(antennas=2, constellation=None, sections=SYNC + IN_TURN + payload_section(800))
    recording, capture = record(
        tmp_path, link, receive_channels=1, snr_db=14.0, samples_per_symbol=4.0, frames=60, seed=7
    )
    truth = capture.truth
    apart = np.abs(truth.H[:, 0, 0] - truth.H[:, 0, 1])
    exact = np.array([0.5 * math.erfc(d / math.sqrt(4 * truth.N0)) for d in apart])
    decided = genie_words(capture)
    sigma = np.sqrt(800 * np.sum(exact * (1 - exact)))
    assert abs(bit_errors(link, decided, truth.words()) - 800 * exact.sum()) < 4 * sigma
    frames = collect(recording, link)
    f = partner(frames, capture)
    # With one channel, a frame whose sync antenna fades below some -17 dB (2 in 100) has no sync
    # left: more than 4 of 60 with a chance of 0.7 %.
    assert f.size >= 56
    wrong = bit_errors(link, frames.words, truth.words()[f])
    best = bit_errors(link, decided[f], truth.words()[f])
    assert wrong < 1.15 * best + 4 * np.sqrt(best)
