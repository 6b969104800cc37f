"""Kernels of tracking and refit against plain NumPy."""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import (
    complex_noise,
    complex_of,
    filtered,
    make_link,
    parts_of,
    planes_of,
    rayleigh,
)
from test_receiver_soft_kernels import received

from spatiq.receiver.link_tables import link_tables
from spatiq.receiver.matched_filter import filter_bank
from spatiq.receiver.refit_kernels import (
    cross_moments,
    expectation,
    gram,
    known_error,
    references,
    refit_phase,
    rotate_active,
    solve_moments,
    take_symbols,
)
from spatiq.receiver.soft_kernels import block_scratch
from spatiq.receiver.timing_kernels import refit_timing, timing_density
from spatiq.receiver.tracking_kernels import (
    BLOCK,
    block_references,
    block_score,
    derotated_block,
    update_timing,
    write_phase,
)
from spatiq.signal.pulses import root_raised_cosine


class Case:
    """A small frame: link, channel, noisy received vectors of the active periods, carrier gone."""

    def __init__(self, noise, seed=1, antennas=2, constellation="QPSK"):
        rng = np.random.default_rng(seed)
        self.link = make_link(antennas=antennas, constellation=constellation)
        self.tables = tables = link_tables(self.link)
        layout, codebook = self.link.layout, self.link.codebook
        self.channel = rayleigh(rng, 2, antennas)
        self.words = rng.integers(0, codebook.size, layout.payload_index.size)
        vectors = layout.known.copy()
        vectors[layout.payload_index] = codebook.vectors[self.words]
        self.vectors = vectors[tables.active]
        exact = self.vectors @ self.channel.T
        self.noise = noise
        self.y = exact + complex_noise(rng, exact.shape, noise)

    def posterior_means(self):
        """E[x] (Ka, Nt), codeword energies (C,), sum of payload E||y - Hx||^2; double precision."""
        tables, book = self.tables, self.link.codebook.vectors
        g = book @ self.channel.T
        means, energies, total = self.vectors.copy(), np.zeros(len(book)), 0.0
        for i, word in enumerate(tables.active_word):
            if word < 0:
                continue
            distance = np.sum(np.abs(self.y[i] - g) ** 2, axis=1)
            p = np.exp(-(distance - distance.min()) / self.noise)
            p /= p.sum()
            means[i] = p @ book
            energies += p
            total += p @ distance
        return means, energies, total


@pytest.mark.nojit
@pytest.mark.parametrize("noise", [1e-4, 0.1, 2.0])
def test_expectation_and_what_follows(noise):
    case = Case(noise)
    tables = case.tables
    n = tables.active.size
    mean, energy = tables.known_vectors.copy(), np.empty(8)
    codebook = received(case.channel, tables.words)
    y = parts_of(case.y)
    total = expectation(
        y,
        tables.active_word,
        tables.active_amplitude,
        tables.words.parts,
        codebook,
        noise,
        mean,
        energy,
    )
    means, energies, exact = case.posterior_means()
    np.testing.assert_allclose(mean, means, atol=3e-5)
    np.testing.assert_allclose(energy, energies, atol=1e-2 * noise + 1e-3)
    # Single precision of ||y||^2 against small distances.
    assert total == pytest.approx(exact, rel=1e-4, abs=1e-3)

    reference = np.empty((n, 2, 2), np.float32)
    references(case.channel, mean, reference)
    np.testing.assert_allclose(complex_of(reference), means @ case.channel.T, atol=1e-4)
    known = tables.active_word < 0
    error = np.sum(np.abs(case.y - means @ case.channel.T)[known] ** 2)
    assert known_error(y, reference, tables.active_word) == pytest.approx(error, rel=1e-3)

    syx, sxx = np.empty((2, 2), np.complex128), np.empty((2, 2), np.complex128)
    cross_moments(y, mean, syx)
    np.testing.assert_allclose(syx, case.y.T @ means.conj(), rtol=1e-4, atol=1e-3)
    gram(tables.words.parts, energy, tables.known_gram, sxx)
    book = case.link.codebook.vectors
    second = sum(e * np.outer(v, v.conj()) for e, v in zip(energies, book, strict=True))
    known_part = case.link.layout.known.T @ case.link.layout.known.conj()
    np.testing.assert_allclose(sxx, second + known_part, atol=1e-2)


@pytest.mark.nojit
@pytest.mark.parametrize("sent", ["in turn", "in turn, one silent", "together"])
def test_moments_are_solved_as_least_squares(sent):
    rng = np.random.default_rng(2)
    x = complex_noise(rng, (40, 3), 1.0)
    if sent != "together":
        x *= np.eye(3)[rng.integers(0, 3, 40)]
    if sent == "in turn, one silent":
        x[:, 1] = 0
    y = complex_noise(rng, (40, 2), 1.0)
    channel = np.empty((2, 3), np.complex128)
    solve_moments(x.T @ x.conj(), np.ascontiguousarray(y.T @ x.conj()), channel)
    fitted = np.linalg.lstsq(x, y, rcond=None)[0].T  # least norm: zero where nothing was sent
    np.testing.assert_allclose(channel, fitted, atol=1e-10)


@pytest.mark.nojit
def test_antennas_that_nothing_tells_apart_still_fit_what_was_received():
    """Two antennas always send alike: one takes both their parts; the fit is as good as any."""
    rng = np.random.default_rng(3)
    x = complex_noise(rng, (40, 3), 1.0)
    x[:, 2] = x[:, 0]
    y = complex_noise(rng, (40, 2), 1.0)
    channel = np.empty((2, 3), np.complex128)
    solve_moments(x.T @ x.conj(), np.ascontiguousarray(y.T @ x.conj()), channel)
    fitted = x @ np.linalg.lstsq(x, y, rcond=None)[0]
    np.testing.assert_allclose(x @ channel.T, fitted, atol=1e-9)
    assert np.any(np.all(channel == 0, axis=0))


@pytest.mark.nojit
def test_rotation_of_active_periods():
    y = complex_noise(np.random.default_rng(3), (30, 2), 1.0)
    phase = np.linspace(-4, 9, 30).astype(np.float32)
    parts = parts_of(y)
    rotate_active(parts, phase)
    np.testing.assert_allclose(complex_of(parts), y * np.exp(-1j * phase[:, None]), atol=2e-6)


@pytest.mark.nojit
def test_refit_phase_is_weighted_least_squares():
    """Without walk: a straight line through the quadrature errors, wide prior at its start."""
    case = Case(0.05, seed=4)
    k = case.tables.active
    reference = case.vectors @ case.channel.T
    y = case.y * np.exp(1j * (0.02 + 1e-4 * k))[:, None]
    phase = np.full(k.size, 0.5, np.float32)
    variance = refit_phase(
        parts_of(y), parts_of(reference), k, 0.05, np.array([10.0, 1.0, 0.0, 0.0]), phase
    )
    weight = 2 / 0.05 * np.sum(np.abs(reference) ** 2, axis=1)
    z = np.sum((reference.conj() * y).imag, axis=1) / np.sum(np.abs(reference) ** 2, axis=1)
    design = np.stack([np.ones(k.size), k - k[0]], axis=1)
    information = design.T @ (weight[:, None] * design) + np.diag([1 / 10.0, 1.0])
    line = np.linalg.solve(information, design.T @ (weight * z))
    np.testing.assert_allclose(phase, 0.5 + design @ line, atol=2e-6)
    assert variance == pytest.approx(np.linalg.inv(information)[1, 1], rel=1e-4)


@pytest.mark.nojit
@pytest.mark.parametrize("step_var", [1e-8, 0.0])
def test_refit_timing_is_weighted_least_squares(step_var):
    case = Case(0.05, seed=5)
    k = case.tables.active
    reference = case.vectors @ case.channel.T
    slope = complex_noise(np.random.default_rng(6), reference.shape, 1.0)
    timing = np.array([7.0, 4.0, 0.0, 0.0])
    density = 0.3 * np.sum(np.abs(reference) ** 2, axis=1)
    refit_timing(parts_of(slope), parts_of(reference), density, k, 0.05, step_var, timing)
    score = 2 / 0.05 * np.sum((reference.conj() * slope).real, axis=1)
    design = np.stack([np.ones(k.size), k], axis=1)
    prior = np.diag([0.0, 1 / step_var if step_var > 0 else 1e30])
    covariance = np.linalg.inv(design.T @ (2 / 0.05 * density[:, None] * design) + prior)
    moved = timing[:2] - [7.0, 4.0]
    np.testing.assert_allclose(moved, covariance @ (design.T @ score), rtol=1e-4, atol=1e-9)
    np.testing.assert_allclose(timing[2:], np.diag(covariance), rtol=1e-5, atol=1e-30)


@pytest.mark.nojit
@pytest.mark.parametrize("keyed", [False, True])
def test_timing_density_adds_up_to_the_energy_of_the_waveforms_slope(keyed):
    """The sum is the energy of ds/dt, s the sum of pulses: of random symbols, and of space-shift
    keying, in which neighbours are often alike."""
    rng = np.random.default_rng(11)
    pulse, sps = root_raised_cosine(0.35, 16.0), 8.0
    periods = np.concatenate([np.arange(3, 33), np.arange(40, 60)])  # silence in between
    reference = complex_noise(rng, (periods.size, 2), 1.0)
    if keyed:
        reference = reference[rng.integers(0, 2, periods.size)]
    bank = filter_bank(pulse, sps)
    density = np.empty(periods.size)
    timing_density(parts_of(reference), periods, bank.curvature, density)
    t = np.arange(-80, 800) / sps - 1e-4
    step = 1e-5
    waves = [
        sum(
            r * pulse.samples(t + s - k, sps)[:, None]
            for r, k in zip(reference, periods, strict=True)
        )
        for s in (-step, step)
    ]
    slope = (waves[1] - waves[0]) / (2 * step) / (sps * np.sqrt(sps))
    # Lags beyond the eighth and the jump where the pulse is cut off are left out: 3 %. Taking the
    # modified bound's slope energy for each symbol instead errs by over 10 % when keyed.
    exact = np.sum(np.abs(slope) ** 2)
    assert density.sum() == pytest.approx(exact, rel=0.03)
    plain = bank.slope_energy * np.sum(np.abs(reference) ** 2)
    assert not keyed or plain > 1.1 * exact


@pytest.mark.nojit
def test_derotated_block_and_its_references():
    case = Case(0.2, seed=7)
    tables = case.tables
    bank = filter_bank(case.link.pulse, 2.0)
    samples = complex_noise(np.random.default_rng(8), (2, 300), 1.0)
    instants = 60 + 2.0 * np.arange(10) + 0.21
    angles = np.linspace(0, 1, 10).astype(np.float32)
    scales = np.linspace(0.5, 2, 10).astype(np.float32)
    real, imag = np.zeros((2, BLOCK), np.float32), np.zeros((2, BLOCK), np.float32)
    derotated_block(
        planes_of(samples), instants, angles, scales, bank.taps, bank.phases, real, imag
    )
    y = np.array([filtered(bank, samples, t, bank.taps) for t in instants]).T
    got = (real + 1j * imag)[:, :10]
    np.testing.assert_allclose(got, y * np.exp(-1j * angles) * scales, atol=5e-6)

    periods = np.concatenate([np.flatnonzero(tables.active_word < 0)[-4:], [100, 101, 102]])
    z = case.y[periods].T
    parts = tuple(np.zeros((2, BLOCK), np.float32) for _ in range(2))
    parts[0][:, :7], parts[1][:, :7] = z.real, z.imag
    means = tuple(np.zeros((2, BLOCK), np.float32) for _ in range(2))
    block_references(
        periods,
        tables.active_word,
        tables.active_vectors.parts,
        case.channel,
        received(case.channel, tables.words),
        parts,
        np.ones(7, np.float32),
        case.noise,
        block_scratch(8, BLOCK),
        means,
    )
    expected = (case.posterior_means()[0] @ case.channel.T)[periods]
    np.testing.assert_allclose((means[0] + 1j * means[1])[:, :7].T, expected, atol=1e-4)


@pytest.mark.nojit
@pytest.mark.parametrize("quadrature", [True, False])
def test_block_score(quadrature):
    rng = np.random.default_rng(9)
    observed, mean = complex_noise(rng, (2, BLOCK), 1.0), complex_noise(rng, (2, BLOCK), 1.0)
    offsets = np.arange(12.0)
    scales = rng.uniform(0.5, 2, 12).astype(np.float32)
    sums = np.empty(5)

    def parts(v):
        return np.ascontiguousarray(v.real, np.float32), np.ascontiguousarray(v.imag, np.float32)

    block_score(parts(observed), parts(mean), offsets, scales, quadrature, sums)
    product = np.sum(mean.conj() * observed, axis=0)[:12] / scales.astype(float) ** 2
    error = product.imag if quadrature else product.real
    energy = np.sum(np.abs(mean) ** 2, axis=0)[:12] / scales.astype(float) ** 2
    exact = [error.sum(), error @ offsets, energy.sum(), energy @ offsets, energy @ offsets**2]
    np.testing.assert_allclose(sums, exact, rtol=2e-5, atol=1e-4)


@pytest.mark.nojit
def test_timing_update_weighs_the_score_by_its_variance():
    state, cov = np.array([0.01, 1e-5]), np.array([1e-3, 1e-7, 1e-9])
    before = np.linalg.inv([[cov[0], cov[1]], [cov[1], cov[2]]])
    mean = state.copy()
    sums = np.array([3.0, 20.0, 16.0, 120.0, 1240.0])
    noise, slope_energy, step = 0.1, 0.4, 4.0
    update_timing(state, cov, sums, 16, noise, slope_energy, step)
    # Thermal variance of the score, and that of unknown neighbours at the block's edges.
    variance = sums[2] * slope_energy * noise / 2 + (sums[2] / 16) ** 2 / step**2
    gain = slope_energy * sums[2] / variance
    information = before + gain * slope_energy * np.array([[sums[2], sums[3]], [sums[3], sums[4]]])
    covariance = np.linalg.inv(information)
    np.testing.assert_allclose(state, mean + covariance @ (gain * sums[:2]), rtol=1e-9)
    np.testing.assert_allclose(cov, covariance[[0, 0, 1], [0, 1, 1]], rtol=1e-6)


@pytest.mark.nojit
def test_phase_is_read_off_the_blocks_lines():
    active = np.arange(0, 120, 2)
    order = np.arange(59, 19, -1)
    position = active[order[::BLOCK]].astype(float)
    smoothed = np.array([[0.1, 0.01], [0.2, -0.02], [0.3, 0.0]])
    phase = np.full(60, 7.0, np.float32)
    write_phase(position, smoothed, order, active, phase)
    assert np.all(phase[:20] == 7.0)
    for n, i in enumerate(order):
        b = n // BLOCK
        line = smoothed[b, 0] + smoothed[b, 1] * (active[i] - position[b])
        assert phase[i] == pytest.approx(line, abs=1e-6)


@pytest.mark.nojit
def test_symbols_are_taken_from_the_payload_and_scaled():
    y = complex_noise(np.random.default_rng(4), (6, 2), 1.0)
    payload, amplitude = np.array([1, 2, 5]), np.array([1, 0.5, 2, 1, 1, 4], np.float32)
    symbols = np.empty((3, 2), np.complex64)
    take_symbols(parts_of(y), payload, amplitude, symbols)
    np.testing.assert_allclose(symbols, (y / amplitude[:, None])[payload], rtol=1e-6)
