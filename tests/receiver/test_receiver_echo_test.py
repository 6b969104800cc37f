"""The warning that a channel taken for flat is not: its chance law, what it says of recordings."""

import numpy as np
import pytest
import scipy.stats
from received_frames import record
from receiver_cases import IN_TURN, SYNC, complex_noise, make_link, payload_section
from typer.testing import CliRunner

from spatiq.cli.main import app
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.receiver.echo_test import echo_test
from spatiq.receiver.echo_test_kernels import neighbour_sums
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.tapped_delay_line import TappedDelayLine

SECTIONS = SYNC + IN_TURN + payload_section(500)


def sums_of(test, symbols, channel, words):
    """The kernel's sums."""
    shape = channel.shape
    before, behind, sums = np.empty(shape, complex), np.empty(shape, complex), np.empty(3)
    tested = (symbols[: test.follows.size], channel, words[: test.follows.size])
    neighbour_sums(*tested, test.words.parts, test.follows, before, behind, sums)
    return before, behind, sums


@pytest.mark.nojit
def test_sums_against_plain_numpy():
    known = 'known = {every = 7, sequence = {type = "m-sequence", order = 4}}'
    link = make_link(sections=SYNC + payload_section(40, known) + payload_section(9))
    test = echo_test(link, 4.0)
    rng = np.random.default_rng(1)
    payload, book = link.layout.payload_index, link.codebook
    words = rng.integers(0, book.size, payload.size)
    channel = complex_noise(rng, (2, 2), 1.0)
    symbols = complex_noise(rng, (payload.size, 2), 1.0).astype(np.complex64)
    before, behind, sums = sums_of(test, symbols, channel, words)
    x = book.vectors[words]
    left = symbols - x @ channel.T
    pairs = [k for k in range(1, payload.size) if payload[k] == payload[k - 1] + 1]
    assert len(pairs) < payload.size - 5
    expected = sum(np.outer(left[k], x[k - 1].conj()) for k in pairs)
    np.testing.assert_allclose(before, expected, atol=1e-4)
    expected = sum(np.outer(left[k - 1], x[k].conj()) for k in pairs)
    np.testing.assert_allclose(behind, expected, atol=1e-4)
    expected = [len(pairs), np.sum(np.abs(left) ** 2), np.sum(np.abs(x @ channel.T) ** 2)]
    np.testing.assert_allclose(sums, expected, rtol=1e-5)


@pytest.mark.parametrize("constellation", ["QPSK", "16QAM", None])
def test_chance_law(constellation):
    """Noise only: chi-square of 4 Nr Nt degrees of freedom, Kolmogorov-Smirnov over 400 frames.

    Falsely refused with probability 1e-4. Space-shift keying has words of one mean, which the
    channel's own fit takes out: its statistic is a little smaller, so there only the upper end.
    """
    link = make_link(constellation=constellation, sections=SYNC + payload_section(800))
    test = echo_test(link, 4.0)
    rng = np.random.default_rng(2)
    channel = complex_noise(rng, (2, 2), 1.0)
    values = []
    for _ in range(400):
        words = rng.integers(0, link.codebook.size, 256)
        x = link.codebook.vectors[words]
        y = x @ channel.T + complex_noise(rng, (256, 2), 0.3)
        fitted = np.linalg.lstsq(x, y, rcond=None)[0].T
        sums = sums_of(test, y.astype(np.complex64), fitted, words)
        values.append(float(test.statistic(*(part[None] for part in sums))[0][0]))
    law = scipy.stats.chi2(16)
    if constellation is None:
        assert np.mean(values) < 16
    else:
        assert scipy.stats.kstest(values, law.cdf).pvalue > 1e-4


@pytest.mark.parametrize("snr", [3.0, 15.0, 45.0, np.inf])
def test_flat_recordings_are_not_marked(tmp_path, snr):
    """40 frames, each with a chance of 1e-6; whatever the errors, and without noise at all."""
    link = make_link(sections=SECTIONS)
    recording, _ = record(
        tmp_path, link, samples_per_symbol=4.03, frames=40, snr_db=snr, spacing=(20.0, 60.0),
        seed=3, cfo_hz=(-5e3, 5e3), clock_ppm=20.0,
    )  # fmt: skip
    for measured in measure(recording, link):
        assert not np.any(measured.columns["marks"] & Mark.ECHOES)


@pytest.mark.parametrize(("spread", "snr", "least"), [(0.2, 20.0, 10), (1.0, 15.0, 7)])
def test_rooms_with_echoes_are_marked(tmp_path, spread, snr, least):
    """Of ten frames all, or most where one word in five is wrong and decisions say little.

    None when they are taken for what they are.
    """
    link = make_link(sections=SECTIONS)
    recording, _ = record(
        tmp_path, link, channels=TappedDelayLine("tdl-a", spread), samples_per_symbol=4,
        frames=10, snr_db=snr, spacing=(40.0, 90.0), seed=4,
    )  # fmt: skip
    for measured in measure(recording, link):
        marked = np.count_nonzero(measured.columns["marks"] & Mark.ECHOES)
        assert marked >= least
    for measured in measure(recording, link, ReceiverOptions(channel="dispersive")):
        assert not np.any(measured.columns["marks"] & Mark.ECHOES)


def test_the_terminal_says_so(tmp_path):
    link_file = tmp_path / "a.link.toml"
    link_file.write_text(make_link(sections=SECTIONS).text)
    base = str(tmp_path / "room")
    run = CliRunner().invoke
    made = run(app, [
        "simulate", str(link_file), "--samples-per-symbol", "4", "--frames", "2", "--snr", "20",
        "--channel", "tdl-a", "--delay-spread", "1", "--spacing", "60", "--out", base,
    ])  # fmt: skip
    assert made.exit_code == 0, made.output
    files = [base + ".sigmf-meta", str(link_file), "--out", base + ".h5"]
    done = run(app, ["measure", *files])
    assert done.exit_code == 0, done.output
    assert "see --channel dispersive" in done.stdout
