"""Links of all kinds through the whole chain, held against a receiver that knows the truth.

Genie: the same maximum-likelihood rule at the true timing, carrier, clock and channel, on the same
samples. Both err on the same noise, so that their difference is far smaller than their spread.
"""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import bit_errors, collect, genie_words, partner, record
from receiver_cases import IN_TURN, SYNC, make_link, payload_section

from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.channel import rayleigh

KNOWN = 'known = {every = 10, sequence = {type = "zadoff-chu", length = 7, root = 2}}'
SHIFTED = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 6}
send = "together"
antenna_shift = [0, 31]
"""
SILENCE = '\n[[frame.section]]\nkind = "silence"\nsymbols = 12\n'
COVERED = """
[[frame.section]]
kind = "pilots"
sequence = {type = "zadoff-chu", length = 17, root = 3}
send = "together"
repeat = 2
cover = [[1, 1], [1, -1]]
"""

# Name: link's choices, simulation's choices. Bit error ratios of a few per cent at these SNRs.
CASES = {
    "payload power": (
        {"sections": SYNC + IN_TURN + payload_section(400, "power_db = 6.0")},
        {"snr_db": 12.0},
    ),
    "weak payload": (
        {"sections": SYNC + IN_TURN + payload_section(400, "power_db = -6.0")},
        {"snr_db": 12.0},
    ),
    "two payload powers": (
        {
            "sections": SYNC
            + IN_TURN
            + payload_section(200, "power_db = 3.0")
            + payload_section(200, "power_db = -2.0")
        },
        {"snr_db": 14.0},
    ),
    "interspersed": ({"sections": SYNC + IN_TURN + payload_section(400, KNOWN)}, {}),
    "pilots after payload": ({"sections": SYNC + payload_section(400) + IN_TURN}, {}),
    "sync after payload": ({"sections": payload_section(400) + IN_TURN + SYNC}, {}),
    "sync in the middle": (
        {"sections": payload_section(200) + SYNC + IN_TURN + payload_section(200)},
        {},
    ),
    "any order, silence": (
        {
            "sections": SILENCE
            + IN_TURN
            + payload_section(150, KNOWN)
            + SILENCE
            + SYNC
            + payload_section(250)
            + SILENCE
        },
        {},
    ),
    "sync and pilots together": ({"sections": SHIFTED + COVERED + payload_section(400)}, {}),
    "1.25 samples": ({}, {"samples_per_symbol": 1.25}),
    "7.3 samples": ({}, {"samples_per_symbol": 7.3}),
    "one channel, SSK": (
        {"antennas": 2, "constellation": None, "sections": SYNC + IN_TURN + payload_section(400)},
        {"receive_channels": 1, "snr_db": 17.0},
    ),
    "8 x 4, 16QAM": (
        {
            "antennas": 8,
            "constellation": "16QAM",
            "sections": SYNC + IN_TURN + payload_section(400),
        },
        {"receive_channels": 4, "snr_db": 15.0},
    ),
    "rectangular": ({"pulse": 'shape = "rectangular"'}, {"samples_per_symbol": 4.0}),
    "clock 20 ppm": ({}, {"clock_ppm": 20.0}),
    "clock -20 ppm, long": (
        {"sections": SYNC + IN_TURN + payload_section(3000)},
        {"clock_ppm": -20.0, "frames": 12},
    ),
    "locked 20 ppm": (
        {"air": 'carrier_hz = 8e8\nclock = "locked"'},
        {"reference_ppm": 20.0, "cfo_hz": 0.0},
    ),
    "locked -20 ppm, long": (
        {
            "air": 'carrier_hz = 8e8\nclock = "locked"',
            "sections": SYNC + IN_TURN + payload_section(3000),
        },
        {"reference_ppm": -20.0, "cfo_hz": 0.0, "frames": 12},
    ),
}
# What the receiver does not know costs it: fewer than this many times the genie's errors.
MOST = {"8 x 4, 16QAM": 1.25, "rectangular": 1.2}


@pytest.mark.parametrize("name", sorted(CASES))
def test_errors_are_nearly_those_of_a_genie(tmp_path, name):
    """Within 12 % of the genie, and four standard deviations of the difference.

    The estimates behind 16 to 33 known symbols an antenna, refined over the payload, cost some
    tenths of a dB; at these slopes 0.1 dB is about 1.5 %. 8 antennas have 31 symbols each of a
    16QAM payload to be refined from, a rectangle is not matched by its samples.
    """
    more, choices = CASES[name]
    link = make_link(**({"sections": SYNC + IN_TURN + payload_section(400)} | more))
    settings = {
        "receive_channels": 2,
        "samples_per_symbol": 4.0690104,
        "snr_db": 11.0,
        "frames": 50,
        "cfo_hz": (-1.5e4, 1.5e4),
        "spacing": (0.0, 60.0),
        "seed": 11,
    } | choices
    recording, capture = record(tmp_path, link, **settings)
    frames = collect(recording, link)
    found = partner(frames, capture)
    assert found.size >= 0.95 * settings["frames"]
    sent = capture.truth.words()[found]
    genie = bit_errors(link, genie_words(capture)[found], sent)
    own = bit_errors(link, frames.words, sent)
    assert genie > 150
    differing = bit_errors(link, frames.words, genie_words(capture)[found])
    assert own <= MOST.get(name, 1.12) * genie + 4 * np.sqrt(differing)


@pytest.mark.parametrize("name", ["clock -20 ppm, long", "locked -20 ppm, long"])
def test_clock_offset_is_measured(tmp_path, name):
    more, choices = CASES[name]
    link = make_link(**more)
    settings = {"receive_channels": 2, "samples_per_symbol": 4.0, "snr_db": 25.0, "seed": 12}
    recording, capture = record(tmp_path, link, **(settings | choices))
    frames = collect(recording, link)
    assert frames.start.size == 12
    ppm = (frames.step / 4.0 - 1) * 1e6
    error = ppm - capture.truth.clock_ppm
    if name.startswith("locked"):
        # The carrier tells: its spread over 800 MHz.
        carrier = frames.carrier_estimate * recording.sample_rate
        assert np.abs(carrier - capture.truth.cfo_hz).max() < 6 * 30
        assert np.abs(error).max() < 0.3
    else:
        spread = np.sqrt(frames.step_var) / 4.0 * 1e6
        assert np.all(spread < 2.0)
        assert np.all(np.abs(error) < 5 * spread)  # 12 frames: false failure 7e-6
        assert abs(np.mean(error / spread)) < 4.5 / np.sqrt(12)


def test_tracking_follows_the_carrier_that_acquisition_leaves(tmp_path):
    """4000 payload periods at 20 dB: acquisition alone would turn the far end by radians."""
    link = make_link(sections=SYNC + IN_TURN + payload_section(4000))
    recording, capture = record(
        tmp_path,
        link,
        receive_channels=2,
        samples_per_symbol=2.0,
        snr_db=20.0,
        frames=20,
        cfo_hz=(-1.5e4, 1.5e4),
        spacing=20.0,
        seed=13,
        channels=rayleigh(),
    )
    frames = collect(recording, link)
    found = partner(frames, capture)
    truth = capture.truth.cfo_hz[found]
    error = frames.carrier_estimate * recording.sample_rate - truth
    spread = np.sqrt(frames.frequency_var) / (2 * np.pi) * link.symbol_rate_hz
    assert np.all(spread < 1.0)
    # 20 frames, all within 5 standard deviations as the frames state them; and not too modest.
    assert np.all(np.abs(error) < 5 * spread)
    assert 0.6 < np.std(error / spread) < 1.5  # chi-square of 20: false failure 2e-3, seed fixed
    sent = capture.truth.words()[found]
    genie = bit_errors(link, genie_words(capture)[found], sent)
    assert bit_errors(link, frames.words, sent) <= 1.1 * genie + 20


def test_refit_estimates_are_unbiased_and_honest(tmp_path):
    """Noise, channel and timing after the refit, over 200 frames at 15 dB, against the truth."""
    link = make_link(sections=SYNC + IN_TURN + payload_section(400))
    recording, capture = record(
        tmp_path,
        link,
        receive_channels=2,
        samples_per_symbol=4.0,
        snr_db=15.0,
        frames=200,
        spacing=20.0,
        seed=14,
    )
    frames = collect(recording, link)
    truth = capture.truth
    found = partner(frames, capture)
    assert found.size == 200
    # N0: 2 x 500 complex observations a frame; what the pulse's truncation adds is 0.3 %.
    ratio = frames.noise / truth.N0
    assert np.mean(ratio) == pytest.approx(1.0, abs=0.01)
    assert np.std(ratio) == pytest.approx(1 / np.sqrt(2 * (63 + 32 + 400 - 2)), rel=0.25)
    # Timing: the stated spread.
    timing = frames.start - truth.starts[found]
    assert 0.8 < np.std(timing / np.sqrt(frames.timing_var)) < 1.3
    # Channel up to the common phase of its reference instant: N0 over the energy behind it.
    phase = np.exp(1j * np.angle(np.sum(frames.channel * truth.H[found].conj(), axis=(1, 2))))
    error = frames.channel / phase[:, None, None] - truth.H[found]
    expected = truth.N0 / frames.antenna_energy
    measured = np.mean(np.abs(error) ** 2 / expected[:, None, :])
    # One of eight real dimensions is taken up by the phase; doubtful words count in full.
    assert 0.75 < measured < 1.25


def test_low_snr_does_not_bias_the_noise(tmp_path):
    """0 dB: every third word is wrong, and N0 is still right to 3 %."""
    link = make_link(sections=SYNC + IN_TURN + payload_section(400))
    recording, capture = record(
        tmp_path,
        link,
        receive_channels=2,
        samples_per_symbol=4.0,
        snr_db=0.0,
        frames=60,
        spacing=20.0,
        seed=15,
    )
    frames = collect(recording, link, ReceiverOptions(false_alarm=1e-8))
    assert frames.start.size > 30
    assert np.mean(frames.noise) / capture.truth.N0 == pytest.approx(1.0, abs=0.03)


def test_two_step_is_run_beside_for_comparison(tmp_path):
    link = make_link(antennas=4, sections=SYNC + IN_TURN + payload_section(200))
    choices = {"receive_channels": 2, "samples_per_symbol": 4.0, "snr_db": 15.0, "frames": 30}
    recording, capture = record(tmp_path, link, spacing=10.0, seed=16, **choices)
    frames = collect(recording, link)
    sent = capture.truth.words()[partner(frames, capture)]
    assert bit_errors(link, frames.two_step, sent) > 1.5 * bit_errors(link, frames.words, sent)
    plugged = collect(recording, link, ReceiverOptions(detector="two-step"))
    np.testing.assert_array_equal(plugged.words, frames.two_step)


@pytest.mark.parametrize("cfo_range", [0.05, 0.25])
def test_carriers_over_a_wide_range_are_found_when_asked_for(tmp_path, cfo_range):
    """Up to a quarter of the symbol rate: the search centres its filter on several carriers.

    20 dB, no fading: a frame missed or on another carrier would be a defect, not chance.
    """
    link = make_link(antennas=2)
    offset = cfo_range * link.symbol_rate_hz
    recording, capture = record(
        tmp_path,
        link,
        receive_channels=2,
        channels=np.array([[1.0, 0.5j], [0.4, -1.0]]),
        snr_db=20.0,
        samples_per_symbol=4.0690104,
        frames=40,
        spacing=(20.0, 200.0),
        cfo_hz=(-offset, offset),
        seed=6,
    )
    frames = collect(recording, link, ReceiverOptions(cfo_range=cfo_range))
    f = partner(frames, capture)
    assert f.size == 40
    carrier = frames.carrier_estimate * capture.sample_rate
    np.testing.assert_allclose(carrier, capture.truth.cfo_hz[f], atol=2e-4 * link.symbol_rate_hz)
    assert np.ptp(carrier) > 1.5 * offset
    np.testing.assert_array_equal(frames.words, capture.truth.words()[f])
