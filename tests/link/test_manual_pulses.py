"""Pulses by the manual's formulas (chapter 5), energy by a fine sum: no code shared."""

import numpy as np
import pytest
from links import base, parsed

STEP = 1 / 2048


def unit_energy(values):
    return values / np.sqrt(np.sum(values**2) * STEP)


def pulse_of(table):
    tables = base()
    tables["pulse"] = table
    return parsed(tables).pulse


@pytest.mark.parametrize(("r", "span"), [(0.25, 8), (0.35, 11.5), (1.0, 6)])
def test_root_raised_cosine(r, span):
    # Midpoints of a grid that misses the formula's singular points.
    t = np.arange(-span / 2 + STEP / 2, span / 2, STEP)
    h = (np.sin(np.pi * t * (1 - r)) + 4 * r * t * np.cos(np.pi * t * (1 + r))) / (
        np.pi * t * (1 - (4 * r * t) ** 2)
    )
    pulse = pulse_of({"shape": "root-raised-cosine", "rolloff": r, "span_symbols": span})
    # Midpoint rule: error of the energy is O(STEP^2), below 1e-6.
    np.testing.assert_allclose(pulse.samples(t, 4), unit_energy(h), atol=2e-6)
    assert not pulse.samples([span / 2 + 1e-6, -span / 2 - 1e-6], 4).any()


@pytest.mark.parametrize("taps", [[0.1, 0.5, 1.0, 0.5, 0.1], [0.2, 1.0, 0.9, -0.1]])
def test_taps(taps):
    q = 2.0
    t = np.arange(-10, 10, STEP)
    x = q * t[:, None] + (len(taps) - 1) / 2 - np.arange(len(taps))
    inside = np.clip(1 - (x / 16) ** 2, 0, None)
    g = np.where(np.abs(x) < 16, np.sinc(x) * np.i0(8 * np.sqrt(inside)) / np.i0(8.0), 0)
    pulse = pulse_of({"shape": "taps", "taps": taps, "samples_per_symbol": q})
    np.testing.assert_allclose(pulse.samples(t, 4), unit_energy(g @ np.array(taps)), atol=2e-6)
    # At the taps' own rate the pulse is the taps, the middle of the list at t = 0.
    at_taps = (np.arange(len(taps)) - (len(taps) - 1) / 2) / q
    values = pulse.samples(at_taps, q)
    np.testing.assert_allclose(values / values[1], np.array(taps) / taps[1], rtol=1e-9)


def test_rectangle_far_from_its_edges():
    pulse = pulse_of({"shape": "rectangular"})
    np.testing.assert_allclose(pulse.samples([-0.6, -0.4, 0.0, 0.4, 0.6], 16), [0, 1, 1, 1, 0])
