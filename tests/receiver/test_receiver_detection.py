"""Detectors: a contract that all entries keep, exhaustive oracles, closed forms, plug-ins."""

from __future__ import annotations

import sys
from math import comb
from types import ModuleType, SimpleNamespace

import numpy as np
import pytest
from receiver_cases import complex_noise, make_link, rayleigh

from spatiq.errors import InputError
from spatiq.receiver.detection import (
    DETECTORS,
    Detection,
    find_detector,
    maximum_likelihood,
    two_step,
)
from spatiq.signal.codebooks import Codebook, space_shift_keying, spatial_modulation
from spatiq.signal.constellations import named


def sm(antennas, points):
    bits = antennas.bit_length() - 1
    return spatial_modulation(antennas, named(points), range(antennas), range(bits))


def pairs_codebook():
    """Two of three antennas active, the same QPSK symbol on both: not made by a scheme."""
    sets = ((0, 1), (1, 2))
    points = named("QPSK")
    vectors = np.zeros((8, 3), complex)
    for i, active in enumerate(sets):
        vectors[4 * i : 4 * i + 4, list(active)] = points.points[:, None] / np.sqrt(2)
    index, label = np.divmod(np.arange(8), 4)
    spatial = np.array([True, False, False])
    return Codebook("pairs", vectors, sets, index, label, spatial, points)


BOOKS = {
    "2 QPSK": sm(2, "QPSK"),
    "4 BPSK": sm(4, "BPSK"),
    "8 16QAM": sm(8, "16QAM"),
    "4 SSK": space_shift_keying(4, [2, 0, 3, 1], range(2)),
    "one antenna": sm(1, "QPSK"),
    "pairs": pairs_codebook(),
}


def case(book, receive, noise, count, seed):
    rng = np.random.default_rng(seed)
    channel = rayleigh(rng, receive, book.antennas)
    sent = rng.integers(0, book.size, count)
    y = book.vectors[sent] @ channel.T + complex_noise(rng, (count, receive), noise)
    return sent, y.astype(np.complex64), channel


@pytest.mark.nojit
@pytest.mark.parametrize("detector", sorted(DETECTORS))
@pytest.mark.parametrize("name", [n for n in BOOKS if n != "pairs"])
@pytest.mark.parametrize("receive", [1, 2, 4])
def test_every_detector_keeps_the_contract(detector, name, receive):
    """Words of type int64, in range, without error when there is no noise, K from 0 up."""
    book = BOOKS[name]
    sent, y, channel = case(book, receive, 0.0, 130, 1)
    if detector == "two-step" and receive == 1 and book.antennas > 1:
        channel = channel.copy()  # one receive antenna cannot tell columns by projection
        words = two_step(y, channel, 0.1, book)
    else:
        words = DETECTORS[detector](y, channel, 0.1, book)
        np.testing.assert_array_equal(words, sent)
    assert words.dtype == np.int64 and words.min() >= 0 and words.max() < book.size
    assert DETECTORS[detector](y[:0], channel, 0.1, book).shape == (0,)


@pytest.mark.nojit
@pytest.mark.parametrize("name", sorted(BOOKS))
@pytest.mark.parametrize("receive", [1, 2, 3])
def test_maximum_likelihood_is_the_exhaustive_search(name, receive):
    book = BOOKS[name]
    _, y, channel = case(book, receive, 0.5, 700, 2)
    words = maximum_likelihood(y, channel, 0.5, book)
    distance = np.sum(np.abs(y[:, None] - (channel @ book.vectors.T).T) ** 2, axis=2)
    taken = np.take_along_axis(distance, words[:, None], axis=1)[:, 0]
    # Single precision may take the other of two that are equal to 1e-5 of the largest terms.
    assert np.all(taken <= distance.min(axis=1) + 1e-5 * (1 + distance.max(axis=1)))
    assert np.mean(words == distance.argmin(axis=1)) > 0.995


@pytest.mark.nojit
@pytest.mark.parametrize("name", ["2 QPSK", "4 BPSK", "8 16QAM", "4 SSK"])
def test_two_step_is_projection_then_slicing(name):
    book = BOOKS[name]
    _, y, channel = case(book, 3, 0.3, 500, 3)
    words = two_step(y, channel, 0.3, book)
    score = np.abs(y.conj() @ channel) / np.linalg.norm(channel, axis=0)
    antennas = np.array([s[0] for s in book.antenna_sets])
    chosen = np.argmax(score[:, antennas], axis=1)
    agree = 0
    for k in range(500):
        members = np.flatnonzero(book.set_index == chosen[k])
        candidates = book.vectors[members] @ channel.T
        best = members[np.argmin(np.sum(np.abs(y[k] - candidates) ** 2, axis=1))]
        agree += words[k] == best
    assert agree >= 498  # near ties in single precision


def orthonormal(rng, receive, transmit):
    return np.linalg.qr(complex_noise(rng, (receive, transmit), 1.0))[0]


@pytest.mark.parametrize(
    ("antennas", "rho_db", "value"),
    [(2, 8, 2.132375e-2), (2, 10, 3.368973e-3), (4, 8, 5.127288e-2), (4, 10, 8.972558e-3)],
)
def test_two_step_antenna_errors_with_orthonormal_columns(antennas, rho_db, value):
    """Non-coherent M-ary orthogonal signalling (Proakis, Digital Communications; from memory).

    200,000 symbols, 4.5 binomial standard deviations: false failure 7e-6 each.
    """
    rho, count = 10 ** (rho_db / 10), 200_000
    terms = [
        (-1) ** (k + 1) * comb(antennas - 1, k) / (k + 1) * np.exp(-k * rho / (k + 1))
        for k in range(1, antennas)
    ]
    assert sum(terms) == pytest.approx(value, rel=1e-6)
    rng, book = np.random.default_rng(antennas * rho_db), sm(antennas, "QPSK")
    channel = orthonormal(rng, 4, antennas)
    sent = rng.integers(0, book.size, count)
    y = book.vectors[sent] @ channel.T + complex_noise(rng, (count, 4), 1 / rho)
    words = two_step(y.astype(np.complex64), channel, 1 / rho, book)
    rate = np.mean(book.set_index[words] != book.set_index[sent])
    assert abs(rate - value) < 4.5 * np.sqrt(value * (1 - value) / count)


@pytest.mark.parametrize(
    ("antennas", "rho_db", "value"),
    [(2, 8, 6.004386e-3), (2, 10, 7.827011e-4), (4, 8, 1.625790e-2), (4, 10, 2.238165e-3)],
)
def test_maximum_likelihood_of_space_shift_keying_with_orthonormal_columns(antennas, rho_db, value):
    """Coherent M-ary orthogonal signalling, symbol errors (Proakis, ch. 4; from memory).

    400,000 symbols, 4.5 binomial standard deviations: false failure 7e-6 each.
    """
    rho, count = 10 ** (rho_db / 10), 400_000
    rng = np.random.default_rng(antennas * rho_db + 1)
    book = space_shift_keying(antennas, range(antennas), range(antennas.bit_length() - 1))
    channel = orthonormal(rng, 4, antennas)
    sent = rng.integers(0, antennas, count)
    y = book.vectors[sent] @ channel.T + complex_noise(rng, (count, 4), 1 / rho)
    rate = np.mean(maximum_likelihood(y.astype(np.complex64), channel, 1 / rho, book) != sent)
    assert abs(rate - value) < 4.5 * np.sqrt(value * (1 - value) / count)


def test_gap_between_maximum_likelihood_and_two_step():
    """About 4 dB (Jeganathan, Ghrayeb, Szczecinski 2008, abstract): 3 to 5 dB at 1e-3, 4 x 4 BPSK.

    3000 channels x 100 symbols x 3 bits. The spread between channels is taken from the channels
    themselves: 4 standard deviations of the mean, false failure below 1e-4.
    """
    book = sm(4, "BPSK")

    def ratios(detector, rho_db):
        rng = np.random.default_rng(4)
        noise = 10 ** (-rho_db / 10)
        each = np.empty(3000)
        for i in range(3000):
            channel = rayleigh(rng, 4, 4)
            sent = rng.integers(0, 8, 100)
            y = book.vectors[sent] @ channel.T + complex_noise(rng, (100, 4), noise)
            words = detector(y.astype(np.complex64), channel, noise, book)
            each[i] = np.mean(book.words_to_bits(words) != book.words_to_bits(sent))
        return each.mean(), each.std() / np.sqrt(3000)

    # Union bound 1e-3 at 8.865 dB; the true ratio lies at most 10 % below where it is that low.
    ratio, spread = ratios(maximum_likelihood, 8.865)
    assert 0.9e-3 - 4 * spread < ratio < 1e-3 + 4 * spread
    ratio, spread = ratios(two_step, 8.865 + 3)
    assert ratio - 4 * spread > 1e-3
    ratio, spread = ratios(two_step, 8.865 + 5)
    assert ratio + 4 * spread < 1e-3


@pytest.mark.nojit
def test_two_step_refuses_more_than_one_active_antenna():
    _, y, channel = case(BOOKS["pairs"], 2, 0.1, 3, 5)
    with pytest.raises(InputError, match="one active antenna"):
        two_step(y, channel, 0.1, BOOKS["pairs"])


def batch_of(book, receive=2, count=20):
    _, y, channel = case(book, receive, 0.1, count, 6)
    return SimpleNamespace(
        moving=[],
        matched={},
        count=1,
        symbols=y[None],
        channel=channel[None],
        noise=np.array([0.1]),
        words=np.zeros((1, count), np.int64),
        words_two_step=None,
    )


@pytest.fixture
def plugged():
    """A module of one's own with detectors in it."""
    module = ModuleType("own_detectors_of_a_bench")
    module.nearest = lambda y, channel, noise, book: maximum_likelihood(y, channel, noise, book)
    module.short = lambda y, channel, noise, book: np.zeros(3, np.int64)
    module.floats = lambda y, channel, noise, book: np.zeros(y.shape[0])
    module.beyond = lambda y, channel, noise, book: np.full(y.shape[0], book.size)
    module.number = 5
    sys.modules[module.__name__] = module
    yield module.__name__
    del sys.modules[module.__name__]


@pytest.mark.nojit
def test_a_detector_of_ones_own(plugged):
    book = BOOKS["2 QPSK"]
    expected = Detection(book, maximum_likelihood, True)(batch_of(book))
    got = Detection(book, find_detector(f"{plugged}:nearest"), False)(batch_of(book))
    np.testing.assert_array_equal(got.words, expected.words)
    assert got.words_two_step is None and expected.words_two_step is not None


@pytest.mark.nojit
@pytest.mark.parametrize("name", ["short", "floats", "beyond"])
def test_what_a_detector_must_not_return(plugged, name):
    book = BOOKS["2 QPSK"]
    with pytest.raises(InputError, match=r"integer words 0\.\.7 of shape \(20,\)"):
        Detection(book, find_detector(f"{plugged}:{name}"), False)(batch_of(book))


@pytest.mark.nojit
@pytest.mark.parametrize(
    "name",
    ["nearest", "no_such_module_anywhere:f", "{own}:absent", "{own}:number", ":f", "math:", ".a:f"],
)
def test_unknown_detectors_are_refused(plugged, name):
    with pytest.raises(InputError, match="detector"):
        find_detector(name.format(own=plugged))


@pytest.mark.nojit
def test_no_comparison_where_the_two_step_detector_does_not_apply():
    book = BOOKS["pairs"]
    done = Detection(book, maximum_likelihood, True)(batch_of(book))
    assert done.words_two_step is None


@pytest.mark.nojit
def test_the_link_names_its_own_words():
    link = make_link(antennas=4)
    sent, y, channel = case(link.codebook, 2, 0.0, 64, 7)
    np.testing.assert_array_equal(maximum_likelihood(y, channel, 0.0, link.codebook), sent)
