"""Samples that a recorder lost without saying so, inside frames: found, sized, and not counted.

Sizes: 1 to 1000 samples in frames of 927 symbol periods. False alarms:
test_receiver_continuity_evidence.py.
"""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import IN_TURN, SYNC, make_link, payload_section
from torn_frames import genie_wrong_bits, losses_in_frames, measured, which_frames

from spatiq.metrics.frame_table import Mark
from spatiq.receiver.sample_losses import symmetry
from spatiq.transmit.losses import Losses

LINK = make_link(antennas=4, sections=SYNC + IN_TURN + payload_section(800))
CHOICES = {
    "receive_channels": 2, "spacing": (40.0, 200.0), "cfo_hz": (-1e4, 1e4), "seed": 3,
    "lead_out": 400.0,
}  # fmt: skip
COUNTS = (1, 2, 3, 5, 6, 7, 9, 17, 30, 101, 403)
SHARES = np.linspace(0.2, 0.85, len(COUNTS))


def torn(folder, link=LINK, counts=COUNTS, shares=SHARES, **more):
    choices = {**CHOICES, "samples_per_symbol": 4.0, "frames": len(counts), **more}
    at = losses_in_frames(link, counts, shares, **choices)
    return measured(folder, link, losses=Losses(at=at, marked=False), **choices), at


@pytest.mark.parametrize(("snr", "ratio"), [(14.0, 4.069), (20.0, 4.0), (30.0, 4.069), (40.0, 8.0)])
def test_lost_samples_are_found_sized_and_left_out(tmp_path, snr, ratio):
    """Every frame hit is marked; a number that is told is right; what is compared has at most 15 %
    more errors than the genie's, plus four times the square root of their number."""
    case, at = torn(tmp_path, snr_db=snr, samples_per_symbol=ratio)
    f, columns = which_frames(case), case.columns
    told = columns["samples_lost"]
    assert np.all(columns["marks"] & Mark.SAMPLES_LOST)
    counts = np.array(COUNTS)[f]
    right = told == counts
    assert np.all(right | (told < 0))
    assert right.sum() >= 0.6 * f.size
    truth = case.capture.truth
    place = (np.array([first for first, _ in at])[f] - truth.starts[f]) / truth.spacing
    off = np.abs(columns["lost_at"] - place)
    assert np.all(off[right] < 2.0 + 4.0 * columns["lost_at_std"][right])
    best = genie_wrong_bits(case, f).sum()
    assert columns["bit_errors"].sum() < 1.15 * best + 4 * np.sqrt(best) + 4
    bits = columns["bits_compared"] + columns["bits_erased"]
    assert np.all(bits == case.capture.link.payload.n_bits)
    assert np.median(columns["bits_compared"][right]) > 0.9 * case.capture.link.payload.n_bits


def test_the_carrier_s_phase_jump_is_that_of_the_lost_time(tmp_path):
    """2 pi f L; the carrier's own uncertainty over the frame adds some hundredths of a radian."""
    case, _ = torn(tmp_path, snr_db=25.0)
    f, columns = which_frames(case), case.columns
    right = columns["samples_lost"] == np.array(COUNTS)[f]
    truth = case.capture.truth
    jump = 2 * np.pi * truth.cfo_hz[f] * np.array(COUNTS)[f] / truth.sample_rate
    off = np.angle(np.exp(1j * (columns["lost_phase"] - jump)))[right]
    assert np.all(np.abs(off) < 0.25)
    assert right.sum() > 6


def test_whole_symbol_periods_that_leave_no_trace_are_not_counted(tmp_path):
    """Four samples each at a carrier offset of 0: only the end that comes early, or the reference,
    tells. Nothing wrong is counted, and every frame is marked."""
    counts = (4, 8, 12, 40, 4, 8)
    case, _ = torn(tmp_path, counts=counts, shares=[0.3] * 6, snr_db=25.0, cfo_hz=0.0)
    columns = case.columns
    assert np.all(columns["marks"] & Mark.SAMPLES_LOST)
    assert columns["bit_errors"].sum() <= 2
    assert np.all(columns["bits_erased"] > 1000)


def test_a_loss_ahead_of_the_sync_section_is_mended_backwards(tmp_path):
    """Payload on both sides of the known symbols."""
    sections = payload_section(400) + SYNC + IN_TURN + payload_section(400)
    link = make_link(antennas=4, sections=sections)
    counts, shares = (1, 5, 7, 30, 2, 102), (0.1, 0.2, 0.3, 0.15, 0.8, 0.9)
    case, _ = torn(tmp_path, link, counts, shares, snr_db=25.0)
    starts = case.capture.truth.recorded_starts
    f = np.argmin(np.abs(case.columns["start_sample"][:, None] - starts), axis=1)
    columns = case.columns
    assert np.all(columns["marks"] & Mark.SAMPLES_LOST)
    right = columns["samples_lost"] == np.array(counts)[f]
    assert right.sum() >= 5
    assert np.all(np.abs(columns["start_sample"] - starts[f])[right] < 1.0)
    assert columns["bit_errors"].sum() <= 2
    assert np.median(columns["bits_compared"][right]) > 0.9 * link.payload.n_bits


def test_two_losses_in_a_frame_are_marked_and_mostly_left_out(tmp_path):
    """The second loss keeps the first one's number from being told: what follows is left out. Where
    it is told all the same, it may be wrong: in one of the eight frames."""
    choices = {**CHOICES, "samples_per_symbol": 4.0, "frames": 8, "snr_db": 25.0}
    first = losses_in_frames(LINK, [3, 5, 6, 7] * 2, [0.3] * 8, **choices)
    second = losses_in_frames(LINK, [5, 2, 9, 3] * 2, [0.6, 0.5] * 4, **choices)
    case = measured(tmp_path, LINK, losses=Losses(at=first + second, marked=False), **choices)
    assert np.all(case.columns["marks"] & Mark.SAMPLES_LOST)
    assert np.sum(case.columns["bit_errors"] > 2) <= 1
    assert case.summary["lost_inside_frames"]["frames"] == 8


def test_a_frame_whose_rest_is_lost_counts_what_came_before(tmp_path):
    """1,000 samples: more than was left of the frame. Silence follows, as no fading makes it. What
    looks for interferers comes first, and may take such a frame for its own: one of the four."""
    case, _ = torn(
        tmp_path, counts=[1000] * 4, shares=[0.8, 0.85, 0.9, 0.82], snr_db=25.0, spacing=300.0
    )
    torn_ones = (case.columns["marks"] & Mark.SAMPLES_LOST) > 0
    assert torn_ones.sum() >= 3
    assert np.all(case.columns["marks"])
    assert case.columns["bit_errors"][torn_ones].sum() <= 2
    assert np.median(case.columns["bits_compared"][torn_ones]) > 0.6 * LINK.payload.n_bits


@pytest.mark.nojit
def test_symmetry_of_codebooks():
    for name, fold in (("BPSK", 2), ("QPSK", 4), ("8PSK", 8), ("16QAM", 4)):
        assert symmetry(make_link(constellation=name).codebook.vectors) == fold
    assert symmetry(make_link(constellation=None).codebook.vectors) == 1
