"""Figures against what the simulation made, and whether their intervals hold it.

Each figure is measured in `SEEDS` independent recordings. An interval of true level 95 % is missed
in more than 6 of 16 recordings with a probability of 6e-6 (binomial).
Bias: the mean error over the recordings must not exceed a third of the mean half-width by more than
chance allows: half-widths are about 2.2 standard errors, so a third is 0.73 of them; the mean of 16
errors has a standard error of 0.25 of them, so that an unbiased figure fails with 0.3 %: seeds are
fixed, it was seen to pass.
"""

from __future__ import annotations

import cmath
import functools
import math
from collections.abc import Callable

import numpy as np
import pytest
from acceptance_cases import CABLED, bench, figure, verified

from spatiq.acceptance.setup import Setup
from spatiq.acceptance.verification import Verification
from spatiq.transmit.frames import vectors_of_words
from spatiq.transmit.simulation import SimulatedCapture
from spatiq.transmit.transmitter_faults import Droop, Modulator, PortLevel
from spatiq.transmit.truth import Truth

SEEDS = 16
CLOCK_PPM = 4.0


@functools.cache
def _recordings() -> list[tuple[Truth, Verification]]:
    made: list[SimulatedCapture] = [
        bench(seed=100 + seed, clock_ppm=CLOCK_PPM, snr_db=20.0) for seed in range(SEEDS)
    ]
    return [(c.truth, verified(c, setup=Setup.PORTS)) for c in made]


def _evm(truth: Truth, antenna: int | None) -> float:
    """Noise energy over signal energy of the periods that antennas sent (closed form)."""
    sent = vectors_of_words(truth.link, truth.words())
    chosen = np.any(sent != 0, axis=2) if antenna is None else sent[..., antenna] != 0
    signal = np.einsum("fra,fka->fkr", truth.H, sent)[chosen]
    noise = truth.N0 * signal.size
    return float(100 * np.sqrt(noise / np.sum(np.abs(signal) ** 2)))


def _power(truth: Truth, antenna: int) -> float:
    power = np.mean(np.abs(truth.H[0, :, antenna]) ** 2) / truth.samples_per_symbol
    return float(10 * np.log10(power))


_IMBALANCE = 10 * math.log10(np.sum(np.abs(CABLED[:, 0]) ** 2) / np.sum(np.abs(CABLED[:, 1]) ** 2))
_CORRELATION = abs(np.vdot(CABLED[:, 0], CABLED[:, 1])) / math.prod(
    np.linalg.norm(CABLED, axis=0).tolist()
)


@pytest.mark.parametrize(
    ("name", "subject", "truth_of"),
    [
        ("evm_rms", "", lambda t: _evm(t, None)),
        ("evm_rms", "0", lambda t: _evm(t, 0)),
        ("evm_rms", "1", lambda t: _evm(t, 1)),
        ("carrier_error_hz", "", lambda t: 3000.0),
        ("carrier_error_ppm", "", lambda t: 3000.0 / 2400.0),
        ("carrier_settling_hz", "", lambda t: 0.0),
        ("clock_error_ppm", "", lambda t: -CLOCK_PPM),
        ("frame_period_error_ppm", "", lambda t: CLOCK_PPM),
        ("power_db", "0", lambda t: _power(t, 0)),
        ("power_db", "1", lambda t: _power(t, 1)),
        ("power_imbalance_db", "", lambda t: _IMBALANCE),
        ("power_droop_db", "", lambda t: 0.0),
        ("power_droop_db", "1", lambda t: 0.0),
        ("edge_ramp_db", "", lambda t: 0.0),
        ("isolation_db", "0", lambda t: 20.0),
        ("isolation_db", "1", lambda t: 20 * math.log10(0.8 / 0.05)),
        ("iq_gain_db", "0", lambda t: 0.0),
        ("iq_phase_deg", "1", lambda t: 0.0),
        ("signature_correlation", "0-1", lambda t: _CORRELATION),
    ],
)
def test_interval_holds_the_truth(
    name: str, subject: str, truth_of: Callable[[Truth], float]
) -> None:
    errors, halves, held = [], [], 0
    for truth, found in _recordings():
        got, true = figure(found, name, subject), truth_of(truth)
        held += got.low <= true <= got.high
        errors.append(got.value - true)
        halves.append((got.high - got.low) / 2)
    assert held >= SEEDS - 6, (held, errors, halves)
    assert abs(np.mean(errors)) < np.mean(halves) / 3, (errors, halves)


def test_nothing_is_wrong_with_a_clean_transmitter() -> None:
    """A level that is not there is told by its upper end alone, in 95 % of cases.

    More than 12 of 64 intervals that end have a probability of 1e-5 (binomial).
    """
    ended = 0
    for _, found in _recordings():
        assert figure(found, "bit_error_ratio").value == 0
        assert figure(found, "bit_error_ratio").high > 0
        ended += sum(
            math.isfinite(figure(found, "image_rejection_db", a).high)
            + math.isfinite(figure(found, "carrier_leakage_db", a).low)
            for a in "01"
        )
    assert ended <= 12


GAIN_DB, PHASE_DEG, LEAKAGE_DB = 0.5, 2.0, -30.0


@functools.cache
def _impaired() -> Verification:
    fault = Modulator((1,), GAIN_DB, PHASE_DEG, LEAKAGE_DB)
    return verified(bench(faults=[fault], snr_db=30.0, frames=16))


def _image_rejection() -> float:
    """(1 + 2 g cos phi + g^2) / (1 - 2 g cos phi + g^2): Valkama et al. 2001 (from memory)."""
    g, phi = 10 ** (GAIN_DB / 20), math.radians(PHASE_DEG)
    cosine = 2 * g * math.cos(phi)
    return 10 * math.log10((1 + g * g + cosine) / (1 + g * g - cosine))


# Imbalance raises the direct path by |K1|, |1 + g exp(-j phi)| / 2.
_DIRECT_DB = 20 * math.log10(
    abs(1 + 10 ** (GAIN_DB / 20) * cmath.exp(-1j * math.radians(PHASE_DEG))) / 2
)


@pytest.mark.parametrize(
    ("name", "true", "room"),
    [
        ("iq_gain_db", GAIN_DB, 0.05),
        ("iq_phase_deg", PHASE_DEG, 0.3),
        ("carrier_leakage_db", LEAKAGE_DB - _DIRECT_DB, 0.6),
        ("image_rejection_db", _image_rejection(), 0.6),
    ],
)
def test_modulator_of_one_antenna_path(name: str, true: float, room: float) -> None:
    """Inside 1.5 intervals (a chance of 1e-3 for a miss; seed fixed); the other path is clean."""
    got = figure(_impaired(), name, "1")
    half = (got.high - got.low) / 2
    assert half < room
    assert abs(got.value - true) < 1.5 * half
    clean = figure(_impaired(), name, "0")
    if name in ("iq_gain_db", "iq_phase_deg"):
        assert abs(clean.value) < room
    elif name == "carrier_leakage_db":
        assert clean.value < LEAKAGE_DB - 12
    else:
        assert clean.value > true + 12


@pytest.mark.parametrize(
    ("fault", "evm"),
    [
        # Image energy over signal energy (Valkama et al. 2001); carrier over signal (Razavi 1997).
        (Modulator((0, 1), 1.0, 0.0), 10 ** (-24.81 / 20)),
        (Modulator((0, 1), 0.0, 0.0, -25.0), 10 ** (-25.0 / 20)),
    ],
)
def test_evm_of_modulator_faults(fault: Modulator, evm: float) -> None:
    """Noise is 60 dB down. Room: in 128 symbols a frame, the least-squares gain takes part."""
    capture = bench(faults=[fault], snr_db=60.0)
    found = verified(capture)
    truth = capture.truth
    right = vectors_of_words(truth.link, truth.words()).reshape(-1, 2)
    sent = truth.vectors().reshape(-1, 2)
    error = sent - right @ np.linalg.lstsq(right, sent)[0]
    exact = np.linalg.norm(error) / np.linalg.norm(sent - error)
    assert figure(found, "evm_rms").value == pytest.approx(100 * exact, rel=0.02)
    # Antenna 1 sends no real symbols, whose image would pass for gain.
    assert figure(found, "evm_rms", "1").value == pytest.approx(100 * evm, rel=0.05)


def test_droop_and_weak_port() -> None:
    droop = figure(verified(bench(faults=[Droop(-1.0)], frames=12)), "power_droop_db")
    assert droop.low - 0.03 < -1.0 < droop.high + 0.03
    found = verified(bench(faults=[PortLevel(1, -6.0)], frames=12))
    spread = figure(found, "power_imbalance_db")
    assert abs(spread.value - _IMBALANCE - 6.0) < 1.5 * (spread.high - spread.low)


def test_quantisation() -> None:
    """Rounding to b bits has noise 2^(2-2b)/12 of full scale a component, if uniform.

    Source: W. R. Bennett, Bell Syst. Tech. J. 27, 1948. Of a sample: twice that; the matched filter
    leaves its variance. Room: 5 %, the level of rounding noise is exact for busy signals only.
    """
    capture = bench(snr_db=math.inf, bits=8, datatype="ci16_le", cfo_hz=4321.0)
    found = verified(capture)
    truth = capture.truth
    sent = vectors_of_words(truth.link, truth.words())
    signal = np.einsum("fra,fka->fkr", truth.H, sent)
    noise = 2 * (2.0 ** (1 - 8)) ** 2 / 12
    evm = math.sqrt(noise * signal.size / float(np.sum(np.abs(signal) ** 2)))
    assert figure(found, "evm_rms").value == pytest.approx(100 * evm, rel=0.05)
