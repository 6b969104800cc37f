"""Kernels of the prediction against plain NumPy oracles in double precision."""

import numpy as np
import pytest
from books import bit_weights, complex_normal, gsm_4_2, qsm, sm, ssk
from scipy.special import erfc
from scipy.stats import norm

from spatiq.metrics import gaussian_tables
from spatiq.metrics import prediction_kernels as kernels

BOOKS = [sm(4, "QPSK"), sm(2, "BPSK"), ssk(4), sm(1, "16QAM"), gsm_4_2("QPSK"), qsm(2, "QPSK")]
NAMES = ["sm4qpsk", "sm2bpsk", "ssk4", "qam16", "gsm", "qsm"]


def tables(book, h, deviation):
    """Arguments that the kernels share, as the prediction prepares them."""
    points = (h @ book.vectors.T).astype(np.complex64)
    scaled = (deviation[:, None] * book.vectors.T).astype(np.complex64)
    parts = [np.ascontiguousarray(p) for p in (points.real, points.imag, scaled.real, scaled.imag)]
    weights = np.stack(bit_weights(book)).astype(np.float32)
    return points, *parts, np.arange(book.size), weights, book.set_index


def union_oracle(book, points, deviation, receivers):
    """Sums over ordered pairs, straight from the formula in the module `prediction`."""
    spatial, signal = bit_weights(book)
    sums = np.zeros(4)
    shares = np.zeros((len(book.antenna_sets),) * 2)
    x = book.vectors * deviation
    for c in range(book.size):
        for d in range(book.size):
            if c == d:
                continue
            z2 = np.sum(np.abs(points[:, c] - points[:, d]) ** 2) / 2
            v = np.sum(np.real(x[c].conj() * x[d]))
            k = np.sum(np.abs(x[c] - x[d]) ** 2) / 2
            s = v + (2 * receivers - 1) * k / z2
            plain = 0.5 * erfc(np.sqrt(z2 / 2))
            corrected = 0.5 * erfc(np.sqrt(z2 * np.exp(-s) / 2))
            slope = 0.5 * np.sqrt(z2) * norm.pdf(np.sqrt(z2))
            both = spatial[c ^ d] + signal[c ^ d]
            sums += [
                spatial[c ^ d] * corrected,
                signal[c ^ d] * corrected,
                both * plain,
                both * slope,
            ]
            shares[book.set_index[c], book.set_index[d]] += corrected
    return sums, shares


@pytest.mark.nojit
@pytest.mark.parametrize("book", BOOKS, ids=NAMES)
@pytest.mark.parametrize("snr_db", [-5.0, 8.0, 18.0])
def test_union_bound_pairs(book, snr_db):
    """Tolerance: the tables' 2e-4, doubled by single precision; 1e-7 of the whole is skipped."""
    rng = np.random.default_rng(1)
    h = complex_normal(rng, 3, book.antennas) * 10 ** (snr_db / 20)
    for deviation in (np.zeros(book.antennas), np.linspace(0.1, 0.3, book.antennas)):
        points, gr, gi, wr, wi, rows, weights, sets = tables(book, h, deviation)
        if not deviation.any():
            wr, wi = wr[:0], wi[:0]
        sums = np.full(4, np.nan)
        shares = np.full((len(book.antenna_sets),) * 2, np.nan)
        kernels.union_bound_pairs(gr, gi, wr, wi, rows, weights, sets, sums, shares)
        expected, expected_shares = union_oracle(book, points, deviation, 3)
        np.testing.assert_allclose(sums, expected, rtol=5e-4, atol=1e-7 * expected[2])
        big = expected_shares > 1e-6 * expected_shares.max()
        np.testing.assert_allclose(shares[big], expected_shares[big], rtol=5e-4)


def test_a_subset_of_rows_sums_to_the_whole():
    """The two loops, over half the pairs and over all pairs of some rows, agree."""
    rng = np.random.default_rng(2)
    book = sm(4, "QPSK")
    h = complex_normal(rng, 2, 4) * 3
    _, gr, gi, wr, wi, rows, weights, sets = tables(book, h, np.full(4, 0.2))
    parts = np.zeros(4)
    shares = np.zeros((4, 4))
    for some in (rows[:5], rows[5:]):
        sums, part = np.empty(4), np.empty((4, 4))
        kernels.union_bound_pairs(gr, gi, wr, wi, some, weights, sets, sums, part)
        parts += sums
        shares += part
    whole, together = np.empty(4), np.empty((4, 4))
    kernels.union_bound_pairs(gr, gi, wr, wi, rows, weights, sets, whole, together)
    np.testing.assert_allclose(parts, whole, rtol=1e-5)
    np.testing.assert_allclose(shares, together, rtol=1e-5)


def draws_oracle(book, points, noise):
    """Posterior mean of wrong bits, of what the bound counts, and set shares; nothing skipped."""
    spatial, signal = bit_weights(book)
    words = np.arange(book.size)
    sums = np.zeros(4)
    shares = np.zeros((len(book.antenna_sets),) * 2)
    for c in range(book.size):
        for n in noise[c]:
            metric = np.sum(np.abs((points[:, c] + n)[:, None] - points) ** 2, axis=0)
            posterior = np.exp(metric.min() - metric)
            posterior /= posterior.sum()
            best = metric.argmin()
            nearer = metric[None, :] < metric[:, None]  # row = sent
            pattern = words[:, None] ^ words[None, :]
            sums[0] += posterior @ spatial[words ^ best]
            sums[1] += posterior @ signal[words ^ best]
            sums[2] += posterior @ (nearer * spatial[pattern]).sum(axis=1)
            sums[3] += posterior @ (nearer * signal[pattern]).sum(axis=1)
            for word in words[words != best]:
                shares[book.set_index[word], book.set_index[best]] += posterior[word]
    return sums, shares


@pytest.mark.nojit
@pytest.mark.parametrize("book", BOOKS, ids=NAMES)
@pytest.mark.parametrize("snr_db", [0.0, 10.0])
def test_monte_carlo(book, snr_db):
    """Tolerance: skipped words have posterior probabilities below 7e-6 each."""
    rng = np.random.default_rng(3)
    h = complex_normal(rng, 2, book.antennas) * 10 ** (snr_db / 20)
    points, gr, gi, _, _, rows, weights, sets = tables(book, h, np.zeros(book.antennas))
    noise = complex_normal(rng, book.size, 3, 2).astype(np.complex64)
    sums = np.full(4, np.nan)
    shares = np.full((len(book.antenna_sets),) * 2, np.nan)
    real, imag = np.ascontiguousarray(noise.real), np.ascontiguousarray(noise.imag)
    kernels.monte_carlo(gr, gi, rows, real, imag, weights, sets, True, sums, shares)
    expected, expected_shares = draws_oracle(book, points, noise)
    skipped = 7e-6 * book.size**2 * book.bits * noise.shape[0] * noise.shape[1]
    np.testing.assert_allclose(sums, expected, rtol=1e-3, atol=skipped)
    np.testing.assert_allclose(shares, expected_shares, rtol=1e-3, atol=skipped)


@pytest.mark.nojit
def test_effective_noise_joins_plain_and_corrected_bound():
    """Small corrections: the plain bound at the noise found equals the corrected one."""
    book = sm(4, "QPSK")
    h = complex_normal(np.random.default_rng(4), 4, 4) * 3
    points, *arguments = tables(book, h, np.full(4, 0.1))
    sums = np.empty(4)
    kernels.union_bound_pairs(*arguments, sums, np.empty((0, 0)))
    noise = kernels.effective_noise(sums)
    plain, _ = union_oracle(book, points / np.sqrt(noise), np.zeros(4), 4)
    assert noise > 1.0
    assert plain[2] == pytest.approx(sums[0] + sums[1], rel=2e-3)


def test_effective_noise_without_signal():
    assert kernels.effective_noise(np.array([1.0, 1.0, 2.0, 0.0])) == 1.0


@pytest.mark.nojit
def test_gaussian_tables():
    for z in (0.0, 0.3, 1.0, 3.33, 7.999, 8.0, 12.0, 37.0):
        assert gaussian_tables.tail(z) == pytest.approx(0.5 * erfc(z / np.sqrt(2)), rel=2e-4)
        assert gaussian_tables.density(z) == pytest.approx(norm.pdf(z), rel=2e-4)
    for t in (0.0, 0.01, 1.0, 11.99, 16.0):
        assert gaussian_tables.decay(np.float32(t)) == pytest.approx(np.exp(-t), rel=4e-5)
