"""A genie receiver on simulated recordings against exact error rates and bounds.

Perfect timing, carrier and channel, maximum-likelihood search over the codebook in plain NumPy:
what is left is the simulator. Errors of one frame share a channel, so standard errors come from the
spread of errors per frame, and each test allows 5 of them (false failure below 6e-7 each).
"""

from math import comb

import numpy as np
import pytest
from scipy.special import erfc
from transmit_links import make_link

from spatiq.transmit.channel import rayleigh, rician
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import simulate

SIGMAS = 5
DATA = '[[payload.field]]\ntype = "data"\nbits = "rest"'
TOGETHER = 2000


def short_link(**choices):
    """Few known symbols: nearly all of the simulation counts."""
    return make_link(sync_order=2, payload=10, fields=DATA, **choices)


def genie_error_ratio(made):
    """Bit error ratio and its standard error from the spread between frames."""
    truth, link = made.truth, made.link
    samples = made.samples()
    codebook, payload = link.codebook, link.layout.payload_index
    wrong = []
    for first in range(0, truth.frames, TOGETHER):
        stop = min(first + TOGETHER, truth.frames)
        received = genie_symbols(truth, samples, first, stop)[:, payload]
        candidates = np.einsum("fra,ca->fcr", truth.H[first:stop], codebook.vectors)
        distance = np.sum(np.abs(received[:, :, None] - candidates[:, None]) ** 2, axis=3)
        decided = codebook.words_to_bits(np.argmin(distance, axis=2))
        wrong.append(np.sum(decided != truth.sent_bits(first, stop), axis=1))
    per_frame = np.concatenate(wrong) / link.payload.n_bits
    return per_frame.mean(), per_frame.std() / np.sqrt(len(per_frame))


def diversity(branches, ratio):
    """G(L, g): mean over L-branch Rayleigh of Q(sqrt(2 g x)); Proakis (14.4-15), from memory."""
    mu = np.sqrt(ratio / (1 + ratio))
    terms = [comb(branches - 1 + k, k) * ((1 + mu) / 2) ** k for k in range(branches)]
    return ((1 - mu) / 2) ** branches * sum(terms)


def test_closed_form_used_here():
    """Orthogonal signalling, two antennas: published value recomputed to its digits."""
    assert diversity(1, 5.0) == pytest.approx(4.356454e-2, rel=1e-6)
    assert diversity(2, 5.0) == pytest.approx(5.528247e-3, rel=1e-6)


@pytest.mark.parametrize(("receive", "snr_db"), [(1, 10.0), (2, 10.0), (4, 5.0)])
def test_space_shift_keying_over_rayleigh(receive, snr_db):
    """Exact: G(Nr, rho / 2). Jeganathan et al., IEEE J. Lightw. Technol. 2009 (from memory)."""
    made = simulate(
        short_link(constellation=None),
        receive_channels=receive,
        samples_per_symbol=2,
        frames=40_000,
        snr_db=snr_db,
        cfo_hz=2e3,
        seed=11,
    )
    measured, error = genie_error_ratio(made)
    exact = diversity(receive, 10 ** (snr_db / 10) / 2)
    assert error < 0.05 * exact
    assert abs(measured - exact) < SIGMAS * error


def test_space_shift_keying_over_rician_with_equal_columns():
    """The line of sight drops out of h1 - h2: rho / (1 + K). Nr = 2, 10 dB, K = 4: 5.805826e-2.

    Derived and confirmed by Monte Carlo; exactness: Di Renzo and Haas, IEEE Trans. Commun. 59(1),
    2011.
    """
    made = simulate(
        short_link(constellation=None),
        channels=rician(10 * np.log10(4)),
        samples_per_symbol=2.5,
        frames=10_000,
        snr_db=10.0,
        seed=12,
    )
    measured, error = genie_error_ratio(made)
    assert error < 0.02 * 5.805826e-2
    assert abs(measured - 5.805826e-2) < SIGMAS * error


def test_space_shift_keying_over_a_fixed_channel():
    """Orthonormal columns, 8 dB: Q(sqrt(rho)) = 6.004386e-3 (textbook)."""
    exact = 0.5 * erfc(np.sqrt(10**0.8 / 2))
    assert exact == pytest.approx(6.004386e-3, rel=1e-6)
    columns = np.array([[1, 1j], [1j, 1]]) / np.sqrt(2)
    made = simulate(
        short_link(constellation=None),
        channels=columns,
        samples_per_symbol=2,
        frames=20_000,
        snr_db=8.0,
        seed=13,
    )
    measured, error = genie_error_ratio(made)
    assert error < 0.05 * exact
    assert abs(measured - exact) < SIGMAS * error


@pytest.mark.parametrize(
    ("antennas", "constellation", "receive", "snr_db", "bound"),
    [(2, "QPSK", 2, 15.0, 2.375479e-3), (4, "BPSK", 4, 8.0, 1.890698e-3)],
)
def test_spatial_modulation_against_the_union_bound(
    antennas, constellation, receive, snr_db, bound
):
    """Below the bound, and within 10 % of it where it is this small, but for sampling.

    Bound: pairwise error probabilities G(Nr, rho d^2 / 4) summed; Jeganathan et al., IEEE Commun.
    Lett. 12(8), 2008 (from memory, computed by two means).
    """
    made = simulate(
        short_link(antennas=antennas, constellation=constellation),
        channels=rayleigh(),
        receive_channels=receive,
        samples_per_symbol=2,
        frames=60_000,
        snr_db=snr_db,
        seed=14,
    )
    measured, error = genie_error_ratio(made)
    assert error < 0.05 * bound
    assert 0.9 * bound - SIGMAS * error < measured < bound + SIGMAS * error
