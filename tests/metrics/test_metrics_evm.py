"""EVM: definition by loops, pooling, closed forms of noise and of impairments."""

import numpy as np
import pytest
from books import complex_normal, gsm_4_2, qsm, sm, ssk
from plain_evm import (
    EvmSums,
    equalised_evm,
    equalised_symbols,
    evm_db,
    evm_ratio,
    received_evm,
)

from spatiq.errors import InputError
from spatiq.metrics import evm_theory
from spatiq.metrics.measuring_kernels import error_vectors
from spatiq.receiver.link_tables import sparse_vectors
from spatiq.signal.codebooks import spatial_modulation
from spatiq.signal.constellations import explicit, named

pytestmark = pytest.mark.nojit
BOOKS = [sm(4, "QPSK"), sm(2, "16QAM"), ssk(4), gsm_4_2("QPSK"), qsm(2, "QPSK")]
NAMES = ["sm4qpsk", "sm2qam", "ssk4", "gsm", "qsm"]


def link(book, frames=3, periods=40, receivers=2, noise=0.1, seed=1):
    rng = np.random.default_rng(seed)
    h = complex_normal(rng, frames, receivers, book.antennas)
    words = rng.integers(0, book.size, (frames, periods))
    y = book.vectors[words] @ h.swapaxes(1, 2)
    return y + np.sqrt(noise) * complex_normal(rng, *y.shape), h, words


@pytest.mark.parametrize("book", BOOKS, ids=NAMES)
def test_sums_by_the_definition(book):
    y, h, words = link(book)
    found, equalised = received_evm(y, h, book, words), equalised_evm(y, h, book, words)
    z = equalised_symbols(y, h, book, words)
    mean_power = np.mean(np.abs(book.constellation.points) ** 2)
    shape = (3, len(book.antenna_sets))
    sums = {name: np.zeros(shape) for name in ("e", "r", "ze", "zr")}
    for f in range(3):
        for k in range(words.shape[1]):
            word = words[f, k]
            place = f, book.set_index[word]
            x, s = book.vectors[word], book.constellation.points[book.symbol_index[word]]
            g = h[f] @ (x / s)
            expected = np.vdot(g, y[f, k]) / np.vdot(g, g)
            assert z[f, k] == pytest.approx(expected, rel=1e-10)
            sums["e"][place] += np.linalg.norm(y[f, k] - h[f] @ x) ** 2
            sums["r"][place] += np.linalg.norm(h[f] @ x) ** 2
            sums["ze"][place] += abs(expected - s) ** 2
            sums["zr"][place] += mean_power
    np.testing.assert_allclose(found.error, sums["e"], rtol=1e-10)
    np.testing.assert_allclose(found.reference, sums["r"], rtol=1e-10)
    np.testing.assert_allclose(equalised.error, sums["ze"], rtol=1e-10)
    np.testing.assert_allclose(equalised.reference, sums["zr"], rtol=1e-10)


def test_single_antenna_combiner_is_that_of_the_column():
    """z = h_a^H y / ||h_a||^2, whatever the symbol."""
    book = sm(2, "16QAM")
    y, h, words = link(book)
    z = equalised_symbols(y, h, book, words)
    column = h[1][:, book.set_index[words[1, 5]]]
    expected = np.vdot(column, y[1, 5]) / np.linalg.norm(column) ** 2
    assert z[1, 5] == pytest.approx(expected, rel=1e-12)


def test_pooling_by_adding():
    book = BOOKS[0]
    y, h, words = link(book)
    whole = received_evm(y, h, book, words)
    first = received_evm(y[:, :15], h, book, words[:, :15])
    both = first + received_evm(y[:, 15:], h, book, words[:, 15:])
    np.testing.assert_allclose(both.error, whole.error, rtol=1e-12)
    assert both.overall == pytest.approx(whole.overall, rel=1e-12)
    assert whole.per_frame.shape == (3,)
    assert whole.per_set.shape == (4,)
    one = received_evm(y[:1], h[:1], book, words[:1])
    assert one.overall == pytest.approx(whole.per_frame[0], rel=1e-12)


def test_known_data_evm_is_one_over_root_snr():
    """20 dB: 10 %. Relative std of EVM^2 is 1/sqrt(N Nr): 4 sigmas of half that."""
    book = sm(4, "QPSK")
    rng = np.random.default_rng(2)
    periods = 20_000
    h = np.exp(2j * np.pi * rng.random((1, 2, 4)))
    words = rng.integers(0, book.size, (1, periods))
    y = book.vectors[words] @ h.swapaxes(1, 2) + 0.1 * complex_normal(rng, 1, periods, 2)
    tolerance = 4 * 0.5 / np.sqrt(2 * periods)
    assert received_evm(y, h, book, words).overall == pytest.approx(0.1, rel=tolerance)
    # Combining two antennas of equal power gains 3 dB.
    combined = equalised_evm(y, h, book, words).overall
    assert combined == pytest.approx(0.1 / np.sqrt(2), rel=tolerance * np.sqrt(2))


def test_decided_symbols_are_optimistic_as_in_theory():
    """Trap: 16QAM at 10 dB decided against itself, Mahmoud & Arslan 2009. 4 sigmas: 0.5/sqrt(N)."""
    book = sm(1, "16QAM")
    rng = np.random.default_rng(3)
    periods, snr = 50_000, 10.0
    words = rng.integers(0, 16, (1, periods))
    y = book.vectors[words] + complex_normal(rng, 1, periods, 1) / np.sqrt(snr)
    h = np.ones((1, 1, 1))
    decided = np.abs(y - book.vectors[:, 0]).argmin(axis=2)
    tolerance = 4 * 0.5 / np.sqrt(periods)
    for evm in (received_evm(y, h, book, decided), equalised_evm(y, h, book, decided)):
        reference = np.sqrt(evm.reference.sum() / periods)  # decided points have another mean power
        expected = float(evm_theory.decision_directed_evm(16, snr)) / reference
        assert evm.overall == pytest.approx(expected, rel=1.5 * tolerance)
        assert evm.overall < 0.95 * evm_theory.data_aided_evm(snr)


def test_image_of_an_imbalance():
    """0.5 dB and 2 degrees, uncorrected: 3.3655 % (common formula). 2 %: gain is not refitted."""
    book = sm(1, "16QAM")
    words = np.arange(16)[None, :]
    x = book.vectors[words]
    g, p = 10 ** (0.5 / 20), np.deg2rad(2.0)
    direct, image = (1 + g * np.exp(1j * p)) / 2, (1 - g * np.exp(1j * p)) / 2
    y = x + np.conj(image / direct) * x.conj()
    found = equalised_evm(y, np.ones((1, 1, 1)), book, words).overall
    assert 100 * found == pytest.approx(3.3655, rel=0.02)


def test_missing_and_zero():
    assert np.isnan(evm_ratio(0.0, 0.0))
    assert np.isnan(evm_ratio(1.0, 0.0))
    assert evm_ratio(1.0, 4.0) == 0.5
    assert evm_db(0.1) == pytest.approx(-20.0)
    assert evm_db(0.0) == -np.inf
    assert np.isnan(EvmSums(np.zeros((1, 2)), np.zeros((1, 2))).overall)
    book = sm(2, "BPSK")
    y, h, _ = link(book)
    h[:, :, 1] = 0.0
    words = np.tile([0, 2], (3, 20))
    z = equalised_symbols(y, h, book, words)
    assert np.isfinite(z[:, ::2]).all()
    assert np.isnan(z[:, 1::2]).all()
    sums = equalised_evm(y, h, book, words)
    np.testing.assert_array_equal(sums.reference, [[20.0, 0.0]] * 3)
    assert np.isnan(sums.per_set[1])


def test_a_constellation_with_a_point_at_zero():
    """On-off keying: the zero symbol is combined with the column of its antenna."""
    points = explicit([0.0, 1.0], ["0", "1"], normalise=False)
    book = spatial_modulation(2, points, [1], [])
    y, h, words = link(book, noise=0.0)
    found = equalised_evm(y, h, book, words)
    assert found.overall == pytest.approx(0.0, abs=1e-12)
    np.testing.assert_allclose(found.reference.sum(), 0.5 * words.size)


@pytest.mark.parametrize(
    ("y", "h", "words", "match"),
    [
        ((3, 40), (3, 2, 4), np.zeros((3, 40), int), r"y: found shape \(3, 40\)"),
        ((3, 40, 2), (3, 4, 2), np.zeros((3, 40), int), r"H: found shape \(3, 4, 2\)"),
        ((3, 40, 2), (3, 2, 4), np.zeros((3, 39), int), r"words: found shape \(3, 39\)"),
        ((3, 40, 2), (3, 2, 4), np.full((3, 40), 16), r"words: found 16\.\.16; expected 0\.\.15"),
        ((3, 40, 2), (3, 2, 4), np.full((3, 40), -1), r"words: found -1\.\.-1"),
    ],
)
def test_refuses_what_does_not_fit(y, h, words, match):
    with pytest.raises(InputError, match=match):
        received_evm(np.ones(y, complex), np.ones(h, complex), sm(4, "QPSK"), words)


def test_qam_reference_is_the_mean_power():
    """Inner points are judged by the constellation's mean power, not by their own."""
    book = sm(1, "16QAM")
    inner = int(np.abs(named("16QAM").points).argmin())
    words = np.full((1, 10), inner)
    y = book.vectors[words] + 0.1
    assert equalised_evm(y, np.ones((1, 1, 1)), book, words).overall == pytest.approx(0.1)
    assert received_evm(y, np.ones((1, 1, 1)), book, words).overall == pytest.approx(0.1 / 0.2**0.5)


@pytest.mark.parametrize("book", [sm(4, "QPSK"), sm(2, "16QAM"), ssk(4)])
def test_the_kernel_adds_the_same_sums(book):
    """error_vectors, per antenna, against the plain sums per antenna set (one antenna each)."""
    y, h, words = link(book, frames=2, periods=50)
    plain, projected = received_evm(y, h, book, words), equalised_evm(y, h, book, words)
    sparse = sparse_vectors(book.vectors)
    antennas = [s[0] for s in book.antenna_sets]
    for f in range(2):
        sums = np.empty((6, book.antennas))
        error_vectors(y[f].astype(np.complex64), h[f], words[f], *sparse.parts, sums)
        np.testing.assert_allclose(sums[0, antennas], plain.error[f], rtol=1e-4)
        np.testing.assert_allclose(sums[1, antennas], plain.reference[f], rtol=1e-5)
        np.testing.assert_allclose(sums[2, antennas], projected.error[f], rtol=1e-4)
        power = np.mean(np.abs(book.constellation.points) ** 2)
        np.testing.assert_allclose(power * sums[3, antennas], projected.reference[f], rtol=1e-6)
