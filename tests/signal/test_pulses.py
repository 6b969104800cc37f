"""Pulse shapes against closed forms and published values."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.signal.pulses import (
    Pulse,
    explicit_taps,
    isi_floor,
    rectangular,
    root_raised_cosine,
    root_raised_cosine_value,
    symbol_response,
)

# Proakis, Digital Communications (from memory; confirmed by inverse transform of the spectrum):
# roll-off, h(0), h(1/(4 rolloff)), 99 % bandwidth x T, power within +-1/(2T).
PUBLISHED = [
    (0.20, 1.0546479, -0.2000000, 1.0730787, 0.9636620),
    (0.22, 1.0601127, -0.1571843, 1.0848949, 0.9600282),
    (0.25, 1.0683099, -0.0642372, 1.1030682, 0.9545775),
    (0.35, 1.0956338, 0.2606035, 1.1666572, 0.9364085),
    (0.50, 1.1366198, 0.5786325, 1.2680072, 0.9091549),
]
ROLLOFFS = [row[0] for row in PUBLISHED]


def quotient(t: np.ndarray, rolloff: float) -> np.ndarray:
    """The textbook form, good away from its singular points."""
    u = 4 * rolloff * t
    top = np.sin(np.pi * t * (1 - rolloff)) + u * np.cos(np.pi * t * (1 + rolloff))
    return np.asarray(top / (np.pi * t * (1 - u**2)))


def transformed(t: float, rolloff: float) -> float:
    """Inverse Fourier transform of the root of the raised-cosine spectrum, by a 60-point rule."""
    nodes, weights = np.polynomial.legendre.leggauss(60)
    edge = (1 - rolloff) / 2
    flat = edge / 2 * (1 + nodes)
    flank = edge + rolloff / 2 * (1 + nodes)
    root = np.cos(np.pi / (2 * rolloff) * (flank - edge))
    level = edge / 2 * weights @ np.cos(2 * np.pi * flat * t)
    return float(2 * level + rolloff * weights @ (root * np.cos(2 * np.pi * flank * t)))


@pytest.mark.nojit
@pytest.mark.parametrize(("rolloff", "middle", "singular", "_b", "_p"), PUBLISHED)
def test_rrc_at_its_singular_points(
    rolloff: float, middle: float, singular: float, _b: float, _p: float
) -> None:
    a, at = rolloff, 1 / (4 * rolloff)
    assert root_raised_cosine_value(0.0, a) == pytest.approx(middle, abs=5e-8)
    assert root_raised_cosine_value([at, -at], a) == pytest.approx([singular] * 2, abs=5e-8)
    # The same closed forms to full precision.
    limit = (1 + 2 / np.pi) * np.sin(np.pi / (4 * a)) + (1 - 2 / np.pi) * np.cos(np.pi / (4 * a))
    assert root_raised_cosine_value(0.0, a) == pytest.approx(1 - a + 4 * a / np.pi, abs=5e-16)
    assert root_raised_cosine_value(at, a) == pytest.approx(a / np.sqrt(2) * limit, abs=2e-15)


@pytest.mark.parametrize("rolloff", ROLLOFFS)
def test_rrc_equals_quotient_and_transform(rolloff: float) -> None:
    t = np.linspace(-40, 40, 4001) + 0.0031
    away = np.minimum(np.abs(t), np.abs(np.abs(t) - 1 / (4 * rolloff))) > 0.05
    np.testing.assert_allclose(
        root_raised_cosine_value(t[away], rolloff), quotient(t[away], rolloff), atol=2e-14
    )
    for centre in (0.0, 1 / (4 * rolloff)):
        for offset in (0.0, 1e-12, 1e-9, 1e-6, 1e-3, 0.1):
            at = centre + offset
            value = float(root_raised_cosine_value(at, rolloff))
            assert value == pytest.approx(transformed(at, rolloff), abs=5e-15)


def test_rrc_without_rolloff_is_a_sinc() -> None:
    t = np.linspace(-10, 10, 999)
    np.testing.assert_allclose(root_raised_cosine_value(t, 0.0), np.sinc(t), atol=1e-15)


@given(st.floats(0, 1), st.floats(0, 50))
def test_rrc_is_even_and_bounded(rolloff: float, t: float) -> None:
    value = float(root_raised_cosine_value(t, rolloff))
    assert float(root_raised_cosine_value(-t, rolloff)) == pytest.approx(value, abs=1e-15)
    assert abs(value) <= 4 / np.pi + 1e-15


@pytest.mark.parametrize("rolloff", ROLLOFFS)
def test_long_rrc_pair_is_the_raised_cosine(rolloff: float) -> None:
    # RRC * RRC (t) = raised cosine: 1 at 0, 0 at whole symbols, (pi/4) sinc(1/(2a)) at 1/(2a).
    # Tolerance: what is cut off at +-100 symbols is below 1/(pi 4 a t^2) in amplitude.
    sps = 8
    t = np.arange(-100 * sps, 100 * sps + 1) / sps
    h = root_raised_cosine_value(t, rolloff)

    def pair(lag: float) -> float:
        return float(h @ root_raised_cosine_value(lag - t, rolloff)) / sps

    assert pair(0) == pytest.approx(1, abs=1e-5)
    assert [pair(k) for k in (1, 2, 5)] == pytest.approx([0, 0, 0], abs=1e-5)
    special = np.pi / 4 * np.sinc(1 / (2 * rolloff))
    assert pair(1 / (2 * rolloff)) == pytest.approx(special, abs=1e-5)


@pytest.mark.parametrize(("rolloff", "_m", "_s", "bandwidth", "within"), PUBLISHED)
def test_measured_spectrum(
    rolloff: float, _m: float, _s: float, bandwidth: float, within: float
) -> None:
    span, sps = 400, 4
    pulse = root_raised_cosine(rolloff, span)
    samples = pulse.samples(np.arange(-span * sps // 2, span * sps // 2) / sps, sps)
    power = np.abs(np.fft.rfft(samples)) ** 2
    bin_width = sps / samples.size
    power[1:] *= 2
    inside = np.cumsum(power) / power.sum()
    edges = (2 * np.arange(power.size) + 1) * bin_width  # two-sided width up to the bin's edge
    assert np.interp(0.99, inside, edges) == pytest.approx(bandwidth, abs=bin_width)
    # One bin at the edge 1/2 holds about bin_width of the power.
    assert np.interp(1.0, edges, inside) == pytest.approx(within, abs=bin_width)
    assert 1 - rolloff * (0.5 - 1 / np.pi) == pytest.approx(within, abs=5e-8)


@pytest.mark.nojit
@pytest.mark.parametrize(
    # Computed once by other means; 0.1 dB is the rounding of the published figure.
    ("rolloff", "span", "sps", "floor"),
    [(0.25, 8, 4, -49.4), (0.25, 12, 8, -37.9), (0.35, 10, 4, -42.9)],
)
def test_isi_floor_of_truncated_pairs(rolloff: float, span: int, sps: int, floor: float) -> None:
    assert isi_floor(root_raised_cosine(rolloff, span), sps) == pytest.approx(floor, abs=0.06)


def test_isi_floor_falls_with_span_to_none() -> None:
    assert isi_floor(root_raised_cosine(0.5, 200), 4) < -95
    assert isi_floor(rectangular(), 5) == -np.inf
    assert isi_floor(rectangular(), 4, timing=0.5) == -np.inf


PULSES = {
    "rrc": root_raised_cosine(0.25, 8),
    "rrc odd span": root_raised_cosine(0.35, 7.5),
    "sinc": root_raised_cosine(0.0, 20),
    "wide": root_raised_cosine(1.0, 6),
    "rectangular": rectangular(),
    "taps": explicit_taps([0.1, 0.5, 1.0, 0.4, -0.2], 2),
}


@pytest.mark.parametrize("pulse", PULSES.values(), ids=PULSES.keys())
@pytest.mark.parametrize("sps", [1.0, 2.0, 3.7, 8.0])
def test_contract_of_every_pulse(pulse: Pulse, sps: float) -> None:
    t = np.linspace(-pulse.half_span - 2, pulse.half_span + 2, 1203).reshape(3, -1)
    values = pulse.samples(t, sps)
    assert values.shape == t.shape
    assert values.dtype == np.float64
    assert (values[np.abs(t) > pulse.half_span] == 0).all()
    assert pulse.bandwidth > 0
    with pytest.raises(InputError, match="samples_per_symbol"):
        pulse.samples(0.0, 0.99)
    with pytest.raises(InputError, match="samples_per_symbol"):
        pulse.samples(0.0, np.nan)


@pytest.mark.parametrize("name", [name for name in PULSES if name != "rectangular"])
def test_unit_energy_over_continuous_time(name: str) -> None:
    pulse = PULSES[name]
    # Simpson's rule, 2000 steps a symbol: error far below the tolerance.
    t = np.linspace(-pulse.half_span, pulse.half_span, 2 * int(1000 * pulse.half_span) + 1)
    weights = np.full(t.size, 2.0)
    weights[1::2] = 4.0
    weights[[0, -1]] = 1.0
    energy = weights @ pulse.samples(t, 4) ** 2 * (t[1] - t[0]) / 3
    assert energy == pytest.approx(1.0, abs=1e-9)


@given(st.floats(0, 1), st.sampled_from([2.0, 2.5, 4.0, 7.3]))
def test_matched_filter_of_samples_has_unit_energy(timing: float, sps: float) -> None:
    # Band-limited, so the sum equals the integral up to what the cut at +-16 symbols spills:
    # the edge value squared over sps, below 1e-5.
    response = symbol_response(root_raised_cosine(0.25, 32), sps, timing)
    assert response.max() == pytest.approx(1.0, abs=3e-5)


@given(st.floats(-1.5, 1.5), st.floats(1, 20))
def test_rectangle_is_its_mean_over_a_sample(t: float, sps: float) -> None:
    fine = t + (np.arange(4000) + 0.5) / 4000 / sps - 0.5 / sps
    mean = np.mean(np.abs(fine) < 0.5)
    assert float(rectangular().samples(t, sps)) == pytest.approx(mean, abs=6e-4)


@given(st.floats(0, 1), st.floats(1, 20))
def test_rectangles_of_neighbours_tile(t0: float, sps: float) -> None:
    n, k = np.arange(40), np.arange(-5, 50)
    total = rectangular().samples((n - t0) / sps - k[:, None], sps).sum(axis=0)
    np.testing.assert_allclose(total, 1.0, atol=1e-12)


def test_taps_pass_through_their_taps_in_order() -> None:
    taps = np.array([0.1, 0.5, 1.0, 0.4, -0.2])
    pulse = explicit_taps(taps, 2)
    at_taps = pulse.samples((np.arange(5) - 2) / 2, 2)
    np.testing.assert_allclose(at_taps / at_taps[2], taps, atol=1e-15)
    even = explicit_taps(taps[:4], 2).samples((np.arange(4) - 1.5) / 2, 8)
    np.testing.assert_allclose(even / even[2], taps[:4], atol=1e-15)
    assert np.abs(pulse.samples((np.arange(5, 20) - 2) / 2, 2)).max() < 1e-15


@pytest.mark.parametrize("rate", [2.0, 3.3, 4.0])
def test_taps_interpolate_a_band_limited_pulse(rate: float) -> None:
    # Kaiser window, beta 8: 81 dB down (Kaiser 1974), so 1e-4 of the peak.
    whole = root_raised_cosine(0.5, 100)
    n = np.arange(-int(50 * rate), int(50 * rate) + 1)
    pulse = explicit_taps(7.5 * whole.samples(n / rate, rate), rate)
    t = np.linspace(-30, 30, 5003)
    np.testing.assert_allclose(pulse.samples(t, 4), whole.samples(t, 4), atol=1e-4)
    assert pulse.bandwidth == pytest.approx(1.5, abs=0.06)
    assert pulse.bandwidth <= 1.5


@pytest.mark.parametrize(
    ("call", "text"),
    [
        (lambda: root_raised_cosine(-0.01, 8), "rolloff: found -0.01; expected 0 to 1"),
        (lambda: root_raised_cosine(1.01, 8), "rolloff"),
        (lambda: root_raised_cosine(np.nan, 8), "rolloff"),
        (lambda: root_raised_cosine(0.2, 0), "span_symbols"),
        (lambda: root_raised_cosine(0.2, 513), "span_symbols"),
        (lambda: explicit_taps([], 2), "taps"),
        (lambda: explicit_taps([[1.0]], 2), "taps"),
        (lambda: explicit_taps([1j], 2), "real numbers"),
        (lambda: explicit_taps([0.0, 0.0], 2), "not all zero"),
        (lambda: explicit_taps([1.0, np.inf], 2), "finite"),
        (lambda: explicit_taps([1.0], 0.5), "samples_per_symbol"),
    ],
)
def test_refusals(call: Callable[[], object], text: str) -> None:
    with pytest.raises(InputError, match=text):
        call()
