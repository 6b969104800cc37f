"""Figures of the night against closed forms, fits of another library, and counting by hand."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.optimize
import scipy.special

from spatiq.batch.catalogue import open_catalogue
from spatiq.batch.drift import (
    Outage,
    channel_correlation,
    coherence_time,
    outage,
    trend,
    weighted_slope,
)
from spatiq.batch.night import night_figures, ratio
from spatiq.batch.standouts import LEAST_GROUP, find_standouts


@pytest.mark.nojit
def test_slope_is_that_of_weighted_least_squares():
    """Against scipy.optimize.curve_fit (Levenberg-Marquardt) with its covariance."""
    rng = np.random.default_rng(3)
    time = np.sort(rng.uniform(0, 40, 60))
    std = rng.uniform(0.5, 3.0, 60)
    value = 200.0 - 1.7 * time + 4.0 * std * rng.standard_normal(60)
    _, slope, deviation = weighted_slope(time, value, std)
    fit, covariance = scipy.optimize.curve_fit(lambda t, a, b: a + b * t, time, value, sigma=std)
    assert slope == pytest.approx(fit[1], rel=1e-6)
    assert deviation == pytest.approx(np.sqrt(covariance[1, 1]), rel=1e-5)


@pytest.mark.nojit
def test_slope_needs_points():
    one, none = np.array([1.0]), np.zeros(0)
    assert np.isnan(weighted_slope(none, none, none)).all()
    mean, slope, _ = weighted_slope(one, one, one)
    assert mean == 1.0 and np.isnan(slope)
    time, value = np.array([0.0, 1.0, 2.0, 3.0]), np.array([0.0, 2.0, np.nan, 6.0])
    assert weighted_slope(time, value, np.ones(4))[1] == pytest.approx(2.0)


@pytest.mark.nojit
def test_outage_counts_what_says_something_about_the_link():
    ber = np.array([0.0, 0.02, 0.5, np.nan])
    reasons = ["not found", "cut off by the end", "in a gap", "samples not finite", "not found"]
    out = outage(ber, reasons, 0.01)
    assert out == Outage(4, 5) and out.share == 0.8
    assert outage(np.array([np.nan]), ["in a gap"], 0.01).share is None


def clarke(rng, lags, doppler, paths=400, links=64):
    """Independent links (T, 8, 8) under Clarke's model: many paths of equal power."""
    angle = rng.uniform(0, 2 * np.pi, (links, paths))
    phase = rng.uniform(0, 2 * np.pi, (links, paths))
    time = np.arange(lags)[:, None, None]
    waves = np.exp(1j * (2 * np.pi * doppler * time * np.cos(angle) + phase))
    return (waves.sum(axis=2) / np.sqrt(paths)).reshape(lags, 8, 8)


@pytest.mark.nojit
def test_correlation_of_a_channel_under_clarkes_model_is_a_bessel_function():
    """J0(2 pi f tau): R. H. Clarke, Bell Syst. Tech. J. 47, 1968. An inner product over 64 links
    has a standard deviation of 1/8 at most, and its magnitude a mean of 0.11 where J0 is 0: hence
    the two tolerances, of one seed."""
    rng = np.random.default_rng(5)
    doppler = 0.02
    truth = clarke(rng, 120, doppler)
    noise = 0.3
    parts = rng.standard_normal((2, *truth.shape)) * np.sqrt(noise / 2)
    turned = truth * np.exp(2j * np.pi * rng.uniform(size=(120, 1, 1)))
    rows = channel_correlation(
        turned + parts[0] + 1j * parts[1], np.full((120, 8), noise), np.arange(120.0)
    )
    for row in rows:
        expected = abs(scipy.special.j0(2 * np.pi * doppler * row["lag_s"]))
        assert row["correlation"] == pytest.approx(expected, abs=0.35 if expected < 0.3 else 0.12)
        assert row["pairs"] == 120 - row["frames_apart"]
    # J0(x) = 0.5 at x = 1.5211 (from memory: Abramowitz and Stegun, table 9.1).
    assert coherence_time(rows) == pytest.approx(1.5211 / (2 * np.pi * doppler), rel=0.2)


@pytest.mark.nojit
def test_correlation_of_a_channel_that_stands_still_is_one():
    rng = np.random.default_rng(6)
    still = np.tile(rng.standard_normal((1, 2, 4)) + 0j, (50, 1, 1))
    turned = still * np.exp(2j * np.pi * rng.uniform(size=(50, 1, 1)))
    rows = channel_correlation(turned, np.zeros((50, 4)), np.arange(50.0))
    assert all(row["correlation"] == pytest.approx(1.0) for row in rows)
    assert coherence_time(rows) is None
    assert channel_correlation(turned[:0], np.zeros((0, 4)), np.zeros(0)) == []
    assert channel_correlation(turned[:1], np.zeros((1, 4)), np.zeros(1)) == []


@pytest.mark.nojit
def test_a_trend_adds_up_to_the_whole():
    rng = np.random.default_rng(7)
    count = 500
    columns = {
        "time_s": np.sort(rng.uniform(0, 90, count)),
        "bits_compared": rng.integers(100, 200, count),
        "bit_errors": rng.integers(0, 20, count),
        "ber": rng.uniform(0, 0.2, count),
        "evm_error_energy": rng.uniform(0, 1, count),
        "evm_reference_energy": rng.uniform(5, 6, count),
        "cfo_hz": rng.standard_normal(count),
        "snr_db": rng.standard_normal(count),
    }
    lost = rng.uniform(0, 90, 30)
    rows = trend(columns, lost, ["not found"] * 30, 90.0, 0.1)
    assert len(rows) == 60 and rows[-1]["start_s"] + rows[-1]["seconds"] == pytest.approx(90.0)
    for name in ("bits_compared", "bit_errors", "evm_error_energy"):
        assert sum(r[name] for r in rows) == pytest.approx(columns[name].sum())
    assert sum(r["frames_found"] for r in rows) == count
    assert sum(r["frames_lost"] for r in rows) == 30
    assert sum(r["outage_frames"] for r in rows) == np.sum(columns["ber"] > 0.1) + 30
    inside = (columns["time_s"] >= 1.5) & (columns["time_s"] < 3.0)
    assert rows[1]["cfo_hz"] == pytest.approx(columns["cfo_hz"][inside].mean())


def night_row(k, **more):
    return {
        "measurement": f"m{k:03d}",
        "group_name": "g",
        "bits_compared": 10**6,
        "bit_errors": 1000,
        "evm_percent": 10.0,
        "snr_db": 20.0,
        "cfo_hz": 100.0,
        "clock_ppm": 1.0,
        "outage_frames": 0,
        "outage_of": 100,
        "frames_expected": 100,
        "frames_found": 100,
        "frames_lost": 0,
    } | more


@pytest.mark.nojit
def test_what_stands_out_is_told_with_its_reason():
    rng = np.random.default_rng(8)
    rows = [night_row(k, cfo_hz=100.0 + 5 * rng.standard_normal()) for k in range(40)]
    assert find_standouts(rows) == []
    rows[3] |= {"bit_errors": 40_000}
    rows[5] |= {"cfo_hz": 300.0}
    rows[9] |= {"frames_lost": 30, "frames_found": 70}
    rows[11] |= {"frames_found": 0, "bits_compared": 0, "evm_percent": None, "snr_db": None}
    found = {(r["measurement"], r["figure"]): r for r in find_standouts(rows)}
    assert set(found) == {
        ("m003", "ber"),
        ("m005", "cfo_hz"),
        ("m009", "lost_share"),
        ("m011", "frames_found"),
    }
    said = found["m005", "cfo_hz"]["reason"]
    assert said.startswith("carrier offset 300 Hz, where 40 recordings have 99.5 Hz")
    assert "robust deviations above" in said
    # One frame out of a hundred is no more than chance; thirty are.
    one = [night_row(k, outage_frames=int(k == 4) + 30 * (k == 6)) for k in range(40)]
    assert [(r["measurement"], r["figure"]) for r in find_standouts(one)] == [("m006", "outage")]
    power = [{"measurement": f"m{k:03d}", "antenna": 1, "power_db": -10.0} for k in range(40)]
    power[7]["power_db"] = -16.0
    found = [r for r in find_standouts([night_row(k) for k in range(40)], power)]
    assert [(r["measurement"], r["figure"]) for r in found] == [("m007", "power of antenna 1")]


@pytest.mark.nojit
def test_the_score_is_the_published_one():
    """Modified z-score, 0.6745 (x - median) / MAD: by hand for 1..9 and 30, in a figure in dB."""
    values = [1.0, 2, 3, 4, 5, 6, 7, 8, 9, 30]
    rows = [night_row(k, snr_db=v) for k, v in enumerate(values)]
    (found,) = [r for r in find_standouts(rows) if r["figure"] == "snr_db"]
    # Median 5.5; absolute deviations 0.5 0.5 1.5 1.5 2.5 2.5 3.5 3.5 4.5 24.5: median 2.5.
    assert found["score"] == pytest.approx(0.6745 * 24.5 / 2.5, rel=1e-3)
    assert find_standouts(rows[-(LEAST_GROUP - 1) :]) == []


@pytest.mark.nojit
def test_chance_alone_does_not_stand_out():
    """Errors of one true BER: log-ratios scatter as counting does. 400 recordings, 7 figures; the
    chance that a normal law passes 3.5 deviations is 4.7e-4, so 2 of 400 would be a surprise with
    own deviation doubled (7 deviations)."""
    rng = np.random.default_rng(9)
    rows = [night_row(k, bit_errors=int(rng.poisson(9))) for k in range(400)]
    assert find_standouts(rows) == []


@pytest.mark.nojit
def test_pooled_ratios_add_counts():
    assert ratio(0, 0) is None
    pooled = ratio(3, 1000)
    # Clopper and Pearson (1934): 3 of 1000 at 95 %, the interval 0.00062 to 0.00874 (from memory).
    assert pooled is not None and pooled["low"] == pytest.approx(0.00062, abs=1e-5)
    assert pooled["high"] == pytest.approx(0.00874, abs=1e-5) and not pooled["is_upper_bound"]


@pytest.mark.nojit
def test_an_empty_night(tmp_path):
    with open_catalogue(tmp_path, create=True) as catalogue:
        figures = night_figures(catalogue)
    assert figures["groups"] == [] and figures["recordings"] == {} and figures["failed"] == []
