"""Gain that steps inside frames, and between them: found, sized, taken out, and told."""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import IN_TURN, SYNC, make_link, payload_section
from torn_frames import genie_wrong_bits, measured, which_frames

from spatiq.metrics.frame_table import Mark
from spatiq.transmit.gain_steps import GainPlan

HEADER = 127
CHOICES = {"receive_channels": 2, "spacing": (40.0, 200.0), "cfo_hz": (-1e4, 1e4), "seed": 3}


def stepped(folder, step, snr, constellation="QPSK", antennas=4, frames=20, ratio=4.0):
    """Up amid one frame, down amid the next, at random places of the payload."""
    link = make_link(
        antennas=antennas,
        constellation=constellation,
        sections=SYNC + IN_TURN + payload_section(1000 - 63 - 16 * antennas),
    )
    rng = np.random.default_rng(5)
    shares = rng.uniform(0.25, 0.9, frames)
    steps = [(n + float(share), step * (-1) ** n) for n, share in enumerate(shares)]
    case = measured(
        folder, link, frames=frames, snr_db=snr, samples_per_symbol=ratio,
        gains=GainPlan(steps=steps), **CHOICES,
    )  # fmt: skip
    f = which_frames(case)
    sizes = np.array([size for _, size in steps])[f]
    return case, f, shares[f] * link.layout.length, sizes


@pytest.mark.parametrize(
    ("step", "snr", "constellation", "antennas", "ratio"),
    [
        (1.0, 16.0, "16QAM", 2, 4.0),
        (-3.0, 12.0, "QPSK", 4, 4.069),
        (6.0, 18.0, "16QAM", 4, 4.0),
        (12.0, 14.0, "QPSK", 4, 4.0),
        (-12.0, 20.0, "16QAM", 4, 1.7320508),
    ],
)
def test_steps_within_frames_are_taken_out(tmp_path, step, snr, constellation, antennas, ratio):
    """At most 15 % more wrong bits than the genie's, who knows every sample's gain, plus four times
    the square root of their number. Sizes within five standard deviations and 0.1 dB."""
    case, f, place, size = stepped(tmp_path, step, snr, constellation, antennas, ratio=ratio)
    columns = case.columns
    best = genie_wrong_bits(case, f).sum()
    assert columns["bit_errors"].sum() < 1.15 * best + 4 * np.sqrt(best)
    found = (columns["marks"] & Mark.GAIN_STEP) > 0
    # A step close to the frame's end, or a small one, may stay below the evidence's limit: it costs
    # as little as it shows.
    assert found.mean() > (0.7 if abs(step) < 2 else 0.9)
    off = (columns["gain_step_db"] - size)[found]
    assert np.all(np.abs(off) < 5 * columns["gain_step_std_db"][found] + 0.1)
    if abs(step) > 2:
        assert np.all(np.abs(columns["gain_step_at"] - place)[found] < 3.0)
    assert not np.any(columns["marks"] & Mark.SAMPLES_LOST)


def test_a_step_on_one_channel_alone_is_taken_out(tmp_path):
    """+6 dB on the second of two channels amid frame 3."""
    link = make_link(antennas=4, sections=SYNC + IN_TURN + payload_section(800))

    def lifted(capture):
        samples = capture.samples()
        start, spacing = capture.truth.starts[3], capture.truth.spacing
        samples[1, int(start + 500 * spacing) :] *= 10 ** (6 / 20)
        return samples

    case = measured(
        tmp_path, link, samples=lifted, frames=4, snr_db=25.0, samples_per_symbol=4.0, **CHOICES
    )
    assert case.columns["bit_errors"].sum() == 0
    assert (case.columns["marks"] & Mark.GAIN_STEP).astype(bool).tolist() == [0, 0, 0, 1]
    assert case.columns["gain_step_db"][3] == pytest.approx(3.0, abs=0.3)  # mean of both channels


@pytest.mark.parametrize("range_db", [6.0, 12.0])
def test_steps_between_frames_cost_nothing(tmp_path, range_db):
    """Each frame has its own gain: found as without, errors as the genie's."""
    link = make_link(antennas=4, sections=SYNC + IN_TURN + payload_section(400))
    case = measured(
        tmp_path, link, frames=30, snr_db=12.0, samples_per_symbol=4.0,
        gains=GainPlan(each_frame_db=range_db), **CHOICES,
    )  # fmt: skip
    f = which_frames(case)
    best = genie_wrong_bits(case, f).sum()
    assert f.size == 30
    assert case.columns["bit_errors"].sum() < 1.15 * best + 4 * np.sqrt(best)
    assert not np.any(case.columns["marks"] & Mark.GAIN_STEP)


def test_other_frames_are_as_without_the_step(tmp_path):
    """A step amid frame 2, taken back behind it: all other frames bit for bit."""
    link = make_link(antennas=4, sections=SYNC + IN_TURN + payload_section(400))
    choices = {**CHOICES, "frames": 6, "snr_db": 15.0, "samples_per_symbol": 4.0}

    def lifted(capture):
        samples, start = capture.samples(), capture.truth.starts[2]
        length = link.layout.length * capture.truth.spacing
        samples[:, int(start + length / 2) : int(start + length + 60)] *= 2.0
        return samples

    (tmp_path / "clean").mkdir()
    clean = measured(tmp_path / "clean", link, **choices)
    torn = measured(tmp_path, link, samples=lifted, **choices)
    others = np.arange(6) != 2
    for name, values in clean.columns.items():
        np.testing.assert_array_equal(values[others], torn.columns[name][others], err_msg=name)
    np.testing.assert_array_equal(clean.words[others], torn.words[others])
    assert torn.columns["marks"].tolist() == [0, 0, Mark.GAIN_STEP, 0, 0, 0]
