"""Frame numbers: running sequences of every order, counters with and without CRC, lost frames."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from measured_cases import measured, measured_link

from spatiq.metrics.reference_following import ReferenceFollower, fill_between
from spatiq.metrics.reference_search import SIGNIFICANCE, PrbsSearch, agreement
from spatiq.signal.prbs import prbs

ORDERS = ["PRBS7", "PRBS9", "PRBS11", "PRBS15", "PRBS20", "PRBS23", "PRBS29", "PRBS31"]


def running(name, bits='"rest"'):
    return (
        f'[[payload.field]]\ntype = "prbs"\nname = "{name}"\nbits = {bits}\n'
        'continuation = "running"\n'
    )


def counter(bits, order="msb-first", start=0):
    return (
        f'[[payload.field]]\ntype = "counter"\nbits = {bits}\norder = "{order}"\nstart = {start}\n'
    )


CRC = '[[payload.field]]\ntype = "crc"\nname = "CRC-16/3GPP"\n'
DATA = '[[payload.field]]\ntype = "data"\nbits = "rest"\n'
RESTART = '[[payload.field]]\ntype = "prbs"\nname = "PRBS9"\nbits = "rest"\n'


def received(payload, numbers, error_ratio=0.0, seed=1):
    """Plain bits of frames with random bit errors, and whether their CRC passes."""
    numbers = np.asarray(numbers, np.int64)
    rng = np.random.default_rng(seed)
    data = rng.integers(0, 2, (numbers.size, payload.data_bits), np.uint8)
    plain = payload.descramble(payload.encode(numbers, data))
    plain = plain ^ (rng.random(plain.shape) < error_ratio).astype(np.uint8)
    return plain, payload.crc_ok(plain)


def numbered(payload, numbers, error_ratio=0.0, period=None, places=None, batches=1, seed=1):
    """Numbers that a follower gives to frames at places in units of the period."""
    plain, crc = received(payload, numbers, error_ratio, seed)
    frame = period or 1000.0
    follower = ReferenceFollower(payload, period, frame - 2.0)
    if places is None:  # back to back, with room for those that were lost; no time for a new start
        places = np.concatenate([[0], np.cumsum(np.maximum(np.diff(numbers), 1))])
    position = 100.25 + np.asarray(places, float) * frame
    out = []
    for part in np.array_split(np.arange(len(plain)), batches):
        some = follower.number(plain[part], None if crc is None else crc[part], position[part])
        np.testing.assert_array_equal(some.resolved, some.numbers >= 0)
        out.append(some.numbers)
    return np.concatenate(out)


@pytest.mark.parametrize("name", [pytest.param("PRBS7", marks=pytest.mark.nojit), *ORDERS[1:]])
@pytest.mark.parametrize("error_ratio", [0.0, 0.03])
def test_running_sequences_tell_the_number_by_themselves(name, error_ratio):
    """From any first frame, across lost frames; modulo what the sequence repeats after."""
    payload = measured_link(running(name)).payload
    search = PrbsSearch(prbs(name), payload.n_bits)
    sent = np.array([3, 4, 5, 9, 10, 30, 31, 35])
    got = numbered(payload, sent, error_ratio)
    if search.modulus > 40:
        np.testing.assert_array_equal(got, sent)
    np.testing.assert_array_equal((got - sent) % search.modulus, 0)
    assert np.all(np.diff(got) > 0)
    # What is counted against is the sequence as sent in any case.
    np.testing.assert_array_equal(payload.reference(got), payload.reference(sent))


@pytest.mark.parametrize("first", [0, 12_345, 3_000_000_000])
def test_running_prbs31_from_far_into_the_sequence(first):
    payload = measured_link(running("PRBS31")).payload
    modulus = PrbsSearch(prbs("PRBS31"), payload.n_bits).modulus
    sent = first + np.array([0, 1, 2, 700])
    got = numbered(payload, sent)
    np.testing.assert_array_equal((got - sent) % modulus, 0)
    np.testing.assert_array_equal(np.diff(got), np.diff(sent))


@pytest.mark.parametrize("error_ratio", [0.05, 0.1])
def test_many_errors_do_not_lose_the_sequence_once_it_is_found(error_ratio):
    payload = measured_link(running("PRBS23")).payload
    sent = np.arange(50, 120)
    got = numbered(payload, sent, error_ratio)
    known = got >= 0
    np.testing.assert_array_equal(got[known], sent[known])
    assert np.all(known[np.argmax(known) :])
    assert known.any() or error_ratio == 0.1


@pytest.mark.parametrize("batches", [1, 3, 11])
def test_batches_change_nothing(batches):
    payload = measured_link(counter(8) + running("PRBS15", 900) + CRC).payload
    sent = np.concatenate([np.arange(200, 260), np.arange(300, 320)])
    got = numbered(payload, sent, 0.002, batches=batches)
    np.testing.assert_array_equal(got, sent)


@pytest.mark.nojit
@pytest.mark.parametrize("order", ["msb-first", "lsb-first"])
@pytest.mark.parametrize("start", [0, 17])
def test_counter_with_crc(order, start):
    """The counter wraps at 256: numbers go on beyond it; a failed CRC is bridged."""
    payload = measured_link(counter(8, order, start) + DATA + CRC).payload
    sent = np.concatenate([np.arange(100, 130), np.arange(250, 270), [300]])
    got = numbered(payload, sent)
    np.testing.assert_array_equal(got, sent)


@pytest.mark.nojit
def test_counter_with_crc_and_errors():
    """A frame whose CRC fails is numbered by the frames around it, or not at all: never wrongly."""
    payload = measured_link(counter(16) + RESTART.replace('"rest"', "900") + CRC).payload
    sent = np.concatenate([np.arange(10, 200), np.arange(230, 400)])
    got = numbered(payload, sent, 0.001)
    known = got >= 0
    np.testing.assert_array_equal(got[known], sent[known])
    assert known.mean() > 0.95


@pytest.mark.nojit
def test_counter_alone_needs_a_follower():
    payload = measured_link(counter(12) + RESTART).payload
    sent = np.concatenate([np.arange(40, 60), np.arange(90, 110)])
    got = numbered(payload, sent)
    known = got >= 0
    np.testing.assert_array_equal(got[known], sent[known])
    assert known.mean() > 0.9


@pytest.mark.parametrize("missing", [1, 7, 100])
def test_a_period_carries_over_lost_frames(missing):
    payload = measured_link(running("PRBS23"), frame="period_symbols = 500.0").payload
    places = np.concatenate([np.arange(5), 5 + missing + np.arange(5)])
    got = numbered(payload, places + 20, 0.02, period=2000.0, places=places)
    np.testing.assert_array_equal(got, places + 20)


def test_a_transmitter_that_starts_again_is_followed():
    """After frame 60 comes frame 2 of a new run: there was no time for a whole period between."""
    payload = measured_link(running("PRBS11")).payload
    sent = np.concatenate([np.arange(50, 61), np.arange(2, 12)])
    np.testing.assert_array_equal(numbered(payload, sent), sent)


def test_numbers_are_lifted_past_the_last_one_where_time_leaves_room():
    """A counter of 6 bits comes round after 64 frames, while some are lost."""
    payload = measured_link(counter(6) + RESTART + CRC).payload
    sent = np.concatenate([np.arange(50, 60), np.arange(66, 75)])
    got = numbered(payload, sent)
    np.testing.assert_array_equal(got, sent)


def test_a_wrong_number_does_not_stay():
    """One frame with a foreign number far ahead; those after it are right again."""
    payload = measured_link(running("PRBS23")).payload
    sent = np.array([5, 6, 7, 700_000, 9, 10, 11])
    got = numbered(payload, sent, places=np.arange(7))
    np.testing.assert_array_equal(got, sent)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("given_numbers", "filled"),
    [
        ([3, -1, -1, 6], [3, 4, 5, 6]),
        ([3, -1, 6], [3, -1, 6]),  # two numbers for one frame
        ([-1, 4, -1], [-1, 4, -1]),
        ([8, -1, 10, -1, 5], [8, 9, 10, -1, 5]),
    ],
)
def test_frames_without_evidence_take_the_only_numbers_left(given_numbers, filled):
    numbers = np.array(given_numbers)
    fill_between(numbers)
    np.testing.assert_array_equal(numbers, filled)


def test_a_hopeless_frame_is_numbered_by_its_neighbours_across_batches():
    payload = measured_link(running("PRBS23")).payload
    plain, _ = received(payload, np.arange(20, 26))
    plain[3] = np.random.default_rng(2).integers(0, 2, plain.shape[1])
    follower = ReferenceFollower(payload, None, 999.0)
    place = np.arange(6) * 1000.0
    np.testing.assert_array_equal(follower.number(plain[:4], None, place[:4]).numbers[3], -1)
    np.testing.assert_array_equal(follower.number(plain[4:], None, place[4:]).numbers, [24, 25])
    whole = ReferenceFollower(payload, None, 999.0).number(plain, None, place)
    np.testing.assert_array_equal(whole.numbers, np.arange(20, 26))


@pytest.mark.parametrize("name", ["PRBS15", "PRBS23", "PRBS31"])
@pytest.mark.parametrize(("length", "error_ratio"), [(250, 0.08), (1000, 0.1), (1000, 0.2)])
def test_a_number_found_among_errors_is_right(name, length, error_ratio):
    """A register that is wrong in one bit agrees with most of the bits: it must not pass.

    60 frames each; a wrong number is a failure, none is not.
    """
    sequence, rng = prbs(name), np.random.default_rng(7)
    search = PrbsSearch(sequence, length)
    found = 0
    for _ in range(60):
        number = int(rng.integers(0, min(search.modulus, 1_000_000)))
        bits = sequence.bits((number * length) % sequence.period, length)
        got = search.frame_number(bits ^ (rng.random(length) < error_ratio).astype(np.uint8))
        assert got in (None, number)
        found += got is not None
    assert found > 30 or error_ratio == 0.2


def test_foreign_bits_get_no_number():
    """Random bits agree by chance with probability below 1e-9 a frame."""
    payload = measured_link(running("PRBS23")).payload
    rng = np.random.default_rng(5)
    bits = rng.integers(0, 2, (20, payload.n_bits)).astype(np.uint8)
    got = ReferenceFollower(payload, None, 999.0).number(bits, None, np.arange(20) * 1000.0)
    assert np.all(got.numbers == -1) and not got.resolved.any()


@pytest.mark.nojit
def test_nothing_to_number_by_is_resolved_without_numbers():
    payload = measured_link(RESTART).payload
    plain, _ = received(payload, np.arange(4))
    got = ReferenceFollower(payload, None, 999.0).number(plain, None, np.arange(4) * 1000.0)
    assert np.all(got.numbers == -1) and got.resolved.all()


@pytest.mark.nojit
def test_agreement_is_the_binomial_tail():
    assert agreement(0, 10) == pytest.approx(2.0**-10)
    assert agreement(1, 10) == pytest.approx(11 * 2.0**-10)
    assert agreement(0, 30) < SIGNIFICANCE < agreement(0, 29)


@settings(max_examples=40, derandomize=True, deadline=None)
@given(name=st.sampled_from(ORDERS), position=st.integers(0, 2**40), length=st.integers(40, 3000))
def test_position_and_number_are_found_back(name, position, length):
    sequence = prbs(name)
    search = PrbsSearch(sequence, length)
    state = sequence.state_at(position % sequence.period)
    assert search.position(state) == position % sequence.period
    number = position % search.modulus
    bits = sequence.bits((number * length) % sequence.period, length)
    assert search.frame_number(bits) in (number, None if length < sequence.order + 37 else number)


def test_too_few_bits_are_no_evidence():
    search = PrbsSearch(prbs("PRBS31"), 40)
    assert search.frame_number(prbs("PRBS31").bits(400, 40)) is None
    assert search.frame_number(np.zeros(0, np.uint8)) is None


def test_running_sequence_over_the_air(tmp_path):
    """No counter, 10 dB, first frame 77: numbers, and the bits counted against."""
    link = measured_link(running("PRBS31"))
    case = measured(tmp_path, link, frames=40, snr_db=10.0, first_frame=77)
    known = case.columns["frame_number"] >= 0
    assert known.mean() > 0.9
    truth = case.truth.frame_numbers[case.index]
    np.testing.assert_array_equal(case.columns["frame_number"][known], truth[known])
    sent = case.truth.words()[case.index]
    bits = link.codebook.words_to_bits
    wrong = np.count_nonzero(bits(case.words) != bits(sent), axis=1)
    np.testing.assert_array_equal(case.columns["bit_errors"][known], wrong[known])


def test_missing_frames_are_told_by_their_numbers(tmp_path):
    """Without a period: frames 3 and 4 are blanked, the counter says that they were sent."""

    def blank(capture):
        samples = capture.samples().copy()
        first, last = capture.truth.starts[3], capture.truth.starts[5]
        rng = np.random.default_rng(6)
        part = samples[:, int(first) - 40 : int(last) - 40]
        noise = rng.standard_normal((2, *part.shape)) * np.sqrt(capture.truth.N0 / 2)
        part[:] = noise[0] + 1j * noise[1]
        return samples

    link = measured_link(counter(16) + RESTART.replace('"rest"', "900") + CRC)
    case = measured(tmp_path, link, frames=9, snr_db=25.0, samples=blank)
    assert case.columns["frame_number"].tolist() == [0, 1, 2, 5, 6, 7, 8]
    assert [(f.frame_number, f.reason) for f in case.lost] == [(3, "not found"), (4, "not found")]
    expected = case.truth.starts[3:5]
    np.testing.assert_allclose([f.start_sample for f in case.lost], expected, atol=2.0)
    assert case.summary["frames"]["lost_by_reason"] == {"not found": 2}


@pytest.mark.parametrize("scrambler", ["additive", "gold-3gpp", "self-synchronising"])
def test_scrambled_payload(tmp_path, scrambler):
    more = {
        "additive": "taps = [7, 4]\nseed = 127",
        "gold-3gpp": "c_init = 5",
        "self-synchronising": "taps = [43]",
    }[scrambler]
    fields = running("PRBS15") + f'[payload.scrambler]\ntype = "{scrambler}"\n{more}\n'
    case = measured(tmp_path, measured_link(fields), frames=12, snr_db=13.0, first_frame=5)
    known = case.columns["frame_number"] >= 0
    assert known.sum() >= 10
    np.testing.assert_array_equal(case.sent[known], case.truth.words()[case.index][known])
    plain = case.truth.link.payload.descramble
    bits = case.truth.link.codebook.words_to_bits
    sent = case.truth.words()[case.index]
    wrong = np.count_nonzero(plain(bits(case.words)) != plain(bits(sent)), axis=1)
    np.testing.assert_array_equal(case.columns["bit_errors"][known], wrong[known])
