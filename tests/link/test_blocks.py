"""Payload in blocks: layout, guards, subcarriers, and what is refused."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from plain_transmitter import PlainTransmitter, manual_text

from spatiq.errors import InputError
from spatiq.link.blocks import FORMS, BlockRun, fill_blocks, take_subcarriers
from spatiq.link.layout import Period
from spatiq.link.loading import parse_link
from spatiq.transmit.frames import frame_vectors

TEXT = """
format = 1
air = {{ antennas = 2, symbol_rate_hz = 1e6 }}
modulation = {{ scheme = "spatial-modulation", constellation = {{ name = "QPSK" }} }}
pulse = {{ shape = "root-raised-cosine", rolloff = 0.25, span_symbols = 16 }}
[[frame.section]]
kind = "sync"
sequence = {{ type = "m-sequence", order = 4 }}
antennas = [0]
[[frame.section]]
kind = "payload"
symbols = {symbols}
power_db = -2
blocks = {{ {blocks} }}
{more}
[[payload.field]]
type = "prbs"
name = "PRBS11"
bits = "rest"
continuation = "running"
"""
CYCLIC = 'form = "cyclic-prefix", length = 8, guard = 3'
PADDED = 'form = "zero-padding", length = 8, guard = 3'
CARRIERS = 'form = "multicarrier", length = 8, guard = 3, subcarriers = [1, 2, 5, 7]'
KNOWN = 'known = {every = 4, sequence = {type = "list", symbols = [1]}}'


def text_of(blocks=CYCLIC, symbols=24, more=""):
    return TEXT.format(blocks=blocks, symbols=symbols, more=more)


@pytest.mark.nojit
@pytest.mark.parametrize(
    "blocks",
    [
        CYCLIC,
        PADDED,
        CARRIERS,
        'form = "multicarrier", length = 12, guard = 0',
        'form = "zero-padding", length = 4, guard = 9',
        'form = "cyclic-prefix", length = 6, guard = 6',
    ],
)
def test_transmitter_written_from_the_manual_agrees(blocks):
    text = text_of(blocks)
    link = parse_link(text)
    transmitter = PlainTransmitter(text, manual_text())
    for n in (0, 1, 12):
        bits = link.payload.encode(np.array([n]))[0]
        assert bits.tolist() == transmitter.sent_bits(n)
        made = frame_vectors(link, np.array([n]))[0]
        np.testing.assert_allclose(made, transmitter.frame(n), atol=1e-12)


@pytest.mark.nojit
def test_layout_of_each_form():
    layout = parse_link(text_of(CYCLIC)).layout
    assert layout.length == 15 + 3 * 11
    kinds = layout.kind[15:26].tolist()
    assert kinds == [Period.PREFIX] * 3 + [Period.PAYLOAD] * 8
    assert layout.payload_index[:9].tolist() == [*range(18, 26), 29]
    padded = parse_link(text_of(PADDED)).layout
    assert padded.kind[15:26].tolist() == [Period.PAYLOAD] * 8 + [Period.SILENCE] * 3
    carriers = parse_link(text_of(CARRIERS)).layout
    assert carriers.multicarrier
    assert carriers.payload_index.tolist() == [
        15 + 3 + block * 11 + f for block in range(3) for f in (1, 2, 5, 7)
    ]
    assert "subcarriers" in parse_link(text_of(CARRIERS)).explain()


@pytest.mark.nojit
def test_prefix_power_and_transform():
    """A prefix is the body's end; U of N subcarriers send U/N of the power (Parseval)."""
    link = parse_link(text_of(CARRIERS, symbols=800))
    (run,) = link.layout.blocks
    frame = frame_vectors(link, np.array([3]))[0]
    np.testing.assert_allclose(
        frame[run.bodies[:, None] - 1 - np.arange(3)], frame[run.periods[:, :-4:-1]]
    )
    power = np.sum(np.abs(frame[run.periods]) ** 2) / run.periods.size
    assert power == pytest.approx(4 / 8 * 10**-0.2)
    words = link.codebook.bits_to_words(link.payload.encode(np.array([3])))[0]
    seen = take_subcarriers(frame, link.layout.blocks)[link.layout.payload_index]
    np.testing.assert_allclose(seen, 10**-0.1 * link.codebook.vectors[words], atol=1e-12)
    back = frame.copy()
    back[run.periods] = take_subcarriers(frame, link.layout.blocks)[run.periods]
    fill_blocks(back[None], link.layout.blocks)
    np.testing.assert_allclose(back, frame, atol=1e-12)


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("choices", "match"),
    [
        ({"symbols": 25}, "multiple of the blocks' length, 8"),
        ({"blocks": 'form = "cyclic-prefix", length = 8, guard = 9'}, "guard"),
        ({"blocks": 'form = "prefix", length = 8, guard = 1'}, "form"),
        ({"blocks": CYCLIC + ", subcarriers = [1]"}, "subcarriers"),
        ({"blocks": CARRIERS.replace("1, 2", "2, 1")}, "ascending"),
        ({"blocks": CARRIERS.replace("7]", "8]")}, "0 to 7"),
        ({"more": KNOWN}, "beside blocks"),
    ],
)  # fmt: skip
def test_refused(choices, match):
    with pytest.raises(InputError, match=match):
        parse_link(text_of(**choices))


@settings(max_examples=80, deadline=None)
@given(st.data())
def test_filled_and_taken_apart_again(data):
    """Words at any slots come back from what is sent, whatever the form; the rest is zero."""
    form = data.draw(st.sampled_from(FORMS))
    length = data.draw(st.integers(2, 20))
    guard = data.draw(st.integers(0, length))
    count, start = data.draw(st.integers(1, 4)), data.draw(st.integers(0, 5))
    slots = np.arange(length)
    if form == "multicarrier":
        chosen = data.draw(st.sets(st.integers(0, length - 1), min_size=1))
        slots = np.array(sorted(chosen))
    run = BlockRun(form, start, count, length, guard, slots)
    periods = start + count * (length + guard) + 3
    words = np.random.default_rng(length).standard_normal((run.payload.size, 2)) + 0j
    frame = np.zeros((periods, 2), complex)
    frame[run.payload] = words
    fill_blocks(frame, [run])
    assert not frame[:start].any()
    assert not frame[start + count * (length + guard) :].any()
    back = take_subcarriers(frame, [run])
    np.testing.assert_allclose(back[run.payload], words, atol=1e-12)
    assert np.sum(np.abs(frame[run.periods]) ** 2) == pytest.approx(np.sum(np.abs(words) ** 2))
