"""Kernels of the soft receiver against plain NumPy: codebook, posterior, two-state filter."""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import complex_noise, make_link, rayleigh

from spatiq.receiver.link_tables import link_tables, sparse_vectors
from spatiq.receiver.soft_kernels import (
    block_metrics,
    block_posterior,
    block_scratch,
    predict,
    received_codebook,
    smooth,
    update,
)


def received(channel, words):
    """The kernel's received codebook: real, imag (Nr, C), power (C,)."""
    size = words.pointer.size - 1
    real = np.empty((channel.shape[0], size), np.float32)
    imag = np.empty_like(real)
    power = np.empty(size, np.float32)
    received_codebook(channel, *words.parts, real, imag, power)
    return real, imag, power


@pytest.mark.nojit
@pytest.mark.parametrize(("antennas", "points"), [(2, "QPSK"), (4, "16QAM"), (8, None)])
def test_received_codebook(antennas, points):
    from_link = make_link(antennas=antennas, constellation=points)
    channel = rayleigh(np.random.default_rng(1), 3, antennas)
    real, imag, power = received(channel, link_tables(from_link).words)
    exact = channel @ from_link.codebook.vectors.T
    np.testing.assert_allclose(real + 1j * imag, exact, atol=2e-6)
    np.testing.assert_allclose(power, np.sum(np.abs(exact) ** 2, axis=0), rtol=1e-6)


@pytest.mark.nojit
def test_sparse_vectors_keep_what_is_not_zero():
    rows = np.array([[0, 1j, 0], [0, 0, 0], [2, 0, -1]], complex)
    sparse = sparse_vectors(rows)
    assert sparse.pointer.tolist() == [0, 1, 1, 3]
    assert sparse.antenna.tolist() == [1, 0, 2]
    assert sparse.value.tolist() == [1j, 2, -1]


def metrics(codebook, z):
    """Metric (C, B), best, second, nearest of vectors z (Nr, B)."""
    real, imag, power = codebook
    count = z.shape[1]
    metric = np.empty((power.size, count), np.float32)
    best, second = np.empty(count, np.float32), np.empty(count, np.float32)
    nearest = np.empty(count, np.int32)
    z_real = np.ascontiguousarray(z.real.astype(np.float32))
    z_imag = np.ascontiguousarray(z.imag.astype(np.float32))
    block_metrics(real, imag, power, z_real, z_imag, count, metric, best, second, nearest)
    return metric, best, second, nearest


@pytest.mark.nojit
def test_block_metrics():
    rng = np.random.default_rng(2)
    link = make_link(antennas=4, constellation="QPSK")
    channel = rayleigh(rng, 2, 4)
    g = channel @ link.codebook.vectors.T
    z = complex_noise(rng, (2, 11), 1.0)
    metric, best, second, nearest = metrics(received(channel, link_tables(link).words), z)
    exact = np.sum(np.abs(g) ** 2, axis=0)[:, None] - 2 * (g.conj().T @ z).real
    np.testing.assert_allclose(metric, exact, atol=1e-5)
    np.testing.assert_array_equal(nearest, metric.argmin(axis=0))
    ordered = np.sort(metric, axis=0)
    np.testing.assert_array_equal(best, ordered[0])
    np.testing.assert_array_equal(second, ordered[1])


@pytest.mark.nojit
def test_the_lowest_word_wins_a_tie():
    codebook = (np.ones((1, 3), np.float32), np.zeros((1, 3), np.float32), np.ones(3, np.float32))
    *_, nearest = metrics(codebook, np.array([[0.3 + 0.1j]]))
    assert nearest[0] == 0


@pytest.mark.nojit
@pytest.mark.parametrize("noise", [1e-6, 0.05, 1.0, 30.0])
def test_posterior_is_bayes(noise):
    """softmax(-||z - g||^2 / N0); words below exp(-14) of the best are left out, 1e-6 each."""
    rng = np.random.default_rng(3)
    link = make_link(antennas=4, constellation="16QAM")
    channel = rayleigh(rng, 2, 4)
    g = channel @ link.codebook.vectors.T
    z = g[:, [5, 17, 40]] + complex_noise(rng, (2, 3), noise)
    metric, best, second, nearest = metrics(received(channel, link_tables(link).words), z)
    *_, inverse, index, weight, used = block_scratch(64, 3)
    inverse[:] = 1 / noise
    inverse[2] *= 3.0  # each vector has its own
    block_posterior(metric, best, second, nearest, inverse, 3, index, weight, used)
    for k in range(3):
        exact = np.exp(-(metric[:, k].astype(float) - best[k]) * inverse[k])
        exact /= exact.sum()
        got = np.zeros(64)
        got[index[k, : used[k]]] = weight[k, : used[k]]
        np.testing.assert_allclose(got, exact, atol=1e-5)
        assert got.sum() == pytest.approx(1.0, abs=1e-5)


def dense_posterior(position, observations, prior, walk):
    """Posterior means of (value, rate) at each position by one joint Gaussian solve.

    observations[b]: score, score_k, w, wk, wkk at zero state (linear: information form).
    """
    count = len(position)
    size = 2 * count
    information, vector = np.zeros((size, size)), np.zeros(size)
    information[:2, :2] += np.linalg.inv(np.diag(prior))
    for b in range(1, count):
        d = position[b] - position[b - 1]
        step = np.array([[1.0, d], [0.0, 1.0]])
        # The rate does not walk: a stiff tie in its place.
        tie = np.linalg.inv(np.diag([max(walk * abs(d), 1e-12), 1e-14]))
        rows = np.zeros((2, size))
        rows[:, 2 * b : 2 * b + 2] = np.eye(2)
        rows[:, 2 * b - 2 : 2 * b] = -step
        information += rows.T @ tie @ rows
    for b, (score, score_k, w, wk, wkk) in enumerate(observations):
        at = slice(2 * b, 2 * b + 2)
        information[at, at] += [[w, wk], [wk, wkk]]
        vector[at] += [score, score_k]
    return np.linalg.solve(information, vector).reshape(count, 2)


@pytest.mark.nojit
@pytest.mark.parametrize("walk", [0.0, 1e-3])
@pytest.mark.parametrize("way", [1, -1])
def test_filter_and_smoother_give_the_joint_posterior(walk, way):
    """Kalman filter and Rauch-Tung-Striebel smoother against one dense Gaussian solve."""
    rng = np.random.default_rng(4)
    position = way * np.array([0.0, 16.0, 32.0, 70.0, 86.0])
    prior = (0.3, 1e-4)
    observations = []
    for _ in position:
        k = np.arange(16.0)
        w = rng.uniform(0.5, 2.0, 16) * 20
        z = rng.normal(size=16)
        observations.append((w @ z, w @ (z * k), w.sum(), w @ k, w @ k**2))
    state, cov = np.zeros(2), np.array([prior[0], 0.0, prior[1]])
    filtered, covs, at = [], [], position[0]
    for here, (score, score_k, w, wk, wkk) in zip(position, observations, strict=True):
        predict(state, cov, here - at, walk)
        at = here
        left = score - w * state[0] - wk * state[1]
        left_k = score_k - wk * state[0] - wkk * state[1]
        update(state, cov, left, left_k, w, wk, wkk)
        filtered.append(state.copy())
        covs.append(cov.copy())
    smoothed = np.empty((5, 2))
    smooth(5, position, np.array(filtered), np.array(covs), walk, smoothed)
    exact = dense_posterior(position, observations, prior, walk)
    np.testing.assert_allclose(smoothed, exact, rtol=2e-4, atol=1e-5)


@pytest.mark.nojit
def test_update_without_uncertainty_changes_nothing():
    state, cov = np.array([0.2, 0.0]), np.array([0.0, 0.0, 0.0])
    update(state, cov, 5.0, 5.0, 1.0, 0.0, 1.0)
    assert state.tolist() == [0.2, 0.0]
