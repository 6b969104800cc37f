"""Narrow-band noise of a stated bandwidth: against the closed form of its spectrum."""

from __future__ import annotations

import numpy as np
import pytest

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context
from spatiq.transmit.narrow_band import NarrowBandNoise


def context(channels=2, **more):
    return Context(sample_rate=1e6, receive_channels=channels, seed=3, place=0, **more)


@pytest.mark.nojit
def test_power_width_centre_and_signature_are_those_stated():
    """First-order autoregression: correlation exp(-pi w |n|) exp(2 pi j f n) at lag n (Box and
    Jenkins, "Time Series Analysis", ch. 3). 4e5 samples of correlation time 16 hold some 12,500
    independent ones: 5 % is 5.6 standard deviations of the power, and more of the ratios."""
    interferer = NarrowBandNoise(1.25e5, 2e4, -6.0, [2.0, 1j])
    stage = interferer.begin(context(signal_power=3.0))
    parts = [stage(np.zeros((2, 1 << 16), np.complex64), n << 16) for n in range(7)]
    made = np.concatenate(parts, axis=1)
    power = np.mean(np.abs(made) ** 2, axis=1)
    assert power.mean() == pytest.approx(3.0 * 10**-0.6, rel=0.05)
    np.testing.assert_allclose(made[1], made[0] * 0.5j, rtol=1e-4, atol=1e-6)
    for lag in (1, 8, 16):
        seen = np.mean(made[0, lag:] * made[0, :-lag].conj()) / power[0]
        told = np.exp(-np.pi * 0.02 * lag) * np.exp(2j * np.pi * 0.125 * lag)
        assert abs(seen - told) < 0.05
    assert np.mean(np.abs(made[0, :50]) ** 2) > 0.02 * power[0]  # it does not build up from nothing


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("noise", "message"),
    [
        (NarrowBandNoise(6e5, 1e3, 0.0), "frequency"),
        (NarrowBandNoise(0.0, 0.0, 0.0), "width"),
        (NarrowBandNoise(0.0, 3e5, 0.0), "width"),
        (NarrowBandNoise(0.0, float("nan"), 0.0), "width"),
        (NarrowBandNoise(0.0, 1e3, 101.0), "power"),
        (NarrowBandNoise(0.0, 1e3, 0.0, [1]), "signature"),
    ],
)
def test_values_out_of_range_are_refused(noise, message):
    with pytest.raises(InputError, match=message):
        noise.begin(context())
