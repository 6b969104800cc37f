"""Acquisition where an antenna's known symbols lie far apart: the likelihood has fringes."""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import (
    complex_noise,
    make_link,
    parts_of,
    payload_section,
    planes_of,
    pulses_at,
    rayleigh,
)

from spatiq.receiver.acquisition_kernels import (
    acquire_frame,
    carrier_peak,
    carrier_score,
    rivals,
)
from spatiq.receiver.link_tables import link_tables
from spatiq.receiver.matched_filter import filter_bank

SPS = 2.0
# Pilots of 32 antennas in turn, twice: the repeats lie 256 symbol periods apart.
FAR_APART = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 5}
antennas = [0]

[[frame.section]]
kind = "pilots"
sequence = {type = "zadoff-chu", length = 8, root = 3}
send = "in-turn"
repeat = 2
"""


def known_of(tables):
    return (tables.header, *tables.header_vectors.parts)


@pytest.mark.nojit
def test_rivals_of_a_peak():
    assert not rivals(np.array([0.1, 0.5, 1.0, 0.9, 0.2, 0.5, 0.1]), 2)
    assert rivals(np.array([0.1, 0.5, 1.0, 0.9, 0.2, 0.86, 0.1]), 2)


@pytest.mark.nojit
def test_top_of_a_peak_is_the_largest_likelihood_nearby():
    """Against a fine grid of the same likelihood with plain matrices."""
    link = make_link()
    tables = link_tables(link)
    x = link.layout.known[tables.header]
    rng = np.random.default_rng(1)
    k = tables.header - tables.header_centroid
    y = (x @ rayleigh(rng, 2, 2).T) * np.exp(2j * np.pi * 0.0021 * k)[:, None]
    y = y + complex_noise(rng, y.shape, 0.1)
    z = np.empty((2, 2), np.complex128)
    arguments = (tables.gram_root, tables.header_centroid, z)
    carriers = np.linspace(0.0, 0.004, 2001)
    scores = []
    for f in carriers:
        turned = y * np.exp(-2j * np.pi * f * k)[:, None]
        scores.append(np.linalg.norm(x @ np.linalg.lstsq(x, turned, rcond=None)[0]) ** 2)
    known, parts = known_of(tables), parts_of(y)
    assert carrier_score(parts, known, carriers[700], *arguments) == pytest.approx(scores[700])
    at, height = carrier_peak(parts, known, 0.0014, 0.0016, *arguments)
    assert abs(at - carriers[np.argmax(scores)]) < 2e-5
    assert height == pytest.approx(np.max(scores), rel=1e-4)


def test_the_right_fringe_is_taken():
    """Carriers anywhere between the search's bins, 20 dB: fringes 1/256 cycles per symbol apart.

    Sync and pilots of antenna 0 tell the fringes apart, by 0.6 % of the likelihood: some 25 of its
    standard deviations here. A grid alone took a neighbouring fringe in 10 of these 24.
    """
    link = make_link(antennas=32, sections=FAR_APART + payload_section(8))
    tables, bank = link_tables(link), filter_bank(link.pulse, SPS)
    rng = np.random.default_rng(2)
    reach = 1 / 128
    span = tables.header.size
    points = 2 * int(np.ceil(reach * 4 * span)) + 1
    n = int((link.layout.length + 60) * SPS)
    shape = pulses_at(link, SPS, 40.3, np.arange(link.layout.length), n)
    for _ in range(24):
        carrier = rng.uniform(-0.8, 0.8) * reach
        samples = (shape @ (link.layout.known @ rayleigh(rng, 4, 32).T)).T
        samples = samples * np.exp(2j * np.pi * carrier / SPS * np.arange(n))
        samples = samples + complex_noise(rng, samples.shape, 0.01)
        channel = np.empty((4, 32), np.complex128)
        found = acquire_frame(
            planes_of(samples),
            40.3 + rng.uniform(-0.4, 0.4),
            SPS,
            np.linspace(-reach, reach, points),
            known_of(tables),
            tables.gram_root,
            tables.header_centroid,
            bank.parts,
            channel,
        )
        assert abs(found[1] - carrier) < 0.1 / 256
