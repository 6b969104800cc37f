"""Frame search: threshold, false alarms, detection probability, kernels and places found."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from receiver_cases import (
    IN_TURN,
    MemoryRecording,
    complex_noise,
    make_link,
    payload_section,
    rayleigh,
    waveform,
)

from spatiq.receiver.chain import chain_parts
from spatiq.receiver.frame_search import (
    FrameSearch,
    largest_side_lobe,
    noise_metrics,
    sync_pattern,
    threshold,
)
from spatiq.receiver.frame_search_kernels import metric_at, raise_peak, window_energy
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.sample_stream import SampleStream

# Two antennas send the sync section together, shifted: its vectors span two dimensions.
RANK_TWO = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 6}
send = "together"
antenna_shift = [0, 31]
"""


def search_in(samples, link, options=None, sps=4.0):
    recording = MemoryRecording(samples.astype(np.complex64), sps * link.symbol_rate_hz)
    parts = chain_parts(recording, link, options or ReceiverOptions())
    stream = SampleStream(recording.blocks(), 0, recording.n_samples, recording.channels)
    return FrameSearch(stream, parts.bank, parts.pattern), parts.pattern


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("length", "channels", "false_alarm", "value"),
    [
        (63, 1, 1e-3, 0.105433),
        (63, 1, 1e-6, 0.199750),
        (64, 1, 1e-3, 0.103849),
        (64, 1, 1e-6, 0.196914),
        (127, 1, 1e-3, 0.053348),
        (127, 1, 1e-6, 0.103849),
        (64, 2, 1e-6, 0.123598),
        (64, 4, 1e-6, 0.080777),
    ],
)
def test_threshold_is_the_closed_form(length, channels, false_alarm, value):
    """Beta(Nr, Nr(N-1)); one channel: Pfa = (1-T)^(N-1), textbook."""
    found = threshold(false_alarm, length, 1, channels)
    assert found == pytest.approx(value, abs=6e-7)
    if channels == 1:
        assert (1 - found) ** (length - 1) == pytest.approx(false_alarm, rel=1e-9)


def oracle_metric(y, basis, carrier, lag):
    """||Q^H D^H Y||^2 / ||Y||^2 with plain matrices; basis (P, N) conjugate-free rows."""
    n = basis.shape[1]
    window = y[:, lag : lag + 2 * n : 2][:, :n]
    turn = np.exp(-2j * np.pi * carrier * np.arange(n))
    projected = basis.conj() @ (turn[:, None] * window.T)
    return np.sum(np.abs(projected) ** 2) / np.sum(np.abs(window) ** 2)


@pytest.mark.nojit
@pytest.mark.parametrize(("rank", "channels"), [(1, 1), (2, 2), (2, 1), (1, 4)])
def test_metric_kernel_against_matrices(rank, channels):
    rng = np.random.default_rng(rank * 10 + channels)
    basis = np.linalg.qr(complex_noise(rng, (21, rank), 1.0))[0].T
    y = complex_noise(rng, (channels, 60), 1.0)
    carriers = np.array([-0.02, 0.0, 0.013])
    got = metric_at(
        y.astype(np.complex64), np.ascontiguousarray(basis.astype(np.complex64)), carriers, 9
    )
    want = [[oracle_metric(y, basis, f, lag) for f in carriers] for lag in range(9)]
    np.testing.assert_allclose(got, want, rtol=3e-6, atol=1e-8)


@pytest.mark.nojit
def test_metric_of_silence_is_zero():
    basis = np.ones((1, 5), np.complex64) / np.float32(np.sqrt(5))
    assert np.all(metric_at(np.zeros((1, 20), np.complex64), basis, np.zeros(1), 3) == 0.0)


@pytest.mark.nojit
def test_window_energy_kernel():
    halves = complex_noise(np.random.default_rng(4), (2, 3, 80), 1.0).astype(np.complex64)
    inverse = np.empty((2, 60), np.float32)
    window_energy(halves, 21, inverse)
    power = np.sum(np.abs(halves.astype(complex)) ** 2, axis=1)
    sums = [[power[h, lag : lag + 21].sum() for lag in range(60)] for h in range(2)]
    np.testing.assert_allclose(inverse, 1 / np.array(sums), rtol=1e-6)
    window_energy(np.zeros_like(halves), 21, inverse)
    np.testing.assert_array_equal(inverse, 0.0)


@pytest.mark.nojit
def test_peak_kernel_keeps_the_highest_bin():
    rng = np.random.default_rng(5)
    correlation = rng.standard_normal((3, 2, 4, 50, 2)).astype(np.float32)  # 3 bins
    inverse = rng.uniform(0.5, 1.5, (2, 40)).astype(np.float32)
    best, where = np.zeros((2, 40), np.float32), np.zeros((2, 40), np.int32)
    for b in range(3):
        raise_peak(correlation[b], inverse, b + 7, np.empty(40, np.float32), best, where)
    metric = np.sum(correlation.astype(float) ** 2, axis=(2, 4))[:, :, :40] * inverse
    np.testing.assert_allclose(best, metric.max(axis=0), rtol=1e-5)
    np.testing.assert_array_equal(where, metric.argmax(axis=0) + 7)


@pytest.mark.parametrize("sections", ["one", "two"])
def test_transforms_and_direct_correlation_agree(sections):
    link = (
        make_link()
        if sections == "one"
        else make_link(sections=RANK_TWO + IN_TURN + payload_section(64))
    )
    samples = complex_noise(np.random.default_rng(6), (2, 12_000), 1.0)
    search, pattern = search_in(samples, link)
    best = np.concatenate(list(noise_metrics(search)))
    search, pattern = search_in(samples, link)
    count = 3000
    y = search.instants(0, count + 2 * pattern.length)
    carriers = pattern.carrier_bins / pattern.transform_size
    direct = metric_at(y, pattern.basis, carriers, count)
    np.testing.assert_allclose(best[:count], direct.max(axis=1), atol=2e-6)


@pytest.mark.parametrize(
    ("sections", "channels", "rank", "false_alarm"),
    [("one", 1, 1, 1e-2), ("one", 2, 1, 1e-3), ("two", 2, 2, 1e-3)],
)
def test_noise_alone_passes_as_often_as_stated_per_lag_and_bin(
    sections, channels, rank, false_alarm
):
    """Neighbouring lags share noise, so the spread is taken from blocks: Student's t of 60 blocks.

    False-failure probability of each case: 2e-5 (and what the t distribution errs on 60 counts).
    """
    link = (
        make_link()
        if sections == "one"
        else make_link(sections=RANK_TWO + IN_TURN + payload_section(64))
    )
    options = ReceiverOptions(false_alarm=false_alarm)
    samples = complex_noise(np.random.default_rng(7 + channels), (channels, 200_000), 3.7)
    search, pattern = search_in(samples, link, options)
    assert pattern.basis.shape[0] == rank
    y = search.instants(0, search.last_lag + 2 * pattern.length - 1)
    carriers = pattern.carrier_bins[[0, 3]] / pattern.transform_size
    metric = metric_at(y, pattern.basis, carriers, search.last_lag + 1)
    alarms = (metric >= pattern.threshold).mean(axis=1)
    blocks = np.array([b.mean() for b in np.array_split(alarms, 60)])
    t = (blocks.mean() - false_alarm) / (blocks.std(ddof=1) / np.sqrt(60))
    assert blocks.sum() > 0
    assert abs(t) < scipy.stats.t.isf(1e-5, 59)


def test_noise_alone_passes_at_most_as_often_as_lags_times_bins():
    """The best of all bins: at most bins x Pfa (union), at least Pfa."""
    options = ReceiverOptions(false_alarm=1e-3)
    samples = complex_noise(np.random.default_rng(11), (1, 200_000), 1.0)
    search, pattern = search_in(samples, make_link(), options)
    best = np.concatenate(list(noise_metrics(search)))
    rate = np.mean(best >= pattern.threshold)
    bins = pattern.carrier_bins.size
    assert best.size == search.last_lag + 1
    # About 1e5/(2 x 63) x bins independent looks; the margins are 5 of their standard deviations.
    assert 1e-3 < rate < bins * 1e-3 * 1.5


def test_nothing_is_found_in_noise_at_the_default_rate():
    """100,000 lags x 7 bins at 1e-10: false-failure probability below 1e-4."""
    samples = complex_noise(np.random.default_rng(12), (1, 200_000), 1.0)
    search, _ = search_in(samples, make_link())
    assert search.scan(0) is None


@pytest.mark.parametrize(("snr_db", "probability"), [(-3.0, 0.991609), (-6.0, 0.579649)])
def test_detection_probability(snr_db, probability):
    """Noncentral F(2, 2N-2, 2N SNR), N = 64, Pfa = 1e-6, one channel.

    4000 trials, 4.5 binomial standard deviations: false-failure probability 7e-6.
    """
    n, trials = 64, 4000
    limit = threshold(1e-6, n, 1, 1)
    statistic = limit * (n - 1) / (1 - limit)
    snr = 10 ** (snr_db / 10)
    closed = scipy.stats.ncf.sf(statistic, 2, 2 * n - 2, 2 * n * snr)
    assert closed == pytest.approx(probability, abs=1e-6)
    rng = np.random.default_rng(13)
    sync = np.exp(2j * np.pi * rng.random(n))
    basis = (sync / np.sqrt(n)).astype(np.complex64)[None]
    hits = 0
    for _ in range(trials):
        y = np.zeros((1, 2 * n), np.complex64)
        gain = np.sqrt(snr) * np.exp(2j * np.pi * rng.random())
        y[0, ::2] = gain * sync + complex_noise(rng, (n,), 1.0)
        hits += metric_at(y, basis, np.zeros(1), 1)[0, 0] >= limit
    spread = np.sqrt(closed * (1 - closed) / trials)
    assert abs(hits / trials - closed) < 4.5 * spread


@pytest.mark.parametrize("sections", ["one", "two"])
@pytest.mark.parametrize("sps", [1.25, 4.0, 7.3])
def test_sync_sections_are_found_in_place_and_carrier(sections, sps):
    """20 dB: the nearest half symbol and the nearest bin, or the neighbour when midway."""
    link = (
        make_link()
        if sections == "one"
        else make_link(sections=RANK_TWO + IN_TURN + payload_section(64))
    )
    rng = np.random.default_rng(14)
    length = link.layout.length
    vectors = link.layout.known.copy()
    for trial in range(4):
        t0 = (100 + 40 * rng.random()) * sps
        n = int((t0 / sps + length + 150) * sps)
        carrier = rng.uniform(-0.02, 0.02)  # cycles per symbol
        samples = waveform(link, sps, t0, vectors, rayleigh(rng, 2, 2), n)
        samples = samples * np.exp(2j * np.pi * carrier / sps * np.arange(n))
        samples = samples + complex_noise(rng, samples.shape, 0.01)
        search, pattern = search_in(samples, link, sps=sps)
        found = search.scan(0)
        assert found is not None, trial
        assert abs(found.lag / 2 * sps - t0) <= 0.51 * sps
        bin_width = (pattern.carrier_bins[1] - pattern.carrier_bins[0]) / pattern.transform_size
        assert abs(pattern.carrier(found.carrier_bin) - carrier) <= bin_width
        # However one gets there: the same answer.
        assert search.near(found.lag + 5, found.carrier_bin, 8) == found


def test_carrier_bins_cover_the_stated_range():
    link = make_link()
    for reach in (0.0, 0.003, 0.02, 0.25):
        pattern = sync_pattern(link, ReceiverOptions(cfo_range=reach), 1)
        carriers = pattern.carrier_bins / pattern.transform_size
        assert carriers[-1] >= reach and carriers[0] <= -reach
        assert np.all(np.diff(carriers) <= 1 / (2 * pattern.length) + 1e-12)


@pytest.mark.nojit
def test_side_lobes_of_a_pattern_against_itself():
    """Direct sums over all lags and offsets; a shifted copy on a second antenna is ambiguous."""
    rng = np.random.default_rng(15)
    basis = np.linalg.qr(complex_noise(rng, (13, 2), 1.0))[0].T
    shifts = np.array([0.0, 0.01, 0.05])
    top = 0.0
    for shift in (*shifts, *-shifts):
        turned = basis * np.exp(2j * np.pi * shift * np.arange(13))
        for lag in range(2, 13):
            for one, other in (
                (basis[:, lag:], turned[:, :-lag]),
                (basis[:, :-lag], turned[:, lag:]),
            ):
                top = max(top, np.linalg.norm(one.conj() @ other.T) ** 2)
    assert largest_side_lobe(basis, shifts) == pytest.approx(top)
    plain = sync_pattern(make_link(), ReceiverOptions(), 2)
    shifted = make_link(sections=RANK_TWO + IN_TURN + payload_section(64))
    assert not plain.ambiguous and sync_pattern(shifted, ReceiverOptions(), 2).ambiguous
