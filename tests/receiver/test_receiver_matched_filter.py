"""Matched filter at any instant: direct sums, derivative, intersymbol interference, rotation."""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import complex_noise, complex_of, filtered, make_link, planes_of, waveform

from spatiq.errors import InputError
from spatiq.receiver.matched_filter import (
    derotate,
    filter_bank,
    sample_instants,
    sample_periods,
)
from spatiq.signal.pulses import isi_floor, rectangular, root_raised_cosine

RATES = [1.25, 2.0, 4.0, 4.0690104, 7.3]


@pytest.mark.nojit
@pytest.mark.parametrize("sps", RATES)
def test_outputs_equal_the_sum_over_the_pulse_itself(sps):
    pulse = root_raised_cosine(0.25, 12)
    bank = filter_bank(pulse, sps)
    rng = np.random.default_rng(1)
    samples = complex_noise(rng, (2, 400), 1.0)
    periods = np.array([3, 4, 9, 20], np.int64)
    t0 = 60.3
    out = np.empty((periods.size, 2, 2), np.float32)
    sample_periods(planes_of(samples), t0, sps, periods, bank.taps, bank.phases, out)
    instants = t0 + periods * sps
    n = np.arange(400)
    exact = np.array(
        [pulse.samples((n - t) / sps, sps) / np.sqrt(sps) @ samples.T for t in instants]
    )
    # The nearest of the table's rows is at most half a step off: slope energy times that squared,
    # a deviation of sqrt(slope_energy)/(2 phases) per unit of noise; 6 sigmas of complex noise. At
    # the cut ends one more or less sample may fall inside: the pulse's value there.
    edge = abs(float(pulse.samples(6.0 - 1e-9, sps)))
    bound = 6 * (np.sqrt(bank.slope_energy) / (2 * bank.phases) + edge / np.sqrt(sps)) + 1e-5
    assert np.abs(complex_of(out) - exact).max() < bound
    oracle = np.array([filtered(bank, samples, t, bank.taps) for t in instants])
    np.testing.assert_allclose(complex_of(out), oracle, atol=2e-6)


@pytest.mark.parametrize("sps", RATES)
def test_slopes_are_the_finite_differences_of_the_outputs(sps):
    pulse = root_raised_cosine(0.25, 16)
    bank = filter_bank(pulse, sps)
    # Rows one table step apart, in the middle of the taps (at the cut ends the pulse jumps).
    difference = (bank.taps[2:].astype(float) - bank.taps[:-2]) * bank.phases / 2
    inside = slice(3, 2 * bank.half - 3)
    # Rounding of float32 taps times phases, and the third derivative over a step.
    assert np.abs(bank.slopes[1:-1] - difference)[:, inside].max() < 2 * 6e-8 * bank.phases


@pytest.mark.parametrize(
    ("rolloff", "xi"), [(0.22, 0.0856254), (0.25, 0.0862932), (0.5, 0.0951727)]
)
def test_slope_energy_is_that_of_the_timing_bound(rolloff, xi):
    """xi = 1/12 + a^2 (1/4 - 2/pi^2): Mengali and D'Andrea, 1997 (from memory)."""
    bank = filter_bank(root_raised_cosine(rolloff, 64), 4.0)
    # What the cut at +-32 symbols leaves out falls as 1/t^4 in energy of the slope.
    assert bank.slope_energy == pytest.approx(4 * np.pi**2 * xi / 16, rel=2e-3)


@pytest.mark.parametrize("sps", [2.0, 4.0, 4.0690104])
@pytest.mark.parametrize(("rolloff", "span"), [(0.25, 12), (0.35, 16)])
def test_intersymbol_interference_is_the_pulses_own(rolloff, span, sps):
    link = make_link(
        pulse=f'shape = "root-raised-cosine"\nrolloff = {rolloff}\nspan_symbols = {span}'
    )
    bank = filter_bank(link.pulse, sps)
    t0 = 40 * sps
    samples = waveform(link, sps, t0, np.ones((1, 1)), np.ones((1, 1)), int(90 * sps))
    periods = np.arange(-20, 21, dtype=np.int64)
    out = np.empty((periods.size, 2, 1), np.float32)
    sample_periods(planes_of(samples), t0, sps, periods, bank.taps, bank.phases, out)
    response = complex_of(out)[:, 0].real
    interference = np.sum(response[periods != 0] ** 2)
    assert response[20] == pytest.approx(1.0, abs=2e-3)
    n = np.arange(int(90 * sps)) - t0
    own = link.pulse.samples(n / sps, sps) / sps
    shifted = [own @ link.pulse.samples(n / sps - k, sps) for k in periods if k != 0]
    # The table's step adds slopes of the response at its zeros: below -80 dB.
    assert interference == pytest.approx(np.sum(np.square(shifted)), rel=0.02, abs=1e-8)
    if sps == int(sps):
        floor = 10 ** (isi_floor(link.pulse, sps) / 10)
        assert interference == pytest.approx(floor, rel=0.02, abs=1e-8)


@pytest.mark.nojit
def test_the_grid_has_the_same_bits_from_any_window():
    bank = filter_bank(root_raised_cosine(0.25, 8), 4.0690104)
    planes = planes_of(complex_noise(np.random.default_rng(2), (2, 3000), 1.0))
    spacing = bank.samples_per_symbol / 2
    whole = np.empty((2, 900), np.complex64)
    sample_instants(planes, 0.0, 40, spacing, bank.taps, bank.phases, whole)
    origin = 1203
    part = np.empty((2, 100), np.complex64)
    cut = np.ascontiguousarray(planes[:, :, origin:])
    sample_instants(cut, origin, 640, spacing, bank.taps, bank.phases, part)
    np.testing.assert_array_equal(part, whole[:, 600:700])


@pytest.mark.nojit
def test_instants_whose_taps_leave_the_samples_read_as_zero():
    bank = filter_bank(root_raised_cosine(0.25, 8), 4.0)
    planes = np.ones((1, 2, 100), np.float32)
    out = np.full((3, 2, 1), 9.0, np.float32)
    sample_periods(planes, 0.0, 50.0, np.array([0, 1, 2]), bank.taps, bank.phases, out)
    np.testing.assert_array_equal(out[[0, 2]], 0.0)
    assert np.all(out[1] != 0.0)


@pytest.mark.nojit
@pytest.mark.parametrize("cycles", [0.0, 1.7e-3, -0.013, 0.25])
def test_derotation_is_a_rotation_by_the_stated_angle(cycles):
    samples = complex_noise(np.random.default_rng(3), (2, 1000), 1.0)
    planes = planes_of(samples)
    origin = 417.25
    derotate(planes, cycles, origin)
    turned = samples * np.exp(-2j * np.pi * cycles * (np.arange(1000) - origin))
    got = planes[:, 0] + 1j * planes[:, 1]
    np.testing.assert_allclose(got, turned, atol=4e-6)


def test_derotation_keeps_its_accuracy_far_from_the_origin():
    planes = np.zeros((1, 2, 64), np.float32)
    planes[:, 0] = 1.0
    derotate(planes, 0.123456789, -1e9)
    cycles = 0.123456789 * (np.arange(64) + 1e9)
    exact = np.exp(-2j * np.pi * (cycles - np.floor(cycles)))
    # 1e9 samples hold a phase to 1.2e8 cycles: 52 bits leave 2e-8 cycles.
    np.testing.assert_allclose(planes[0, 0] + 1j * planes[0, 1], exact, atol=2e-6)


def test_a_pulse_wider_than_the_sample_rate_is_refused():
    with pytest.raises(InputError, match=r"at least 1\.5"):
        filter_bank(root_raised_cosine(0.5, 8), 1.25)


def test_a_rectangle_is_taken_at_any_rate():
    bank = filter_bank(rectangular(), 1.25)
    energy = np.sum(bank.taps.astype(float) ** 2, axis=1)
    # Its energy is 1 - 1/(2 sps) to 1 by where its edges fall (integral of the averaged square).
    assert energy.min() > 1 - 1 / (2 * 1.25) - 0.1
    assert energy.max() < 1.0 + 1e-6
