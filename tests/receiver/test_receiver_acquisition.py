"""Acquisition: kernels against matrices; estimator variances against their bounds."""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import (
    complex_noise,
    complex_of,
    filtered,
    make_link,
    parts_of,
    payload_section,
    planes_of,
    pulses_at,
    rayleigh,
    waveform,
)
from scipy.optimize import minimize

from spatiq.errors import InputError
from spatiq.receiver.acquisition_kernels import (
    acquire_frame,
    correlate_known,
    parabola_top,
    projected_energy,
    scoring_step,
    solve_channel,
)
from spatiq.receiver.link_tables import link_tables
from spatiq.receiver.matched_filter import filter_bank

SPS = 2.0
ONE = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 6, length = 64}
antennas = [0]
"""
SSK_ONE = {"antennas": 1, "constellation": "QPSK", "sections": ONE + payload_section(8)}
TURNS = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 5}
send = "in-turn"
"""
COVERED = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 5}
send = "together"
repeat = 2
cover = [[1, 1], [1, -1]]
"""


def known_of(tables):
    return (tables.header, *tables.header_vectors.parts)


def header_case(seed, antennas=2, receive=2):
    rng = np.random.default_rng(seed)
    sections = TURNS + payload_section(8)
    link = make_link(antennas=antennas, sections=sections)
    tables = link_tables(link)
    y = complex_noise(rng, (tables.header.size, receive), 1.0)
    return link, tables, link.layout.known[tables.header], y


@pytest.mark.nojit
@pytest.mark.parametrize("carrier", [0.0, 0.0173, -0.3])
def test_correlation_with_known_symbols(carrier):
    _, tables, x, y = header_case(1)
    z = np.empty((2, 2), np.complex128)
    correlate_known(parts_of(y), known_of(tables), carrier, tables.header_centroid, z)
    turn = np.exp(-2j * np.pi * carrier * (tables.header - tables.header_centroid))
    np.testing.assert_allclose(z, x.conj().T @ (turn[:, None] * y), atol=2e-5)


@pytest.mark.nojit
def test_energy_and_channel_are_those_of_least_squares():
    _, tables, x, y = header_case(2)
    z = x.conj().T @ y
    channel = np.empty((2, 2), np.complex128)
    solve_channel(z, tables.gram_root, channel)
    fitted = np.linalg.lstsq(x, y, rcond=None)[0]
    np.testing.assert_allclose(channel, fitted.T, atol=1e-12)
    energy = np.linalg.norm(x @ fitted) ** 2
    assert projected_energy(z, tables.gram_root) == pytest.approx(energy, rel=1e-12)


@pytest.mark.nojit
def test_parabola_top():
    for top in (-0.7, 0.0, 0.31):
        at = [-((x - top) ** 2) for x in (-1.0, 0.0, 1.0)]
        assert parabola_top(*at) == pytest.approx(top)
    assert parabola_top(1.0, 1.0, 1.0) == 0.0
    assert parabola_top(0.0, 1.0, 1.9) == 1.0


@pytest.mark.nojit
def test_scoring_step_is_one_of_gauss_newton():
    """Against projections with plain matrices: carrier from the part of k X h outside X's span."""
    _, tables, x, y = header_case(3)
    slope = complex_noise(np.random.default_rng(4), y.shape, 1.0)
    carrier, origin, slope_energy = 0.004, tables.header_centroid, 0.7
    channel = np.empty((2, 2), np.complex128)
    got = scoring_step(
        parts_of(y),
        parts_of(slope),
        known_of(tables),
        carrier,
        origin,
        tables.gram_root,
        channel,
        slope_energy,
    )
    k = tables.header - origin
    turn = np.exp(-2j * np.pi * carrier * k)[:, None]
    fitted = np.linalg.lstsq(x, turn * y, rcond=None)[0]
    np.testing.assert_allclose(channel, fitted.T, atol=1e-5)
    model = x @ fitted
    drift = k[:, None] * model
    drift = drift - x @ np.linalg.lstsq(x, drift, rcond=None)[0]
    error = turn * y - model
    info = np.sum(np.abs(drift) ** 2)
    timing_info = slope_energy * np.sum(np.abs(model) ** 2)
    assert got[0] == pytest.approx(
        np.sum((model.conj() * turn * slope).real) / timing_info, rel=1e-4
    )
    assert got[1] == pytest.approx(
        np.sum((drift.conj() * error).imag) / info / (2 * np.pi), rel=1e-3
    )
    freedom = 2 * (tables.header.size - 2) - 1
    assert got[2] == pytest.approx(np.sum(np.abs(error) ** 2) / freedom, rel=1e-5)
    assert got[3] == pytest.approx(info, rel=1e-5)
    assert got[4] == pytest.approx(timing_info, rel=1e-5)


def acquire(bank, tables, samples, t0, reach=0.01, points=9):
    channel = np.zeros((samples.shape[0], tables.gram_root.shape[1]), np.complex128)
    found = acquire_frame(
        planes_of(samples),
        t0,
        bank.samples_per_symbol,
        np.linspace(-reach, reach, points),
        known_of(tables),
        tables.gram_root,
        tables.header_centroid,
        bank.parts,
        channel,
    )
    return found, channel


def test_acquisition_finds_the_maximum_of_the_likelihood():
    """Against a direct search of the concentrated likelihood in double precision."""
    link = make_link(sections=TURNS + payload_section(8))
    tables, bank = link_tables(link), filter_bank(link.pulse, SPS)
    x = link.layout.known[tables.header]
    rng = np.random.default_rng(5)
    for _ in range(5):
        t0 = 40 + rng.random()
        known = np.where(np.arange(link.layout.length)[:, None] < 62, link.layout.known, 0)
        samples = waveform(link, SPS, t0, known, rayleigh(rng, 2, 2), 260)
        turn = np.exp(2j * np.pi * 0.003 / SPS * np.arange(260))
        samples = samples * turn + complex_noise(rng, samples.shape, 0.02)
        (got_t0, carrier, *_), channel = acquire(bank, tables, samples, t0 + rng.uniform(-0.4, 0.4))

        def loss(at, samples=samples):
            shape = pulses_at(link, SPS, 40 + at[0], tables.header, 260)
            turned = np.exp(-2j * np.pi * at[1] / 100 * (tables.header - tables.header_centroid))
            y = turned[:, None] * (shape.T @ samples.T)
            return -(np.linalg.norm(x @ np.linalg.lstsq(x, y, rcond=None)[0]) ** 2)

        best = minimize(loss, [got_t0 - 40, carrier * 100], method="Nelder-Mead", tol=1e-9).x
        # Carrier phase within a symbol is not modelled by either; rows of the table are 1/2048
        # sample apart, and the last scoring step leaves what Fisher scoring leaves.
        assert abs(got_t0 - 40 - best[0]) < 2e-3
        assert abs(carrier - best[1] / 100) < 2e-6
        # The second look, as the stage takes it: carrier taken off, no grid.
        centre = got_t0 + tables.header_centroid * SPS
        samples = samples * np.exp(-2j * np.pi * carrier / SPS * (np.arange(260) - centre))
        (second, rest, *_), channel = acquire(bank, tables, samples, got_t0, points=0)
        assert abs(second - got_t0) < 2e-3 and abs(rest) < 2e-6
        y = np.array([filtered(bank, samples, second + k * SPS, bank.taps) for k in tables.header])
        fitted = np.linalg.lstsq(x, y, rcond=None)[0].T
        np.testing.assert_allclose(channel, fitted, atol=1e-3)


def trials(link, receive, snr_db, count, seed, neighbours=False):
    """Estimates of many frames at one SNR per receive antenna, channel columns of equal power.

    Returns t0 errors in symbols, carrier errors in cycles per symbol, N0 estimates over N0, channel
    errors (count, Nr, Nt), reported variances of carrier and timing.
    """
    tables, bank = link_tables(link), filter_bank(link.pulse, SPS)
    rng = np.random.default_rng(seed)
    noise = 10 ** (-snr_db / 10)
    antennas, length = link.antennas, link.layout.length
    n = int((length + 60) * SPS)
    results = []
    words = link.codebook.size
    header = np.zeros((length, 1), bool)
    header[tables.header] = True
    shifts = 40 + np.arange(8) / 8
    shapes = [pulses_at(link, SPS, t, np.arange(length), n) for t in shifts]
    for trial in range(count):
        t0 = shifts[trial % 8]
        vectors = np.where(header, link.layout.known, 0)
        if neighbours:
            sent = rng.integers(0, words, link.layout.payload_index.size)
            vectors[link.layout.payload_index] = link.codebook.vectors[sent]
        channel = np.exp(2j * np.pi * rng.random((receive, antennas)))
        carrier = rng.uniform(-0.005, 0.005)
        samples = (shapes[trial % 8] @ (vectors @ channel.T)).T
        centre = t0 + tables.header_centroid * SPS
        samples = samples * np.exp(2j * np.pi * carrier / SPS * (np.arange(n) - centre))
        samples = samples + complex_noise(rng, samples.shape, noise)
        found, estimate = acquire(bank, tables, samples, t0 + rng.uniform(-0.4, 0.4))
        results.append(
            (
                (found[0] - t0) / SPS,
                found[1] - carrier,
                found[2] / noise,
                estimate - channel,
                found[3],
                found[4],
            )
        )
    columns = [np.array(c) for c in zip(*results, strict=True)]
    return tables, noise, columns


def test_carrier_and_timing_reach_their_bounds_with_one_antenna():
    """Rife and Boorstyn 1974: 6/(4 pi^2 SNR N(N^2-1)) once known symbols are taken off; timing
    1/(8 pi^2 xi L Es/N0), Mengali and D'Andrea 1997 (from memory).

    1500 trials: the variance scatters 3.7 %; [0.9, 1.15] fails falsely below 4e-3 at the lower and
    4e-5 at the upper side of an efficient estimator, and the seed is fixed.
    """
    link = make_link(**SSK_ONE)
    tables, noise, (timing, carrier, level, _, carrier_var, timing_var) = trials(
        link, 1, 10.0, 1500, 1
    )
    n, snr = tables.header.size, 1 / noise
    bound = 6 / (4 * np.pi**2 * snr * n * (n**2 - 1))
    assert bound == pytest.approx(2.408124e-4**2, rel=1e-6)  # N = 64, 10 dB
    assert 0.9 < np.var(carrier) / bound < 1.15
    xi = 1 / 12 + 0.25**2 * (1 / 4 - 2 / np.pi**2)
    timing_bound = 1 / (8 * np.pi**2 * xi * n * snr)
    assert 0.9 < np.var(timing) / timing_bound < 1.15
    # What the frame says of itself is the bound, on average.
    assert np.mean(carrier_var) / (4 * np.pi**2) == pytest.approx(bound, rel=0.05)
    assert np.mean(timing_var) / SPS**2 == pytest.approx(timing_bound, rel=0.05)
    # No bias: 4.5 standard deviations of the mean, false failure 7e-6 each.
    assert abs(np.mean(carrier)) < 4.5 * np.sqrt(bound / 1500)
    assert abs(np.mean(timing)) < 4.5 * np.sqrt(timing_bound / 1500)
    # Noise: unbiased, spread 1/sqrt(freedom) per frame.
    freedom = n - 2
    assert abs(np.mean(level) - 1) < 4.5 / np.sqrt(1500 * freedom)
    assert np.var(level) * freedom == pytest.approx(1.0, abs=0.2)


@pytest.mark.parametrize("receive", [1, 2])
def test_carrier_bound_with_antennas_in_turn(receive):
    """Each antenna takes a phase of its own: only the drift within its turn tells the carrier.

    Information adds over antennas and channels: 4 pi^2 SNR N_a(N_a^2-1)/6 each.
    """
    link = make_link(sections=TURNS + payload_section(8))
    _, noise, (_, carrier, level, _, carrier_var, _) = trials(link, receive, 10.0, 1000, 2)
    n, snr = 31, 1 / noise
    bound = 6 / (4 * np.pi**2 * snr * n * (n**2 - 1)) / (2 * receive)
    assert 0.9 < np.var(carrier) / bound < 1.2
    assert np.mean(carrier_var) / (4 * np.pi**2) == pytest.approx(bound, rel=0.05)
    freedom = receive * (2 * n - 2) - 1
    assert abs(np.mean(level) - 1) < 4.5 / np.sqrt(1000 * freedom)


def test_unknown_payload_next_to_the_known_symbols_costs_little():
    """Payload pulses reach into the last known symbols: at 10 dB a timing loss below 30 %."""
    link = make_link(**SSK_ONE)
    tables, noise, (timing, carrier, *_) = trials(link, 1, 10.0, 1000, 3, neighbours=True)
    n, snr = tables.header.size, 1 / noise
    xi = 1 / 12 + 0.25**2 * (1 / 4 - 2 / np.pi**2)
    assert 0.9 < np.var(timing) * 8 * np.pi**2 * xi * n * snr < 1.3
    assert 0.9 < np.var(carrier) * 4 * np.pi**2 * snr * n * (n**2 - 1) / 6 < 1.2


def test_channel_error_of_pilots_sent_together():
    """N0 tr((P P^H)^-1) per receive antenna (Biguesh and Gershman 2006, from memory).

    The carrier's own error turns both halves, whose centres lie 31 periods apart, against each
    other, which leaks 31/2 x error of one antenna's coefficient into the other's. 1000 trials x 4
    coefficients: 1.6 % standard deviation (the leak's more), tolerance 8 %.
    """
    link = make_link(sections=COVERED + payload_section(8))
    tables, noise, (_, carrier, _, error, carrier_var, _) = trials(link, 2, 10.0, 1000, 4)
    pilots = link.layout.known[tables.header]
    bound = noise * np.trace(np.linalg.inv(pilots.conj().T @ pilots)).real
    assert bound == pytest.approx(noise * 2 / 62)
    assert np.var(carrier) * 4 * np.pi**2 / np.mean(carrier_var) == pytest.approx(1, abs=0.2)
    leak = 2 * (31 / 2) ** 2 * np.mean(carrier_var)
    measured = np.mean(np.sum(np.abs(error) ** 2, axis=2))
    assert measured / (bound + leak) == pytest.approx(1.0, abs=0.08)


@pytest.mark.parametrize("case", ["in-turn", "matrix"])
def test_channel_error_of_least_squares(case):
    """N0/Np per coefficient; N0 tr((P P^H)^-1) per receive antenna for pilots that overlap.

    2000 trials x 4: 1.1 % standard deviation; tolerance 5 %, false failure 1e-5.
    """
    rng = np.random.default_rng(5)
    count = 2000
    if case == "in-turn":
        _, tables, x, _ = header_case(6)
        bound = 2 / 31
        known = known_of(tables)
        root = tables.gram_root
    else:
        x = np.where(rng.random((24, 2)) < 0.7, np.exp(2j * np.pi * rng.random((24, 2))), 0)
        x[0] = 1.0
        values, vectors = np.linalg.eigh(x.conj().T @ x)
        root = np.ascontiguousarray((vectors / np.sqrt(values)).conj().T)
        pointer = np.arange(0, 49, 2)
        antenna = np.tile([0, 1], 24)
        known = (np.arange(24), pointer, antenna, x.ravel().astype(np.complex64))
        bound = np.trace(np.linalg.inv(x.conj().T @ x)).real
    total = 0.0
    z, estimate = np.empty((2, 2), np.complex128), np.empty((2, 2), np.complex128)
    for _ in range(count):
        channel = rayleigh(rng, 2, 2)
        y = x @ channel.T + complex_noise(rng, (x.shape[0], 2), 0.1)
        correlate_known(parts_of(y), known, 0.0, 0.0, z)
        solve_channel(z, root, estimate)
        total += np.mean(np.sum(np.abs(estimate - channel) ** 2, axis=1))
    assert total / count / (0.1 * bound) == pytest.approx(1.0, abs=0.05)


def test_antennas_that_cannot_be_told_apart_are_refused():
    with pytest.raises(InputError, match="no known symbols that tell antenna 1 from the others"):
        link_tables(make_link(sections=ONE + payload_section(8)))
    together = TURNS.replace('"in-turn"', '"together"')
    with pytest.raises(InputError, match="no known symbols that tell antenna 0 from the others"):
        link_tables(make_link(sections=together + payload_section(8)))


@pytest.mark.nojit
def test_parts_round_trip():
    y = complex_noise(np.random.default_rng(9), (5, 3), 1.0)
    np.testing.assert_allclose(complex_of(parts_of(y)), y, atol=1e-6)
