"""Words over i.i.d. Rayleigh channels, decided by the package's detectors: bit error ratios."""

from __future__ import annotations

import numpy as np

from spatiq.receiver.detection import maximum_likelihood


def normal(rng, *shape):
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)


def wrong_bits(book, h, noise, words, rng, detector=maximum_likelihood):
    """bool (F, words * b): which bits are wrong, of random words on each of the channels h."""
    frames = len(h)
    sent = rng.integers(0, book.size, (frames, words))
    y = book.vectors[book.carried(sent)] @ h.transpose(0, 2, 1)
    y = (y + np.sqrt(noise) * normal(rng, *y.shape)).astype(np.complex64)
    decided = np.array([detector(a, b, noise, book) for a, b in zip(y, h, strict=True)])
    return book.words_to_bits(decided) != book.words_to_bits(sent)


def error_ratio(book, receivers, snr_db, channels, words, seed, detector=maximum_likelihood):
    """Bit error ratio, and its standard error from the spread between channels.

    `words` words on each of `channels` channels; SNR is rho = 1/N0 for words of unit mean power.
    """
    rng = np.random.default_rng(seed)
    h = normal(rng, channels, receivers, book.antennas)
    each = wrong_bits(book, h, 10 ** (-snr_db / 10), words, rng, detector).mean(axis=1)
    return each.mean(), each.std() / np.sqrt(channels)
