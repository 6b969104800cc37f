"""Impulse responses from known symbols: least squares against its published error, length, plan."""

import numpy as np
import pytest
from dispersive_cases import dense_matrix, fading_taps
from receiver_cases import IN_TURN, SYNC, complex_noise, make_link, payload_section

from spatiq.errors import InputError
from spatiq.receiver.dispersive_acquisition import KnownSymbols
from spatiq.receiver.dispersive_frames import flat_equivalent
from spatiq.receiver.dispersive_plan import WIDEST, dispersive_plan
from spatiq.receiver.fir_channel import FirFit, Window, convolved, shifted_vectors, supported_rows

QUIET = '\n[[frame.section]]\nkind = "silence"\nsymbols = 12\n'
SECTIONS = SYNC + IN_TURN + QUIET + payload_section(64) + QUIET


@pytest.mark.nojit
@pytest.mark.parametrize("window", [Window(0, 0), Window(-2, 3), Window(0, 4), Window(-3, 0)])
def test_convolution_and_its_rows(window):
    """Sum over lags against the dense matrix; rows of known symbols do not see the others."""
    rng = np.random.default_rng(1)
    taps = fading_taps(rng, window.size, 2, 3)
    vectors = complex_noise(rng, (9, 3), 1.0)
    dense = dense_matrix(taps, window, 9, np.ones(9, bool)) @ vectors.ravel()
    made = convolved(vectors, taps, window)
    np.testing.assert_allclose(made, dense.reshape(9, 2))
    rows = np.arange(9)
    shifted = shifted_vectors(vectors, rows, window)
    np.testing.assert_allclose(np.einsum("kla,lra->kr", shifted, taps), made)
    known = np.ones(9, bool)
    known[4] = False
    changed = vectors.copy()
    changed[4] += 1.0
    same = np.all(np.isclose(convolved(changed, taps, window), made), axis=1)
    inside = (rows >= window.last) & (rows < 9 + window.first)
    np.testing.assert_array_equal(supported_rows(known, window), rows[same & inside])


def test_error_is_that_of_least_squares():
    """MSE per receive antenna N0 tr (X^H X)^-1 and unbiased N0, over 1500 trials.

    Biguesh and Gershman, IEEE Trans. Signal Process. 54(3), 2006 (from memory). The squared error
    of a trial has a relative spread below 1, its mean one of 2.6 %; five sigmas. N0's mean has one
    of 1/sqrt(1500 freedom).
    """
    plan = dispersive_plan(make_link(sections=SECTIONS), 4)
    window = Window(-1, 3)
    begin = window.first - plan.window.first
    part = plan.shifted[:, begin : begin + window.size]
    flat = part.reshape(len(part), -1)
    noise, trials = 0.2, 1500
    expected = noise * np.trace(np.linalg.inv(flat.conj().T @ flat)).real
    rng = np.random.default_rng(2)
    errors, noises, stated = [], [], []
    for _ in range(trials):
        taps = fading_taps(rng, window.size, 2, 2)
        y = np.einsum("kla,lra->kr", part, taps)
        fit = FirFit(plan.shifted, y + complex_noise(rng, y.shape, noise), plan.window)
        found = fit.solve(window)
        errors.append(np.sum(np.abs(found.taps - taps) ** 2) / 2)
        # One degree of freedom is left for carrier and timing, which are not fitted here.
        noises.append(found.noise * (found.freedom - 1) / found.freedom)
        stated.append(found.variance.sum())
    assert np.mean(errors) == pytest.approx(expected, rel=0.13)
    assert np.mean(noises) == pytest.approx(noise, rel=5 / np.sqrt(trials * found.freedom))
    assert np.mean(stated) == pytest.approx(expected, rel=0.02)


@pytest.mark.parametrize("window", [Window(0, 0), Window(0, 2), Window(-2, 4), Window(-1, 1)])
def test_length_by_the_information_criterion(window):
    """At 25 dB with taps of equal power: never too short, and seldom too long.

    One lag too many is taken when a chi-square of 2 Nr Nt = 8 degrees of freedom passes 16 (twice
    their number), probability 0.042, at either end; with the corrections of a short frame less
    often. Of 200 windows 0.92 are right or more; 0.80 is seven standard errors below. One too short
    needs all four coefficients of a tap in deep fades at once.
    """
    plan = dispersive_plan(make_link(sections=SECTIONS), None)
    rng = np.random.default_rng(3)
    begin = window.first - plan.window.first
    part = plan.shifted[:, begin : begin + window.size]
    right = 0
    for _ in range(200):
        taps = fading_taps(rng, window.size, 2, 2)
        y = np.einsum("kla,lra->kr", part, taps)
        fit = FirFit(plan.shifted, y + complex_noise(rng, y.shape, 10**-2.5), plan.window)
        found = fit.best(plan.windows)
        assert found.first <= window.first
        assert found.last >= window.last
        right += found == window
    assert right > 160


@pytest.mark.nojit
def test_fit_without_some_rows():
    """Taking rows out is fitting the others."""
    rng = np.random.default_rng(6)
    shifted = complex_noise(rng, (60, 3, 2), 1.0)
    received = complex_noise(rng, (60, 2), 1.0)
    window = Window(-1, 1)
    rest = FirFit(shifted, received, window).without(shifted[20:35], received[20:35])
    chosen = np.r_[0:20, 35:60]
    alone = FirFit(shifted[chosen], received[chosen], window)
    for inner in (window, Window(0, 1)):
        one, other = rest.solve(inner), alone.solve(inner)
        np.testing.assert_allclose(one.taps, other.taps, atol=1e-9)
        assert one.noise == pytest.approx(other.noise)
        assert one.freedom == other.freedom


def test_carrier_with_an_unknown_dispersive_channel():
    """Variance against the inverse information with the channel unknown (Morelli and Mengali 2000),
    300 trials: relative spread of a variance sqrt(2/300) = 8 %; bounds of five sigmas."""
    link = make_link(sections=SECTIONS)
    plan = dispersive_plan(link, 3)
    fit = KnownSymbols(plan)
    rng = np.random.default_rng(4)
    window = Window(-1, 2)
    truth = 2e-3
    turn = np.exp(2j * np.pi * truth * (np.arange(plan.known.shape[0]) - plan.centre))
    scaled = []
    for _ in range(300):
        taps = fading_taps(rng, window.size, 2, 2)
        y = turn[:, None] * convolved(plan.known, taps, window)
        found = fit(y + complex_noise(rng, y.shape, 0.05))
        error = 2 * np.pi * (found.carrier - truth)
        scaled.append(error / np.sqrt(found.variance))
    assert 0.6 < np.mean(np.square(scaled)) < 1.45
    assert abs(np.mean(scaled)) < 5 / np.sqrt(300)


def test_plan_widest_window():
    """Long known sections tell the widest window; short ones a narrower one, or none."""
    assert dispersive_plan(make_link(sections=SECTIONS), None).window == WIDEST
    short = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 4}
send = "in-turn"
"""
    narrow = dispersive_plan(make_link(sections=short + payload_section(64)), None)
    assert 3 < narrow.window.size < WIDEST.size
    flat = narrow.shifted.reshape(narrow.rows.size, -1)
    assert np.linalg.matrix_rank(flat) == flat.shape[1]
    with pytest.raises(InputError, match="dispersive channel of a memory of 12"):
        dispersive_plan(make_link(sections=short + payload_section(64)), 12)
    for memory in (0, 1, 5):
        plan = dispersive_plan(make_link(sections=SECTIONS), memory)
        assert {w.memory for w in plan.windows} == {memory}


@pytest.mark.nojit
def test_flat_equivalent_keeps_energy_and_strongest_phase():
    rng = np.random.default_rng(5)
    taps = fading_taps(rng, 4, 2, 3)
    taps[:, :, 2] = 0
    channel = flat_equivalent(taps)
    np.testing.assert_allclose(np.abs(channel) ** 2, np.sum(np.abs(taps) ** 2, axis=0))
    strongest = taps[np.argmax(np.abs(taps[:, 0, 1])), 0, 1]
    assert np.angle(channel[0, 1] / strongest) == pytest.approx(0, abs=1e-12)
