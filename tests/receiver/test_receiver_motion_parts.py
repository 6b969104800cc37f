"""The parts of channel following, each against plain linear algebra or its published law."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
import scipy.stats
from receiver_cases import (
    IN_TURN,
    SYNC,
    complex_noise,
    make_link,
    parts_of,
    payload_section,
    rayleigh,
)

from spatiq.receiver.channel_smoothing import Moments, smooth_channel
from spatiq.receiver.frame_batch import MOTION_PARTS
from spatiq.receiver.frame_posterior import frame_blocks, moments, posterior
from spatiq.receiver.link_tables import link_tables
from spatiq.receiver.motion_kernels import motion_sums
from spatiq.receiver.motion_test import MotionTest, phase_statistic
from spatiq.receiver.moving_channel import Following, MovingChannel
from spatiq.receiver.phase_smoothing import smooth_walk
from spatiq.receiver.slow_basis import longest_block, slow_basis
from spatiq.signal.codebooks import Codebook

BOOK = make_link(antennas=4).codebook


def sums_of(y, mean, channel, words=None):
    """Motion sums of one frame, vectors complex (K, Nr) and (K, Nt)."""
    receive, antennas = channel.shape
    scores = np.empty((MOTION_PARTS, receive, antennas), np.complex128)
    energy, reference = np.empty((MOTION_PARTS, antennas)), np.empty(MOTION_PARTS)
    words = np.arange(len(y)) if words is None else words
    parts = (parts_of(y), mean.astype(np.complex64), words)
    motion_sums(*parts, channel, scores, energy, reference)
    return scores, energy, reference


@pytest.mark.nojit
def test_motion_sums_are_the_plain_sums():
    rng = np.random.default_rng(1)
    channel = rayleigh(rng, 2, 4)
    x = BOOK.vectors[rng.integers(0, BOOK.size, 100)]
    x[3] = complex_noise(rng, (4,), 1.0)  # several antennas at once
    y = x @ channel.T + complex_noise(rng, (100, 2), 0.1)
    words = np.where(np.arange(100) % 9 == 4, -1, 1)
    scores, energy, reference = sums_of(y, x, channel, words)
    part = np.where(words < 0, -1, np.arange(100) * MOTION_PARTS // 100)
    error = y - x @ channel.T
    for j in range(MOTION_PARTS):
        at = part == j
        np.testing.assert_allclose(scores[j], error[at].T @ x[at].conj(), atol=1e-5)
        np.testing.assert_allclose(energy[j], np.sum(np.abs(x[at]) ** 2, axis=0), rtol=1e-6)
        expected = np.sum(np.abs(x[at] @ channel.T) ** 2)
        assert reference[j] == pytest.approx(expected, rel=1e-5)


def batch_of(book, frames, rng, *, noise=0.1, periods=600, moved=None):
    """Frames as the refit leaves them: channel by least squares, straight phase line removed."""
    columns = []
    for _ in range(frames):
        channel = rayleigh(rng, 2, book.antennas)
        x = book.vectors[rng.integers(0, book.size, periods)]
        clean = x @ channel.T
        if moved is not None:
            clean = moved(clean)
        y = clean + complex_noise(rng, clean.shape, noise)
        for _ in range(3):  # phase line and channel in turn, as the refit
            channel = np.linalg.lstsq(x, y, rcond=None)[0].T
            sent = x @ channel.T
            weight = np.sum(np.abs(sent) ** 2, axis=1)
            angle = np.sum(sent.conj() * y, axis=1).imag / np.maximum(weight, 1e-12)
            line = np.polyfit(np.arange(periods), angle, 1, w=np.sqrt(weight))
            y = y * np.exp(-1j * np.polyval(line, np.arange(periods)))[:, None]
        channel = np.linalg.lstsq(x, y, rcond=None)[0].T
        energy = np.sum(np.abs(x) ** 2, axis=0)
        columns.append((*sums_of(y, x, channel), channel, energy))
    scores, energies, references, channels, antenna = (
        np.stack(c) for c in zip(*columns, strict=True)
    )
    return SimpleNamespace(
        count=frames, motion_scores=scores, motion_energy=energies, motion_reference=references,
        channel=channels, antenna_energy=antenna, noise=np.full(frames, noise),
        header_noise=np.full(frames, noise), header_freedom=200,
    )  # fmt: skip


def together() -> Codebook:
    """Pairs of antennas send one symbol: their columns' scores are correlated."""
    pairs = ((0, 1), (0, 2), (0, 3), (1, 2))
    points = BOOK.constellation.points
    vectors = np.zeros((16, 4), np.complex128)
    for i, pair in enumerate(pairs):
        vectors[4 * i : 4 * i + 4, pair] = points[:, None] / np.sqrt(2)
    return replace(BOOK, vectors=vectors, antenna_sets=pairs)


@pytest.mark.parametrize("book", [BOOK, together()], ids=["one active", "pairs active"])
def test_statistics_of_a_frame_that_stands_still_are_chi_square(book):
    """400 frames against the laws stated, Kolmogorov-Smirnov at 1e-4: fails once in 10,000 seeds.

    The common phase's line has taken one or two of the channel's degrees of freedom."""
    rng = np.random.default_rng(2)
    batch = batch_of(book, 400, rng)
    statistic, freedom, fast, rest = MotionTest(book, 600).channel_statistic(batch)
    assert np.all(freedom == 2 * 2 * 3 * 4)
    assert np.all(rest == 2 * 2 * 12 * 4)
    if book is BOOK:
        assert scipy.stats.kstest(scipy.stats.chi2.sf(fast, rest), "uniform").pvalue > 1e-4
    chances = scipy.stats.chi2.sf(statistic, freedom - 1)
    assert scipy.stats.kstest(chances, "uniform").pvalue > 1e-4
    chances = scipy.stats.chi2.sf(phase_statistic(batch), 4)
    assert scipy.stats.kstest(chances, "uniform").pvalue > 1e-4


def test_small_motion_is_seen():
    """A bend of the phase of 0.1 rad, 20 dB of noise below: seen in every frame."""
    rng = np.random.default_rng(3)

    def bent(clean):
        place = np.linspace(-1, 1, len(clean))
        return clean * np.exp(0.1j * place**2)[:, None]

    batch = batch_of(BOOK, 20, rng, noise=0.01, moved=bent)
    assert np.all(MotionTest(BOOK, 600)(batch))


@pytest.mark.parametrize("bandwidth", [2e-5, 5e-4, 4e-3])
def test_slow_basis_has_the_stated_autocorrelation(bandwidth):
    basis = slow_basis(bandwidth, 300, 2)
    made = basis.values @ basis.values.T
    lag = 2 * (np.arange(300)[:, None] - np.arange(300))
    np.testing.assert_allclose(made, np.sinc(2 * bandwidth * lag), atol=3e-5)
    assert longest_block(bandwidth) * bandwidth <= 2.4e-3 or longest_block(bandwidth) == 1


def test_slow_basis_of_no_bandwidth_is_constant():
    np.testing.assert_array_equal(slow_basis(0.0, 5, 16).values, np.ones((5, 1)))


def test_smoothed_phase_is_the_posterior_mean():
    """Against dense Gaussian algebra; evidence up to a constant that all walks share."""
    rng = np.random.default_rng(4)
    distance = rng.integers(1, 4, 59).astype(float)
    precision = rng.uniform(0, 5, 60)
    observed = rng.standard_normal(60)
    evidence = []
    for walk in (0.01, 0.3):
        place = np.concatenate([[0.0], np.cumsum(distance)])
        prior = walk * np.minimum.outer(place, place) + 1e6  # a first value of variance 1e6
        noise = np.diag(1 / np.maximum(precision, 1e-12))
        mean = prior @ np.linalg.solve(prior + noise, observed)
        found = smooth_walk(observed, precision, distance, walk)
        np.testing.assert_allclose(found.mean, mean, atol=2e-4)
        law = scipy.stats.multivariate_normal(np.zeros(60), prior + noise)
        evidence.append((found.evidence, float(law.logpdf(observed))))
    (one, law_one), (other, law_other) = evidence
    assert one - other == pytest.approx(law_one - law_other, abs=1e-3)


def test_freedom_of_a_smoothed_walk_is_that_of_the_steady_state():
    """Posterior variance 1/sqrt(p^2 + 4p/q) of a long walk: the trace of the smoother."""
    precision, walk, n = np.full(2000, 50.0), 6e-4, 2000
    found = smooth_walk(np.zeros(n), precision, np.ones(n - 1), walk)
    inverse = np.zeros((n, n))
    inner = 1 / walk
    np.fill_diagonal(inverse, 50.0 + 2 * inner)
    inverse[0, 0] = inverse[-1, -1] = 50.0 + inner
    inverse[np.arange(n - 1), np.arange(1, n)] = inverse[np.arange(1, n), np.arange(n - 1)] = -inner
    trace = 50.0 * np.trace(np.linalg.inv(inverse))
    assert found.freedom == pytest.approx(trace, rel=0.02)


def moments_of(x, y, blocks, length):
    block = np.arange(len(x)) // length
    gram = np.zeros((blocks, 4, 4), complex)
    cross = np.zeros((blocks, y.shape[1], 4), complex)
    np.add.at(gram, block, x.conj()[:, :, None] * x[:, None, :])
    np.add.at(cross, block, y[:, :, None] * x.conj()[:, None, :])
    return Moments(gram, cross, float(np.sum(np.abs(y) ** 2)), len(x))


def test_smoothed_channel_is_the_linear_minimum_mean_square_error_estimate():
    """Against dense algebra over all symbols, the channel constant in each block."""
    rng = np.random.default_rng(5)
    basis = slow_basis(2e-3, 40, 4)
    x = BOOK.vectors[rng.integers(0, BOOK.size, 160)]
    y = complex_noise(rng, (160, 2), 1.0)
    noise, power = 0.1, 0.7
    found = smooth_channel(moments_of(x, y, 40, 4), basis, noise, power)
    rows = np.sqrt(power) * np.repeat(basis.values, 4, axis=0)
    design = (x[:, :, None] * rows[:, None, :]).reshape(160, -1)
    covariance = design @ design.conj().T + noise * np.eye(160)
    for r in range(2):
        coefficients = design.conj().T @ np.linalg.solve(covariance, y[:, r])
        expected = np.sqrt(power) * basis.values @ coefficients.reshape(4, -1).T
        np.testing.assert_allclose(found.channels[:, r], expected, atol=1e-9)
    law = -2 * np.linalg.slogdet(covariance)[1]
    law -= np.sum(y.conj() * np.linalg.solve(covariance, y)).real
    constant = -2 * 160 * np.log(noise) - np.sum(np.abs(y) ** 2) / noise
    assert found.evidence == pytest.approx(law - constant, rel=1e-9)
    left = y - np.einsum("kra,ka->kr", np.repeat(found.channels, 4, axis=0), x)
    assert found.error == pytest.approx(np.sum(np.abs(left) ** 2), rel=1e-9)


@pytest.mark.nojit
def test_posterior_of_a_frame_is_bayes_rule_word_by_word():
    sections = SYNC + IN_TURN + payload_section(128, "power_db = 3.0")
    tables = link_tables(make_link(antennas=2, sections=sections))
    rng = np.random.default_rng(6)
    blocks = frame_blocks(tables, 8)
    channels = np.stack([rayleigh(rng, 2, 2) for _ in range(blocks.count)])
    y = complex_noise(rng, (tables.active.size, 2), 1.0)
    every = np.arange(tables.active.size)
    found = posterior(y, every, blocks, channels, 0.4, tables)
    vectors = tables.codebook.vectors
    gram = np.zeros((blocks.count, 2, 2), complex)
    for i in every:
        if tables.active_word[i] < 0:
            mean = tables.known_vectors[i].astype(complex)
            square = np.outer(mean.conj(), mean)
        else:
            a = float(tables.active_amplitude[i])
            distance = np.sum(np.abs(y[i] - a * vectors @ channels[blocks.block[i]].T) ** 2, axis=1)
            p = np.exp(-(distance - distance.min()) / 0.4)
            p /= p.sum()
            mean = a * p @ vectors
            square = a * a * np.einsum("c,ca,cb->ab", p, vectors.conj(), vectors)
        np.testing.assert_allclose(found.mean[i], mean, atol=2e-5)
        gram[blocks.block[i]] += square
    np.testing.assert_allclose(found.gram, gram, atol=2e-4)
    part = every[30:75]
    some = posterior(
        y[part], part, blocks, channels[blocks.block[30] : blocks.block[74] + 1], 0.4, tables
    )
    np.testing.assert_allclose(some.mean, found.mean[part], atol=1e-6)
    summed = moments(y, found, every, blocks)
    assert summed.energy == pytest.approx(np.sum(np.abs(y) ** 2))
    inside = blocks.block == 3
    expected = y[inside].T @ found.mean[inside].conj()
    np.testing.assert_allclose(summed.cross[3], expected, atol=1e-9)


@pytest.mark.nojit
def test_moving_channel_in_runs():
    rng = np.random.default_rng(7)
    channels = np.stack([rayleigh(rng, 2, 3) for _ in range(4)])
    block = np.array([1, 1, 2, 2, 2, 3])
    moving = MovingChannel(channels, block, Following.FOLLOWED, 1e-3, 0.0)
    runs = list(moving.runs())
    assert [(r.start, r.stop) for r, _ in runs] == [(0, 2), (2, 5), (5, 6)]
    for (_, channel), b in zip(runs, (1, 2, 3), strict=True):
        np.testing.assert_array_equal(channel, channels[b])
    matrix = rayleigh(rng, 2, 2)
    np.testing.assert_allclose(moving.through(matrix).channels[2], matrix @ channels[2])
    assert len(moving.instants(16)) == 3
