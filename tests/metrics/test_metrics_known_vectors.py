"""Bounds of carrier and timing from known vectors sent through an unknown flat channel."""

from __future__ import annotations

import numpy as np
import pytest

from spatiq.metrics import estimator_bounds as bounds

pytestmark = pytest.mark.nojit


def test_one_antenna_without_a_pause_is_a_tone():
    """Known symbols taken off, what is left is a tone: Rife and Boorstyn 1974; power of the symbols
    and of the channels adds."""
    rng = np.random.default_rng(1)
    symbols = np.exp(2j * np.pi * rng.random((64, 1)))
    got = bounds.known_vectors_offset(symbols, [[0.6], [0.8j]], 0.1)
    assert got / (4 * np.pi**2) == pytest.approx(2.408124e-4**2, rel=1e-6)  # N = 64, 10 dB


def test_antennas_in_turn_add_their_information():
    """Each has a phase of its own: the sum of the antennas' information."""
    vectors = np.zeros((40, 2), np.complex128)
    vectors[:25, 0], vectors[25:, 1] = 1.0, 1.0
    channel = np.array([[1.0, 2.0]])
    each = [bounds.tone_frequency(n, a**2 / 0.2) * 4 * np.pi**2 for n, a in ((25, 1.0), (15, 2.0))]
    want = 1 / np.sum(1 / np.array(each))
    assert bounds.known_vectors_offset(vectors, channel, 0.2) == pytest.approx(want, rel=1e-9)


def test_inverse_of_the_fisher_information():
    """All real unknowns together: carrier, real and imaginary parts of the channel."""
    rng = np.random.default_rng(2)
    x = (rng.standard_normal((20, 3)) + 1j * rng.standard_normal((20, 3))) * (
        rng.random((20, 3)) < 0.5
    )
    h = rng.standard_normal((2, 3)) + 1j * rng.standard_normal((2, 3))
    k = np.arange(20.0)
    columns = [(1j * k[:, None] * (x @ h.T)).ravel()]
    for r in range(2):
        for a in range(3):
            part = np.zeros((20, 2), np.complex128)
            part[:, r] = x[:, a]
            columns += [part.ravel(), 1j * part.ravel()]
    jacobian = np.array(columns)
    fisher = 2 / 0.3 * (jacobian.conj() @ jacobian.T).real
    want = np.linalg.inv(fisher)[0, 0]
    assert bounds.known_vectors_offset(x, h, 0.3) == pytest.approx(want, rel=1e-9)


def test_timing_of_known_vectors_is_the_modified_bound():
    vectors = np.eye(2)[np.arange(100) % 2]
    channel = np.array([[1.0, 1.0j], [1.0, -1.0]])  # unit gains: Es/N0 = 2 / 0.2 in two channels
    want = 1.211482e-2**2  # L = 100, 10 dB, roll-off 0.25 (Mengali and D'Andrea 1997, from memory)
    assert bounds.known_vectors_timing(vectors, channel, 0.2, 0.25) == pytest.approx(want, rel=1e-6)
