"""Bit error ratios of every scheme over Rayleigh fading: exact results, union bounds, claims.

Statistical tests allow 4.5 standard errors, taken from the spread between channels: false failure
below 1e-5 each.
"""

from __future__ import annotations

from math import comb

import numpy as np
import pytest
from fading_links import error_ratio, normal, wrong_bits
from scipy.optimize import brentq

from spatiq.metrics.differential_theory import (
    fading_pairs,
    fixed_pairs,
)
from spatiq.metrics.prediction import predict_ber
from spatiq.metrics.union_bound import rayleigh_union_bound
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.tree_search import tree_search
from spatiq.signal.codebooks import (
    differential_spatial_modulation,
    generalised_spatial_modulation,
    quadrature_spatial_modulation,
    space_shift_keying,
    spatial_modulation,
)
from spatiq.signal.constellations import named
from spatiq.signal.differential import first_permutations
from spatiq.signal.scheme_examples import scheme_examples
from spatiq.signal.several_antennas import first_sets

SIGMAS = 4.5
QPSK = named("QPSK")
PAIRS = generalised_spatial_modulation(4, QPSK, first_sets(4, 2), [0, 1])
QUADRATURE = quadrature_spatial_modulation(4, QPSK, range(4), range(4))


def differential(antennas, points):
    rows = first_permutations(antennas)
    spatial = range(len(rows).bit_length() - 1)
    return differential_spatial_modulation(antennas, named(points), rows, spatial)


def diversity(branches, ratio):
    """G(L, g): mean of Q(sqrt(2 g x)) over L-branch Rayleigh; Proakis (14.4-15), from memory."""
    mu = np.sqrt(ratio / (1 + ratio))
    terms = [comb(branches - 1 + k, k) * ((1 + mu) / 2) ** k for k in range(branches)]
    return ((1 - mu) / 2) ** branches * sum(terms)


@pytest.mark.parametrize(
    # Pairwise error probabilities G(Nr, rho d^2 / 4) summed over all pairs of vectors: Jeganathan,
    # Ghrayeb, Szczecinski, IEEE Commun. Lett. 12(8), 2008; Mesleh, Ikki, Aggoune, IEEE Trans. Veh.
    # Technol. 2015 (formulas from memory). Values by finite sum and by Craig's integral.
    ("book", "bound_at_10", "snr_of_a_thousandth"),
    [(PAIRS, 1.482282e-3, 10.538), (QUADRATURE, 6.499317e-3, 12.461)],
)
def test_published_bounds_of_generalised_and_quadrature_forms(
    book, bound_at_10, snr_of_a_thousandth
):
    assert rayleigh_union_bound(book, 4, 10.0) == pytest.approx(bound_at_10, rel=1e-6)
    at = rayleigh_union_bound(book, 4, 10 ** (snr_of_a_thousandth / 10))
    assert at == pytest.approx(1e-3, rel=2e-4)  # three decimals of a dB


@pytest.mark.parametrize(("receivers", "snr_db"), [(1, 10), (2, 10), (4, 5)])
def test_space_shift_keying_with_two_antennas_is_exact(receivers, snr_db):
    """G(Nr, rho / 2): Jeganathan et al., IEEE J. Lightw. Technol. 27, 2009 (from memory)."""
    book = space_shift_keying(2, [0, 1], [0])
    exact = diversity(receivers, 10 ** (snr_db / 10) / 2)
    ratio, error = error_ratio(book, receivers, snr_db, 8000, 40, receivers)
    assert error < 0.06 * exact
    assert abs(ratio - exact) < SIGMAS * error


CASES = {name: books[0] for name, books in scheme_examples().items()} | {
    "pairs": PAIRS,
    "own symbols": scheme_examples()["generalised-spatial-modulation"][1],
    "quadrature of four": QUADRATURE,
    "differential of four": differential(4, "BPSK"),
}


def bound_of(book, receivers, ratio):
    return float(rayleigh_union_bound(book, receivers, ratio))


@pytest.mark.parametrize("name", CASES)
def test_every_scheme_keeps_to_its_union_bound(name):
    """Never above it, and within 10 % of it where it is small: here 1.5e-3, Nr = 4."""
    book = CASES[name]
    bound = 1.5e-3
    snr_db = brentq(lambda s: np.log(bound_of(book, 4, 10 ** (s / 10)) / bound), -10, 40)
    ratio, error = error_ratio(book, 4, snr_db, 6000, 32, 11)
    assert error < 0.08 * bound
    assert 0.9 * bound - SIGMAS * error < ratio < bound + SIGMAS * error


def test_tree_search_has_the_error_ratio_of_the_exhaustive_search():
    """Younis et al., arXiv:1305.1478: the same BER. Here word for word but for ties."""
    same = [
        error_ratio(QUADRATURE, 4, 9, 300, 50, 3, detector)[0]
        for detector in (maximum_likelihood, tree_search)
    ]
    assert same[0] > 5e-3
    assert same[1] == pytest.approx(same[0], rel=2e-3)


@pytest.mark.nojit
@pytest.mark.parametrize("ratio", [0.5, 3.0, 10.0])
def test_pairs_of_the_differential_form_in_closed_form(ratio):
    """Two opposite symbols of one antenna are differential BPSK: exp(-g) / 2, and over Rayleigh
    1 / (2 (1 + g)). Proakis, Digital Communications (from memory)."""
    half = np.array([[1.0]])
    fixed = fixed_pairs(half, np.array([[2 * ratio]]), np.array([[0.0]]), 1)
    assert fixed[0] == pytest.approx(0.5 * np.exp(-ratio), rel=1e-6)
    assert fading_pairs(half, 1, ratio)[0] == pytest.approx(0.5 / (1 + ratio), rel=1e-6)


@pytest.mark.parametrize("points", ["BPSK", "QPSK"])
@pytest.mark.parametrize("receivers", [1, 2, 4])
def test_differential_form_costs_less_than_three_decibel(points, receivers):
    """M. Wen et al., IEEE Commun. Lett. 18(3), 2014, abstract: two antennas, "less than 3 dB".

    Their rate, 2 bit/s/Hz, lies between that of the two constellations here, of which the coherent
    form with the same constellation carries half a bit more.
    """
    changing, coherent = differential(2, points), spatial_modulation(2, named(points), [0, 1], [0])
    snr_db = brentq(lambda s: np.log(bound_of(coherent, receivers, 10 ** (s / 10)) / 3e-3), 0, 40)
    here, error = error_ratio(coherent, receivers, snr_db, 4000, 20, 21)
    same, error_same = error_ratio(changing, receivers, snr_db, 4000, 20, 22)
    later, error_later = error_ratio(changing, receivers, snr_db + 3, 4000, 20, 23)
    assert later - here < SIGMAS * np.hypot(error, error_later)
    # It does cost something: told by the means where the errors leave no doubt.
    if receivers > 1:
        assert same - here > -SIGMAS * np.hypot(error, error_same)
        penalty = snr_at(changing, receivers) - snr_at(coherent, receivers)
        assert 0.3 < penalty < 3.0


def snr_at(book, receivers):
    return brentq(lambda s: np.log(bound_of(book, receivers, 10 ** (s / 10)) / 1e-3), -10, 60)


@pytest.mark.parametrize(
    ("antennas", "points", "receivers", "snr_db"),
    [(2, "QPSK", 2, 8.0), (2, "8PSK", 2, 18.0), (3, "BPSK", 2, 10.0), (4, "BPSK", 4, 7.0)],
)
def test_predicted_ratio_of_the_differential_form(antennas, points, receivers, snr_db):
    """Predicted on known channels, against words sent over the same channels.

    40 channels, 4000 words each. The difference is held against the spread of the frames' errors;
    5 % are allowed for the 512 draws of each prediction and for the bound below `BOUND_ALONE`.
    """
    book, rng = differential(antennas, points), np.random.default_rng(5)
    h = normal(rng, 40, receivers, antennas)
    noise = 10 ** (-snr_db / 10)
    errors = wrong_bits(book, h, noise, 4000, rng)
    spatial = np.tile(book.spatial_bits, 4000)
    wrong = np.stack([errors[:, spatial].mean(axis=1), errors[:, ~spatial].mean(axis=1)], axis=1)
    found = predict_ber(h, np.full(40, noise), np.zeros((40, antennas)), book)
    share = book.spatial_bits.mean()
    ber = share * wrong[:, 0] + (1 - share) * wrong[:, 1]
    sampling = SIGMAS * np.sqrt(ber.mean() * book.bits / (40 * 4000 * book.bits))
    assert abs(found.ber.mean() - ber.mean()) < 0.05 * ber.mean() + sampling
    assert abs(found.signal.mean() - wrong[:, 1].mean()) < 0.07 * wrong[:, 1].mean() + sampling
    assert abs(found.spatial.mean() - wrong[:, 0].mean()) < 0.1 * wrong[:, 0].mean() + sampling
