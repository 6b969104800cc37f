"""Frame layout against hand-written expectations."""

import numpy as np
import pytest
from links import base, parsed

from spatiq.errors import InputError
from spatiq.link.layout import Period

LIST = {"type": "list", "symbols": [1, [0, 1], [-2, 0]]}


def layout_of(*sections, antennas=3):
    """Layout of a frame that ends in a sync section of two symbols."""
    tables = base()
    tables["air"]["antennas"] = antennas
    tables["modulation"] = {"scheme": "space-shift-keying", "antenna_order": [0, 1]}
    sync = {"kind": "sync", "sequence": {"type": "list", "symbols": [1, 1]}, "antennas": [0]}
    tables["frame"] = {"section": [*sections, sync]}
    if any(s["kind"] == "payload" for s in sections):
        tables["payload"] = {"field": [{"type": "data", "bits": "rest"}]}
    else:
        del tables["payload"]
    return parsed(tables).layout


@pytest.mark.nojit
def test_in_turn_sends_the_round_again():
    section = {"kind": "pilots", "sequence": LIST, "antennas": [2, 0], "send": "in-turn"}
    layout = layout_of({**section, "repeat": 2})
    expected = np.zeros((12, 3), complex)
    for start, antenna in [(0, 2), (3, 0), (6, 2), (9, 0)]:
        expected[start : start + 3, antenna] = [1, 1j, -2]
    np.testing.assert_array_equal(layout.known[:12], expected)
    assert (layout.kind[:12] == Period.PILOT).all()
    assert [(s.kind, s.start, s.stop) for s in layout.sections] == [
        ("pilots", 0, 12),
        ("sync", 12, 14),
    ]
    assert layout.sync.start == 12


@pytest.mark.nojit
def test_together_with_cover_and_shift():
    section = {
        "kind": "pilots",
        "sequence": {**LIST, "cyclic_shift": 1, "length": 4},
        "antennas": [1, 2],
        "send": "together",
        "repeat": 2,
        "cover": [[1, [0, 1]], [-1, 0]],
        "antenna_shift": [0, 2],
        "power_db": 20.0,
    }
    layout = layout_of(section)
    # Shift 1: i, -2, 1, i. Shift 3 (= 0): 1, i, -2, 1. Amplitude 10.
    first = 10 * np.array([1j, -2, 1, 1j])
    second = 10 * np.array([1, 1j, -2, 1])
    expected = np.zeros((8, 3), complex)
    expected[:4, 1], expected[4:, 1] = first, 1j * first
    expected[:4, 2] = -second
    np.testing.assert_allclose(layout.known[:8], expected, rtol=1e-15)


def test_sequence_longer_than_its_period_goes_on_cyclically():
    section = {"kind": "pilots", "sequence": {**LIST, "length": 7}, "antennas": [0]}
    np.testing.assert_array_equal(layout_of(section).known[:7, 0], [1, 1j, -2, 1, 1j, -2, 1])


def test_interspersed_symbols_rotate_over_antennas_and_restart_in_each_section():
    section = {
        "kind": "payload",
        "symbols": 8,
        "power_db": 20.0,
        "known": {"every": 2, "first": 1, "sequence": LIST, "antennas": [2, 1]},
    }
    layout = layout_of(section, {"kind": "silence", "symbols": 2}, section)
    expected = np.zeros((8, 3), complex)
    expected[1, 2], expected[3, 1], expected[5, 2], expected[7, 1] = 10, 10j, -20, 10
    np.testing.assert_allclose(layout.known[:8], expected, rtol=1e-15)
    np.testing.assert_allclose(layout.known[10:18], expected, rtol=1e-15)
    assert layout.kind[:11].tolist() == [4, 3, 4, 3, 4, 3, 4, 3, 0, 0, 4]
    assert layout.payload_index.tolist() == [0, 2, 4, 6, 10, 12, 14, 16]
    np.testing.assert_allclose(layout.payload_amplitude, 10.0, rtol=1e-15)


def test_payload_amplitude_follows_its_section():
    plain = {"kind": "payload", "symbols": 2}
    layout = layout_of(plain, {**plain, "power_db": -6.0})
    np.testing.assert_allclose(layout.payload_amplitude, [1, 1, 10**-0.3, 10**-0.3], rtol=1e-15)
    assert not layout.known[:4].any()


def test_together_sends_full_power_from_each_antenna():
    section = {"kind": "pilots", "sequence": {"type": "m-sequence", "order": 3}, "send": "together"}
    layout = layout_of(section)
    np.testing.assert_array_equal(np.sum(np.abs(layout.known[:7]) ** 2, axis=1), 3.0)


def test_section_that_sends_nothing_is_refused():
    zeros = {"kind": "pilots", "sequence": {"type": "list", "symbols": [0, 0]}, "antennas": [0]}
    with pytest.raises(InputError, match=r"section\[0\]\.sequence: found symbols that are all"):
        layout_of(zeros)


def test_memory_is_bounded_by_symbols_times_antennas():
    with pytest.raises(InputError, match=r"section\[0\]: .*at most 500000 with 64 antennas"):
        layout_of({"kind": "silence", "symbols": 500_001}, antennas=64)


def test_known_symbols_leave_room_for_a_word():
    section = {"kind": "payload", "symbols": 1, "known": {"every": 2, "sequence": LIST}}
    with pytest.raises(InputError, match=r"section\[0\]\.symbols: found 1; expected room"):
        layout_of(section)


def test_sync_section_must_leave_the_search_something_to_compare():
    sync = {"kind": "sync", "sequence": {"type": "list", "symbols": [1]}, "send": "in-turn"}
    with pytest.raises(InputError, match=r"section\[0\]: found 3 symbol periods; .*least 4, as 3"):
        layout_of(sync)
    # All antennas alike: one degree of freedom in two periods.
    layout_of({**sync, "send": "together", "repeat": 2})
