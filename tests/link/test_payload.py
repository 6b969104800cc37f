"""Payload: encode -> descramble -> fields, masks, reference, counters, check bits."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from links import base, parsed

from spatiq.errors import InputError
from spatiq.signal.crc import CATALOGUE
from spatiq.signal.prbs import NAMES, prbs


def payload_of(fields, scrambler=None, symbols=100, folder=None):
    """Payload of 2 bits a word."""
    tables = base()
    tables["modulation"] = {"scheme": "space-shift-keying"}
    tables["frame"]["section"][3] = {"kind": "payload", "symbols": symbols}
    del tables["frame"]["period_symbols"]
    tables["payload"] = {"field": fields}
    if scrambler is not None:
        tables["payload"]["scrambler"] = scrambler
    return parsed(tables, folder).payload


CONTINUATION = st.sampled_from(["restart", "running"])
PLAIN_FIELD = st.one_of(
    st.builds(
        lambda bits, order, start: {
            "type": "counter",
            "bits": bits,
            "order": order,
            "start": start % 2**bits,
        },
        st.integers(1, 62),
        st.sampled_from(["msb-first", "lsb-first"]),
        st.integers(0, 2**62 - 1),
    ),
    st.builds(
        lambda name, inverted, bits, continuation: {
            "type": "prbs",
            "name": name,
            "inverted": inverted,
            "bits": bits,
            "continuation": continuation,
        },
        st.sampled_from(NAMES),
        st.booleans(),
        st.integers(1, 80),
        CONTINUATION,
    ),
    st.builds(
        lambda value: {"type": "fixed", "value": value}, st.text("01", min_size=1, max_size=30)
    ),
    st.builds(lambda bits: {"type": "data", "bits": bits}, st.integers(1, 50)),
)
CHECKED = [name for name, crc in CATALOGUE.items() if not crc.refin]
SCRAMBLER = st.sampled_from(
    [
        None,
        {"type": "additive", "taps": [7, 4], "seed": 1},
        {"type": "gold-3gpp", "c_init": 12345},
        {"type": "self-synchronising", "taps": [23, 18], "state": 99},
    ]
)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(PLAIN_FIELD, min_size=1, max_size=5),
    st.sampled_from(CHECKED),
    SCRAMBLER,
    st.lists(st.integers(0, 2**62 - 1), min_size=1, max_size=4),
    st.integers(0, 2**32 - 1),
)
def test_round_trip(fields, check, scrambler, numbers, seed):
    payload = payload_of([*fields, {"type": "crc", "name": check}], scrambler, symbols=300)
    rng = np.random.default_rng(seed)
    data = rng.integers(0, 2, (len(numbers), payload.data_bits), np.uint8)
    frames = np.array(numbers)
    sent = payload.encode(frames, data)
    plain = payload.descramble(sent)
    assert sent.shape == plain.shape == (len(numbers), 600)
    spans = payload.fields
    assert spans[0].start == 0 and spans[-1].stop == 600
    assert all(a.stop == b.start for a, b in itertools.pairwise(spans))
    got = [plain[:, s.start : s.stop] for s in spans if s.type == "data"]
    np.testing.assert_array_equal(np.concatenate([np.zeros((len(numbers), 0)), *got], 1), data)
    assert payload.crc_ok(plain).all()
    reference, mask = payload.reference(frames), payload.reference_mask
    np.testing.assert_array_equal(reference[:, mask], plain[:, mask])
    assert not reference[:, ~mask].any()
    counters = [f for f in fields if f["type"] == "counter"]
    if counters:
        wanted = [(counters[0]["start"] + n) % 2 ** counters[0]["bits"] for n in numbers]
        assert payload.counter(plain).tolist() == wanted
    else:
        assert payload.counter(plain) is None


@pytest.mark.nojit
def test_running_prbs_goes_on_where_the_last_frame_ended():
    field = {"type": "prbs", "name": "PRBS23", "bits": 200, "continuation": "running"}
    payload = payload_of([field])
    bits = payload.encode(np.arange(10)).reshape(-1)
    np.testing.assert_array_equal(bits, prbs("PRBS23").bits(0, 2000))
    far = 2**61
    start = far * 200 % prbs("PRBS23").period
    np.testing.assert_array_equal(
        payload.encode(np.array([far]))[0], prbs("PRBS23").bits(start, 200)
    )
    assert payload.running is payload.fields[0]
    assert payload.frame_dependent and payload.has_reference


@pytest.mark.nojit
def test_file_is_taken_cyclically_msb_first(tmp_path):
    (tmp_path / "three").write_bytes(b"\x80\x01\xf0")
    bits = [int(c) for c in "100000000000000111110000"]
    field = {"type": "file", "file": "three", "bits": 10, "continuation": "running"}
    payload = payload_of([field, {"type": "data", "bits": "rest"}], folder=tmp_path)
    data = np.zeros((5, payload.data_bits), np.uint8)
    plain = payload.encode(np.arange(5), data)[:, :10]
    assert plain.reshape(-1).tolist() == (bits * 3)[:50]
    restart = payload_of([{**field, "continuation": "restart"}], folder=tmp_path)
    assert (restart.encode(np.arange(3))[:, :10] == bits[:10]).all()
    assert restart.running is None and not restart.frame_dependent


@pytest.mark.nojit
def test_masks_tell_counted_bits_from_bits_that_follow():
    payload = payload_of(
        [
            {"type": "counter", "bits": 8},
            {"type": "fixed", "value": "10"},
            {"type": "crc", "name": "CRC-8/SMBUS"},
            {"type": "data", "bits": 5},
            {"type": "crc", "name": "CRC-8/SMBUS", "covers": [3]},
            {"type": "crc", "name": "CRC-8/SMBUS", "covers": [4]},
            {"type": "crc", "name": "CRC-8/SMBUS", "covers": [2, 1]},
        ]
    )
    known = "".join("x" if b else "." for b in payload.known_mask)
    follows = "".join("x" if b else "." for b in payload.reference_mask)
    assert known == "." * 8 + "xx" + "." * 190  # padding is no reference
    assert follows == "x" * 18 + "." * 21 + "x" * 161
    assert payload.fields[-1].padding
    assert payload.data_bits == 5


def test_counter_bit_order_by_hand():
    fields = [{"type": "counter", "bits": 4, "start": 14}]
    plain = payload_of(fields).encode(np.arange(4))
    assert plain[:, :4].tolist() == [[1, 1, 1, 0], [1, 1, 1, 1], [0, 0, 0, 0], [0, 0, 0, 1]]
    fields[0]["order"] = "lsb-first"
    assert payload_of(fields).encode(np.arange(2))[:, :4].tolist() == [[0, 1, 1, 1], [1, 1, 1, 1]]


def test_check_fails_on_any_flipped_covered_bit():
    fields = [
        {"type": "counter", "bits": 16},
        {"type": "crc", "name": "CRC-32"},
        {"type": "data", "bits": 4},
    ]
    payload = payload_of(fields)
    plain = payload.encode(np.zeros(52, int), np.zeros((52, 4), np.uint8))
    flipped = plain.copy()
    flipped[np.arange(52), np.arange(52)] ^= 1
    # Bits 0-47 are covered or check bits, 48-51 are data that no check covers.
    assert payload.crc_ok(flipped).tolist() == [False] * 48 + [True] * 4


def test_arguments_are_checked():
    payload = payload_of([{"type": "data", "bits": 3}])
    with pytest.raises(InputError, match="data bits: found nothing"):
        payload.encode([0])
    with pytest.raises(InputError, match=r"data bits: found shape \(1, 2\)"):
        payload.encode([0], [[0, 1]])
    with pytest.raises(InputError, match="data bits: found another value"):
        payload.encode([0], [[0, 1, 2]])
    with pytest.raises(InputError, match="frame numbers: found -1"):
        payload.encode([-1], [[0, 0, 0]])
    with pytest.raises(InputError, match="frame numbers: found float64"):
        payload.encode([0.5], [[0, 0, 0]])
    with pytest.raises(InputError, match=r"bits: found shape \(1, 3\)"):
        payload.descramble([[0, 1, 1]])
    assert payload.crc_ok(np.zeros((1, 200), np.uint8)) is None
