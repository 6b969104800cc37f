"""Frames that the frame period says were sent: arithmetic and reasons."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.receiver.expected_frames import FoundStart, lost_between
from spatiq.recording.placement import Segment

SPAN = (0.0, 900.0)


def segments(*parts):
    """(count, global index) of each."""
    made, start = [], 0
    for i, (count, place) in enumerate(parts):
        made.append(Segment(i, start, count, place, None, None))
        start += count
    return tuple(made)


def seen(segment, start):
    return FoundStart(segment, start, start - segment.start + segment.global_index)


@pytest.mark.nojit
def test_frames_between_two_are_spread_evenly():
    (one,) = segments((100_000, 0))
    lost = lost_between([one], seen(one, 50.25), seen(one, 4051.25), 1000.0, SPAN)
    assert [f.start_sample for f in lost] == [1050.5, 2050.75, 3051.0]
    assert {f.reason for f in lost} == {"not found"}


@pytest.mark.nojit
def test_neighbours_have_nothing_between_them():
    (one,) = segments((100_000, 0))
    for distance in (1000.0, 1050.0, 600.0, 400.0, 20.0):
        assert lost_between([one], seen(one, 0.0), seen(one, distance), 1000.0, SPAN) == []


@pytest.mark.nojit
@given(missing=st.integers(0, 20), lost=st.floats(0, 930))
def test_samples_lost_untold_hide_no_frame(missing, lost):
    """Losing samples brings frames nearer: what is missing is counted up to 15/16 of a period."""
    (one,) = segments((100_000, 0))
    end = (missing + 1) * 1000.0 - lost
    listed = lost_between([one], seen(one, 0.0), seen(one, end), 1000.0, SPAN)
    assert len(listed) == missing
    assert all(0 < f.start_sample < end for f in listed)


@pytest.mark.nojit
def test_reasons_at_a_gap():
    first, second = segments((2500, 0), (10_000, 7300))
    # Frames at 0 (seen), 1000, 2000 .. 8000, 9000 (seen): file index of 9000 is 4200.
    lost = lost_between([first, second], seen(first, 0.0), seen(second, 4200.0), 1000.0, SPAN)
    reasons = [f.reason for f in lost]
    assert reasons == [
        "not found",
        "cut off by a gap",
        *["in a gap"] * 4,
        "cut off by a gap",
        "not found",
    ]
    assert [f.segment for f in lost] == [0, 0, 0, 0, 0, 0, 1, 1]
    # Each is placed where the first sample of its segment's count puts it.
    assert [f.start_sample for f in lost] == [1000, 2000, 3000, 4000, 5000, 6000, 2200, 3200]


@given(
    missing=st.integers(0, 40),
    period=st.floats(100, 1e5),
    drift=st.floats(-1e-4, 1e-4),
    begin=st.floats(0, 1e6),
)
@pytest.mark.nojit
def test_any_number_missing_is_counted(missing, period, drift, begin):
    end = begin + (missing + 1) * period * (1 + drift)
    (one,) = segments((int(end) + 10 * int(period), 0))
    lost = lost_between([one], seen(one, begin), seen(one, end), period, (0.0, period / 2))
    assert len(lost) == missing
    for n, frame in enumerate(lost, 1):
        assert frame.start_sample == pytest.approx(begin + n * period * (1 + drift), rel=1e-9)


@pytest.mark.nojit
def test_an_absurd_period_does_not_fill_the_memory():
    (one,) = segments((1 << 40, 0))
    lost = lost_between([one], seen(one, 0.0), seen(one, 1e9), 10.0, SPAN)
    assert len(lost) == 999_999
