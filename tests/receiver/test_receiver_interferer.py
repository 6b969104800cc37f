"""Narrow-band interferers and coloured noise: found, taken out as far as they can be, told."""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import FIGURES, bit_errors, collect, genie_words, partner, record
from test_receiver_whitening import LINK

from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.receiver.chain import chain_parts
from spatiq.receiver.cleaning import refined_frequency
from spatiq.receiver.front_end_survey import CHUNK
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.clipping import Clipping
from spatiq.transmit.dc_offset import DcOffset
from spatiq.transmit.interferer import Interferer
from spatiq.transmit.noise_shape import NoiseShape
from spatiq.transmit.simulation import simulate

BASE = {"samples_per_symbol": 4.0, "cfo_hz": (-1e4, 1e4)}


@pytest.mark.nojit
def test_a_lines_frequency_is_refined_to_its_bound():
    """Two halves: 3/4 of the information (Tretter's bound 6 / ((2 pi)^2 snr N^3)); 200 chunks, so
    that the variance is right to 10 %: a factor of 1.6 fails less than once in 1e6 seeds."""
    rng = np.random.default_rng(8)
    n, snr, true = 2048, 0.5, 0.0371
    errors = []
    for _ in range(200):
        noise = (rng.standard_normal((1, n)) + 1j * rng.standard_normal((1, n))) * np.sqrt(0.5)
        line = np.sqrt(snr) * np.exp(2j * np.pi * (true * np.arange(n) + rng.random()))
        errors.append(refined_frequency(line + noise, true + 0.3 / CHUNK) - true)
    bound = 6 / ((2 * np.pi) ** 2 * snr * n**3)
    assert bound < np.var(errors) < 1.6 * bound / 0.75


@pytest.mark.parametrize(
    ("channels", "lines", "snr"),
    [
        (1, [(123456.0, 10.0)], 20.0),
        (2, [(-311111.0, 0.0)], 14.0),
        (2, [(50e3, -12.0)], 14.0),
        (2, [(200e3, 6.0), (-77e3, 3.0)], 14.0),
    ],
)
def test_errors_beside_a_line_are_nearly_those_of_a_genie_that_knows_it(
    tmp_path, channels, lines, snr
):
    """At most 15 % more bit errors than a genie's without the interferer, on the same noise, plus
    four times the square root of their number; frequency and power as simulated."""
    link = parse_link(LINK)
    choices = {
        **BASE, "receive_channels": channels, "snr_db": snr, "frames": 30, "seed": 21,
    }  # fmt: skip
    arriving = tuple(Interferer(f, p) for f, p in lines)
    recording, capture = record(tmp_path, link, arriving=arriving, **choices)
    frames = collect(recording, link)
    f = partner(frames, capture)
    assert f.size == 30
    words = capture.truth.words()[f]
    best = bit_errors(link, genie_words(simulate(link, **choices))[f], words)
    assert bit_errors(link, frames.words, words) < 1.15 * best + 4 * np.sqrt(best)
    (measured,) = measure(recording, link)
    assert np.all(measured.columns["marks"] & Mark.INTERFERER)
    frequency, power = lines[0]
    # Half a bin of a frame's spectrum is 120 Hz.
    assert np.all(np.abs(measured.columns["interferer_hz"] - frequency) < 120.0)
    level = measured.receive.sample_power * 10 ** (measured.columns["interferer_db"] / 10)
    seen = 10 * np.log10(level / capture._signal_power)
    assert np.all(np.abs(seen - power) < 1.0)


def test_the_result_does_not_depend_on_block_size_where_samples_are_cleaned(tmp_path):
    link = parse_link(LINK)
    recording, _ = record(
        tmp_path, link, arriving=(Interferer(90e3, 8.0),), impairments=[DcOffset(6.0)],
        receive_channels=2, snr_db=14.0, frames=20, seed=5, **BASE,
    )  # fmt: skip
    survey = chain_parts(recording, link, ReceiverOptions()).survey
    assert len(survey.lines) == 1 and survey.constant.all()
    whole = collect(recording, link)
    for size in (4096, 10_000, 1 << 16):
        other = collect(recording, link, ReceiverOptions(block_size=size))
        for name in FIGURES:
            np.testing.assert_array_equal(whole.columns[name], other.columns[name])


def test_coloured_noise_is_told_and_costs_no_more_than_it_must(tmp_path):
    """Autoregressive noise is stronger in the middle of the band: N0 is what passes the
    matched filter, and words are decided as well as by a genie on the same samples."""
    link = parse_link(LINK)
    shape = NoiseShape(feedback=(-0.9,))
    recording, capture = record(
        tmp_path,
        link,
        noise_shape=shape,
        receive_channels=2,
        snr_db=22.0,
        frames=40,
        seed=9,
        **BASE,
    )
    frames = collect(recording, link)
    f = partner(frames, capture)
    words = capture.truth.words()[f]
    best = bit_errors(link, genie_words(capture)[f], words)
    assert bit_errors(link, frames.words, words) < 1.15 * best + 4 * np.sqrt(best)
    # Root raised cosine: |P|^2 integrates the noise's spectrum over the band.
    pulse = chain_parts(recording, link, ReceiverOptions()).bank.taps[0].astype(float)
    grid = np.fft.fftfreq(4096)
    passed = np.mean(np.abs(np.fft.fft(pulse, 4096)) ** 2 * np.abs(shape.response(grid)) ** 2)
    assert np.mean(frames.noise) == pytest.approx(capture.truth.N0 * passed, rel=0.03)
    (measured,) = measure(recording, link)
    marked = measured.columns["marks"] & Mark.ERRORS_CORRELATED
    spectrum = np.abs(np.fft.fft(pulse, 4096)) ** 2 * np.abs(shape.response(grid)) ** 2
    lag = np.abs(np.mean(spectrum * np.exp(8j * np.pi * grid))) / passed
    assert np.median(measured.columns["error_correlation"]) == pytest.approx(lag, abs=0.03)
    assert np.all(marked)
    assert not np.any(measured.columns["marks"] & Mark.INTERFERER)


def test_clipped_frames_are_marked_and_decided_as_well_as_by_a_genie(tmp_path):
    """On the same clipped samples; the constant is taken out, and clipping counted before that."""
    link = parse_link(LINK)
    recording, capture = record(
        tmp_path, link, impairments=[DcOffset(0.0), Clipping(3.0)], receive_channels=2,
        snr_db=14.0, frames=30, seed=13, bits=16, **BASE,
    )  # fmt: skip
    frames = collect(recording, link)
    f = partner(frames, capture)
    words = capture.truth.words()[f]
    size = np.sqrt(capture._signal_power) * np.exp(0.25j * np.pi)
    best = bit_errors(
        link, genie_words(capture, (capture.samples() - size).astype(np.complex64))[f], words
    )
    assert bit_errors(link, frames.words, words) < 1.15 * best + 4 * np.sqrt(best)
