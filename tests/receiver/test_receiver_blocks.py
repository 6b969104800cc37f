"""Blocks with guards: detection in the frequency domain against dense algebra; recordings whole."""

import json

import numpy as np
import pytest
from dispersive_cases import fading_taps
from received_frames import collect, record
from receiver_cases import IN_TURN, SYNC, complex_noise, make_link, payload_section
from typer.testing import CliRunner

from spatiq.cli.main import app
from spatiq.errors import InputError
from spatiq.link.blocks import BlockRun
from spatiq.metrics.measuring import measure
from spatiq.metrics.subcarriers import SubcarrierSummary
from spatiq.receiver.block_detection import BlockDetector, block_spectrum
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.fir_channel import FirChannel, Window, convolved, subcarrier_channels
from spatiq.receiver.linear_equaliser import word_moments
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.frames import frame_vectors
from spatiq.transmit.tapped_delay_line import TappedDelayLine

DISPERSIVE = ReceiverOptions(channel="dispersive")


def in_blocks(form, length=32, guard=14, count=8, more="", power=0):
    return f"""
[[frame.section]]
kind = "payload"
symbols = {length * count}
power_db = {power}
blocks = {{ form = "{form}", length = {length}, guard = {guard}{more} }}
"""


def blocks_link(form, antennas=2, **choices):
    return make_link(antennas=antennas, sections=SYNC + IN_TURN + in_blocks(form, **choices))


@pytest.mark.nojit
@pytest.mark.parametrize("form", ["cyclic-prefix", "zero-padding", "multicarrier"])
@pytest.mark.parametrize("window", [Window(0, 3), Window(-2, 2)])
def test_guards_make_flat_channels(form, window):
    """Spectrum of a body = H[f] times the spectrum sent, H[f] by the plain sum; no noise."""
    link = blocks_link(form, length=8, guard=5, count=3)
    vectors = frame_vectors(link, np.array([1]))[0]
    rng = np.random.default_rng(1)
    taps = fading_taps(rng, window.size, 2, 2)
    channel = FirChannel(window, taps, 0.1, 1, np.zeros(2))
    unknown = np.where(np.any(link.layout.known != 0, axis=1)[:, None], 0, vectors)
    received = convolved(unknown, taps, window)
    (run,) = link.layout.blocks
    responses = subcarrier_channels(taps, window, 8)
    for f in range(8):
        turns = np.exp(-2j * np.pi * f * np.arange(window.first, window.last + 1) / 8)
        np.testing.assert_allclose(responses[f], np.einsum("l,lra->ra", turns, taps))
    for body in run.bodies:
        sent = np.fft.fft(vectors[body : body + 8], axis=0) / np.sqrt(8)
        expected = np.einsum("fra,fa->fr", responses, sent)
        found = block_spectrum(received, channel, run, int(body))
        np.testing.assert_allclose(found, expected, atol=1e-9)


@pytest.mark.nojit
def test_equalised_block_is_the_linear_minimum():
    """x = m + C H^H (H C H^H + N0 I)^-1 (y - H m) with a dense circulant H; error of one period."""
    book = blocks_link("cyclic-prefix").codebook
    length, noise, window = 6, 0.2, Window(-1, 2)
    rng = np.random.default_rng(2)
    taps = fading_taps(rng, window.size, 3, 2)
    words = rng.integers(0, book.size, length)
    circulant = np.zeros((length, 3, length, 2), complex)
    for lag, tap in zip(range(-1, 3), taps, strict=True):
        for k in range(length):
            circulant[k, :, (k - lag) % length, :] += tap
    matrix = circulant.reshape(length * 3, length * 2)
    y = matrix @ book.vectors[words].ravel() + complex_noise(rng, (length * 3,), noise)
    spectrum = np.fft.fft(y.reshape(length, 3), axis=0) / np.sqrt(length)
    detector = BlockDetector(book, maximum_likelihood)
    responses = subcarrier_channels(taps, window, length)
    found, error = detector.estimates(spectrum, responses, noise)
    moments = word_moments(book.vectors)
    mean, covariance = np.tile(moments.mean, length), np.kron(np.eye(length), moments.covariance)
    around = matrix @ covariance @ matrix.conj().T + noise * np.eye(length * 3)
    gain = covariance @ matrix.conj().T @ np.linalg.inv(around)
    np.testing.assert_allclose(found.ravel(), gain @ (y - matrix @ mean), atol=1e-9)
    whole = covariance - gain @ matrix @ covariance
    np.testing.assert_allclose(error, whole[4:6, 4:6], atol=1e-9)


def test_subcarriers_are_decided_by_the_flat_detector():
    """Every subcarrier's word: argmin ||Y[f] - H[f] x||^2 by a plain search."""
    link = blocks_link("multicarrier", length=16, guard=4, count=1)
    book, noise, window = link.codebook, 0.3, Window(0, 3)
    rng = np.random.default_rng(3)
    taps = fading_taps(rng, window.size, 2, 2)
    received = convolved(frame_vectors(link, np.array([0]))[0], taps, window)
    received += complex_noise(rng, received.shape, noise)
    (run,) = link.layout.blocks
    channel = FirChannel(window, taps, noise, 1, np.zeros(2))
    body = int(run.bodies[0])
    found = BlockDetector(book, maximum_likelihood)(received, channel, run, body, 1.0)
    spectrum = block_spectrum(received, channel, run, body)
    responses = subcarrier_channels(taps, window, 16)
    for word, f in zip(found, run.slots, strict=True):
        images = book.vectors @ responses[f].T
        assert word == np.argmin(np.sum(np.abs(spectrum[f] - images) ** 2, axis=1))


FORMS = [
    ("cyclic-prefix", "auto", "flat"),
    ("zero-padding", "mmse", "flat"),
    ("zero-padding", "sequence", "flat"),
    ("multicarrier", "auto", "dispersive"),
]


@pytest.mark.parametrize(("form", "equaliser", "channel"), FORMS)
def test_recordings_with_echoes(tmp_path, form, equaliser, channel):
    """No error at 26 dB and four receive antennas; N0 and the offsets as the truth has them.

    N0 of a frame rests on 4 * 350 complex values less 4 * 32 taps: spread 2.8 %, five of them.
    """
    link = blocks_link(form, power=-2)
    recording, capture = record(
        tmp_path, link, channels=TappedDelayLine("tdl-a", 0.7), samples_per_symbol=4, frames=6,
        receive_channels=4, snr_db=26, cfo_hz=(-8e3, 8e3), clock_ppm=15.0, spacing=(40.0, 90.0),
        seed=5,
    )  # fmt: skip
    options = ReceiverOptions(channel="dispersive", equaliser=equaliser)
    frames = collect(recording, link, options)
    np.testing.assert_array_equal(frames.words, capture.truth.words())
    np.testing.assert_allclose(frames.noise / capture.truth.N0, 1, atol=0.16)
    std = np.sqrt(frames.frequency_var) / (2 * np.pi) * link.symbol_rate_hz
    cfo = frames.carrier_estimate * capture.sample_rate - capture.truth.cfo_hz
    assert np.all(np.abs(cfo) < 5 * std)
    plain = collect(recording, link)  # single carriers as if flat, subcarriers all the same
    assert np.all(plain.noise > 3 * capture.truth.N0) == (channel == "flat")


@pytest.mark.parametrize("form", ["cyclic-prefix", "zero-padding", "multicarrier"])
def test_recordings_without_echoes(tmp_path, form):
    """A flat channel is a dispersive one of one lag; single carriers are received as flat, too."""
    link = blocks_link(form)
    recording, capture = record(
        tmp_path, link, samples_per_symbol=4, frames=4, receive_channels=2, snr_db=28, seed=6,
        snr_reference="frame", spacing=(40.0, 90.0),
    )  # fmt: skip
    for options in (ReceiverOptions(), DISPERSIVE):
        frames = collect(recording, link, options)
        assert np.mean(frames.words != capture.truth.words()) < 0.02


def test_figures_of_subcarriers(tmp_path):
    """EVM^2 of a subcarrier = Nr N0 / |H[f] x|^2 of the truth; counts add up to the frame's."""
    link = blocks_link(
        "multicarrier",
        length=32,
        count=24,
        more=", subcarriers = [1, 2, 5, 6, 7, 9, 20, 21, 22, 25, 28, 30]",
    )
    recording, capture = record(
        tmp_path, link, channels=TappedDelayLine("tdl-a", 0.7), samples_per_symbol=4, frames=4,
        receive_channels=2, snr_db=11, spacing=(40.0, 90.0), seed=7,
    )  # fmt: skip
    (measured,) = measure(recording, link)
    sums = measured.subcarriers
    assert sums.shape == (4, 32, 5)
    columns = measured.columns
    np.testing.assert_array_equal(sums[:, :, 0].sum(axis=1), columns["periods_compared"])
    np.testing.assert_array_equal(sums[:, :, 1].sum(axis=1), columns["antenna_errors"])
    np.testing.assert_array_equal(sums[:, :, 2].sum(axis=1), columns["symbol_errors"])
    assert columns["antenna_errors"].sum() > 0
    (run,) = link.layout.blocks
    lags = np.arange(-8.0, 24.0)
    words = capture.truth.words().reshape(4, 24, 12)
    # Many wrong words at one subcarrier pull the estimate there: frames with hardly any.
    clean = np.flatnonzero(columns["antenna_errors"] + columns["symbol_errors"] < 5)
    assert clean.size >= 2
    for i in clean:
        responses = subcarrier_channels(capture.truth.taps(i, lags), Window(-8, 23), 32)
        for j, f in enumerate(run.slots):
            energy = np.sum(np.abs(link.codebook.vectors[words[i, :, j]] @ responses[f].T) ** 2)
            # 24 words, two antennas: error energy spreads by 14 %, the estimate by less; five.
            assert sums[i, f, 4] == pytest.approx(energy, rel=0.35)
            assert sums[i, f, 3] == pytest.approx(48 * capture.truth.N0, rel=0.75)
    summary, halves = SubcarrierSummary(), SubcarrierSummary()
    summary.add(sums)
    halves.add(sums[:1])
    halves.add(sums[1:])
    assert summary.as_dicts() == halves.as_dicts()
    assert [row["subcarrier"] for row in summary.as_dicts()] == run.slots.tolist()


def test_refused(tmp_path):
    mixed = SYNC + IN_TURN + in_blocks("cyclic-prefix") + payload_section(20)
    link = make_link(sections=mixed)
    recording, _ = record(tmp_path, link, samples_per_symbol=4, frames=1)
    with pytest.raises(InputError, match="all of a frame's payload in blocks"):
        collect(recording, link, DISPERSIVE)
    link = blocks_link("cyclic-prefix")
    with pytest.raises(InputError, match="mmse or auto"):
        collect(recording, link, ReceiverOptions(channel="dispersive", equaliser="sequence"))


def test_commands(tmp_path):
    """Multicarrier through explain, waveform, simulate and measure."""
    link_file = tmp_path / "a.link.toml"
    link_file.write_text(blocks_link("multicarrier").text)
    run = CliRunner().invoke
    explained = run(app, ["link", "explain", str(link_file)])
    assert "31 subcarriers" in " ".join(explained.stdout.split())
    rate = ["--samples-per-symbol", "4", "--frames", "3"]
    made = run(app, ["waveform", str(link_file), *rate, "--out", str(tmp_path / "w")])
    assert made.exit_code == 0, made.output
    base = str(tmp_path / "room")
    echo = ["--channel", "tdl-a", "--delay-spread", "0.5", "--spacing", "60", "--snr", "30"]
    made = run(app, ["simulate", str(link_file), *rate, *echo, "--out", base])
    assert made.exit_code == 0, made.output
    files = [base + ".sigmf-meta", str(link_file), "--out", base + ".h5"]
    done = run(app, ["measure", *files, "--json"])
    assert done.exit_code == 0, done.output
    summary = json.loads(done.stdout)
    assert summary["frames"]["found"] == 3
    assert len(summary["subcarriers"]) == 31
    shown = run(app, ["show", base + ".h5"])
    assert "of 31 subcarriers" in shown.stdout


def test_run_is_the_layouts():
    """Bodies and payload of a run, counted by hand."""
    run = BlockRun("cyclic-prefix", 10, 2, 4, 2, np.arange(4))
    assert run.bodies.tolist() == [12, 18]
    assert run.payload.tolist() == [12, 13, 14, 15, 18, 19, 20, 21]
    padded = BlockRun("zero-padding", 10, 2, 4, 2, np.arange(4))
    assert padded.bodies.tolist() == [10, 16]
