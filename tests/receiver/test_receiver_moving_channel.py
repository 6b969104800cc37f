"""Channels and carrier phases that move within a frame: found, followed, and told."""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import collect, partner, record

from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.moving_channel import Following
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.moving_channel import Doppler
from spatiq.transmit.phase_noise_mask import PhaseNoiseMask
from spatiq.transmit.rotation import WienerPhaseNoise

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
[[frame.section]]
kind = "payload"
symbols = 1000
KNOWN
[payload]
[[payload.field]]
type = "prbs"
name = "PRBS15"
bits = "rest"
"""
INTERSPERSED = 'known = { every = 16, sequence = { type = "zadoff-chu", length = 17, root = 3 } }'
CHOICES = {
    "receive_channels": 2, "samples_per_symbol": 4.0, "cfo_hz": (-1e4, 1e4), "snr_db": 17.0,
}  # fmt: skip


def link_with(known: str = ""):
    return parse_link(LINK.replace("KNOWN", known))


def genie_words(capture, which):
    """Nearest words on symbols and channel as they truly were, period by period."""
    truth, link = capture.truth, capture.link
    y = genie_symbols(truth, capture.samples())[which][:, link.layout.payload_index]
    words = np.empty(y.shape[:2], np.int64)
    for k, f in enumerate(which):
        channels = truth.channels(int(f))[link.layout.payload_index]
        received = channels @ link.codebook.vectors.T
        words[k] = np.argmin(np.sum(np.abs(y[k][:, :, None] - received) ** 2, axis=1), axis=1)
    return words


def wrong_bits(link, words, sent):
    bits = link.codebook.words_to_bits
    return int(np.count_nonzero(bits(words) != bits(sent)))


@pytest.mark.parametrize(
    ("known", "motion"),
    [
        ("", {"channels": Doppler(1e-4)}),
        (INTERSPERSED, {"channels": Doppler(1e-3)}),
        ("", {"phase_noise": (WienerPhaseNoise(10.0),)}),
        ("", {"phase_noise": (WienerPhaseNoise(100.0),)}),
    ],
    ids=["Doppler 1e-4", "Doppler 1e-3, known symbols between", "line 1e-5", "line 1e-4"],
)
def test_errors_are_nearly_those_of_a_genie_that_knows_how_all_moved(tmp_path, known, motion):
    """At most 15 % more wrong bits than the genie's, plus four times the square root of their
    number (the two err on the same noise, so that their difference scatters less)."""
    link = link_with(known)
    recording, capture = record(tmp_path, link, frames=40, seed=1, **CHOICES, **motion)
    frames = collect(recording, link)
    f = partner(frames, capture)
    sent = capture.truth.words()[f]
    wrong = wrong_bits(link, frames.words, sent)
    best = wrong_bits(link, genie_words(capture, f), sent)
    assert f.size == 40
    assert best > 100
    assert wrong < 1.15 * best + 4 * np.sqrt(best)
    # Over 1,000 periods N0 is known to 2 %, and each smoother takes some of the noise for motion.
    assert np.median(frames.noise) == pytest.approx(capture.truth.N0, rel=0.05)


def test_what_was_used_and_how_fast_all_moved_is_told(tmp_path):
    """The Doppler spread found is that of an octave grid; prediction follows the channel."""
    link = link_with(INTERSPERSED)
    recording, _ = record(tmp_path, link, frames=20, seed=3, **CHOICES, channels=Doppler(1e-3))
    summary = Summary(link)
    (measured,) = measure(recording, link, ReceiverOptions(soft_output="exact"))
    summary.add(measured)
    told = summary.as_dict()
    assert told["channel_models"] == {"interpolated": 20}
    spread = told["doppler_spread_hz"]
    assert 500 < spread["min"] < 1500  # 1e-3 of 1 MHz; a single frame holds one turn
    assert spread["max"] < 3000
    columns = measured.columns
    assert not np.any(columns["marks"] & (Mark.TRACKING_LOST | Mark.COLOURED_NOISE))
    assert told["ber"]["value"] == pytest.approx(told["predicted_ber"], rel=0.35)
    # Against known symbols EVM is the noise: 1/sqrt(SNR), frames of their own SNR pooled.
    evm = np.sqrt(columns["evm_error_energy"] / columns["evm_reference_energy"])
    np.testing.assert_allclose(evm, 10 ** (-columns["snr_db"] / 20), rtol=0.08)
    # Soft output decides as the detector does.
    hard = (measured.llr < 0).astype(np.uint8)
    decided = link.codebook.words_to_bits(measured.words_decided)
    assert np.mean(hard != decided) < 2e-3


def test_linewidth_is_told(tmp_path):
    """Walks are sought in steps of 4; the evidence of 1,000 periods places them within two."""
    link = link_with()
    noise = (WienerPhaseNoise(100.0),)
    recording, _ = record(tmp_path, link, frames=12, seed=4, **CHOICES, phase_noise=noise)
    (measured,) = measure(recording, link)
    columns = measured.columns
    assert np.all(columns["channel_model"] == Following.FOLLOWED)
    assert 25.0 < np.nanmedian(columns["linewidth_hz"]) < 400.0


def test_phase_noise_by_its_mask(tmp_path):
    """-70 dBc/Hz at 1 kHz falling by 20 dB a decade: 2 degrees rms beyond 1 kHz, and more below."""
    link = link_with()
    mask = PhaseNoiseMask(((1e3, -50.0), (1e4, -70.0), (1e5, -90.0), (1e6, -110.0)))
    recording, capture = record(tmp_path, link, frames=30, seed=5, **CHOICES, phase_noise=(mask,))
    frames = collect(recording, link)
    f = partner(frames, capture)
    sent = capture.truth.words()[f]
    wrong = wrong_bits(link, frames.words, sent)
    best = wrong_bits(link, genie_words(capture, f), sent)
    assert wrong < 1.15 * best + 4 * np.sqrt(best)


def test_frames_that_stand_still_are_left_as_they_were(tmp_path):
    """60 frames, three tests of chance 1e-4 each, and evidence of 1e4 on top: fails once in over
    10,000 seeds; looked at or not, a frame that is not found to move keeps its bits."""
    link = link_with()
    recording, _ = record(tmp_path, link, frames=60, seed=6, **CHOICES)
    (measured,) = measure(recording, link)
    assert np.all(measured.columns["channel_model"] == Following.STILL)
    assert np.all(np.isnan(measured.columns["doppler_spread_hz"]))


def test_a_frame_that_cannot_be_followed_is_marked_and_the_others_are_unharmed(tmp_path):
    """A phase that jumps about from symbol to symbol, in samples of one frame only."""
    link = link_with()
    clean, _ = record(tmp_path, link, frames=5, seed=7, **CHOICES)

    def spoiled(capture):
        samples = capture.samples()
        start = int(capture.truth.starts[2]) + 4 * 200
        rng = np.random.default_rng(1)
        jumps = np.repeat(rng.uniform(-np.pi, np.pi, 800), 4)
        samples[:, start : start + jumps.size] *= np.exp(1j * jumps)
        return samples

    (tmp_path / "spoiled").mkdir()
    lame, _ = record(tmp_path / "spoiled", link, samples=spoiled, frames=5, seed=7, **CHOICES)
    (whole,), (part,) = measure(clean, link), measure(lame, link)
    assert part.columns["marks"][2] & Mark.TRACKING_LOST
    others = [0, 1, 3, 4]
    assert not np.any(part.columns["marks"][others] & Mark.TRACKING_LOST)
    np.testing.assert_array_equal(part.words_decided[others], whole.words_decided[others])
    np.testing.assert_array_equal(
        part.columns["evm_percent"][others], whole.columns["evm_percent"][others]
    )


@pytest.mark.parametrize("ppm", [20.0, -100.0])
def test_long_frames_with_a_clock_that_is_off(tmp_path, ppm):
    """Two frames of 50,000 words, default options: at most 10 % more wrong bits than the genie's,
    plus four times the square root of their number."""
    link = parse_link(LINK.replace("KNOWN", "").replace("symbols = 1000", "symbols = 50000"))
    recording, capture = record(tmp_path, link, frames=2, seed=8, clock_ppm=ppm, **CHOICES)
    (measured,) = measure(recording, link)
    best = wrong_bits(link, genie_words(capture, np.arange(2)), capture.truth.words())
    assert best > 100
    assert np.sum(measured.columns["bit_errors"]) < 1.10 * best + 4 * np.sqrt(best)
    np.testing.assert_allclose(measured.columns["clock_ppm"], ppm, atol=0.2)
