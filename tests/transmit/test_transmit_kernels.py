"""Kernels and splitters against plain NumPy."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from transmit_links import make_link

from spatiq.errors import InputError
from spatiq.signal.pulses import root_raised_cosine
from spatiq.transmit.front_end import Context, begin_all
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.noise import Noise
from spatiq.transmit.pulse_table import pulse_table
from spatiq.transmit.quantisation import Converter, round_to_steps
from spatiq.transmit.randomness import Purpose, generator
from spatiq.transmit.shaping import FrameStream, add_frames, reblock
from spatiq.transmit.simulation import simulate


@pytest.mark.nojit
@settings(deadline=None, max_examples=30)
@given(
    start=st.floats(-60, 160),
    offset=st.integers(-5, 200),
    count=st.integers(1, 70),
    sps=st.floats(1, 9),
    step=st.floats(-3, 3),
    angle=st.floats(-3, 3),
)
def test_added_frames(start, offset, count, sps, step, angle):
    """Any chunk of any frame, turned by any carrier, against the defining sum.

    Edges of the pulse are kept off the samples by an irrational shift of the start.
    """
    start += np.pi * 1e-3
    pulse = root_raised_cosine(0.3, 6)
    rng = np.random.default_rng(1)
    symbols = (rng.standard_normal((1, 9, 2)) + 1j * rng.standard_normal((1, 9, 2))).astype(
        np.complex64
    )
    symbols[0, 4, 1] = 0
    table = pulse_table(pulse, sps)
    out = np.ones((2, count), np.complex64)
    add_frames(
        out,
        offset,
        symbols,
        np.array([start]),
        table.spacing,
        table.rows,
        table.before,
        table.reach,
        np.array([step]),
        np.array([angle]),
        np.empty((2, 2, count), np.float32),
    )
    n = offset + np.arange(count)
    times = n[None, :] - start - sps * np.arange(9)[:, None]
    near_edge = np.abs(np.abs(times) - 3 * sps) < 2e-6
    taps = pulse.samples(times / sps, sps) / np.sqrt(sps)
    expected = 1 + (symbols[0].T @ taps) * np.exp(1j * (angle + step * (n - start)))
    good = ~near_edge.any(axis=0)
    np.testing.assert_allclose(out[:, good], expected[:, good], atol=2e-5)


@pytest.mark.nojit
def test_rounding():
    """Against NumPy: halves to even, range -1 .. 1 - 1/steps, a clipped sample counted once."""
    rng = np.random.default_rng(2)
    values = rng.normal(0, 0.6, (3, 2000)).astype(np.float32)
    values[0, :4] = [0.5 / 128, 1.5 / 128, 127.4 / 128, -128.4 / 128]
    levels = np.rint(values.astype(float) * 128)
    beyond = (levels > 127) | (levels < -128)
    expected = np.clip(levels, -128, 127) / 128
    clipped = np.zeros(3, np.int64)
    round_to_steps(values, np.float32(128), clipped)
    assert np.array_equal(values, expected)
    assert np.array_equal(clipped, beyond.reshape(3, -1, 2).any(axis=2).sum(axis=1))


@pytest.mark.nojit
def test_genie_symbols():
    """Matched filter and carrier removal against NumPy in double precision; a cut-off frame too."""
    link = make_link(payload=5, sync_order=2)
    made = simulate(link, samples_per_symbol=3.3, frames=2, cfo_hz=5e3, clock_ppm=50, lead_out=0)
    truth, samples = made.truth, made.samples()
    n = np.arange(made.n_samples)
    expected = np.zeros((2, link.layout.length, 2), complex)
    for f in range(2):
        turn = truth.phase[f] + 2 * np.pi * truth.cfo_hz[f] * (n - truth.starts[f]) / 3.3e6
        for k in range(link.layout.length):
            times = (n - truth.starts[f] - k * truth.spacing) / truth.spacing
            taps = link.pulse.samples(times, 3.3) / np.sqrt(3.3)
            expected[f, k] = (samples * np.exp(-1j * turn)) @ taps
    np.testing.assert_allclose(genie_symbols(truth, samples), expected, atol=1e-5)
    np.testing.assert_allclose(genie_symbols(truth, samples, 1, 2), expected[1:], atol=1e-5)
    with pytest.raises(InputError, match=r"\(2, n\)"):
        genie_symbols(truth, samples[:1])


@given(st.lists(st.integers(0, 40), max_size=12), st.integers(1, 50))
def test_reblock(lengths, block_size):
    whole = np.arange(2 * sum(lengths)).reshape(2, -1).astype(np.complex64)
    cuts = np.cumsum([0, *lengths])
    pieces = (whole[:, a:b] for a, b in pairwise(cuts))
    blocks = list(reblock(pieces, block_size))
    assert all(block.shape[1] == block_size for block in blocks[:-1])
    assert all(0 < block.shape[1] <= block_size for block in blocks)
    assert np.array_equal(np.concatenate([whole[:, :0], *blocks], axis=1), whole)


def test_groups_do_not_change_samples(monkeypatch):
    """Symbols are made in groups of frames; a group of one frame gives the same samples."""
    link = make_link()
    made = simulate(link, samples_per_symbol=4, frames=40, seed=1)
    whole = made.samples()
    monkeypatch.setattr("spatiq.transmit.shaping.GROUP_VALUES", 1)
    assert np.array_equal(made.samples(), whole)


def test_groups_are_bounded():
    """However many frames there are, at most two groups of symbols are held."""
    asked = []

    def symbols(first, stop):
        asked.append((first, stop))
        return np.ones((stop - first, 10, 1), np.complex64)

    frames = 200_000
    table = pulse_table(root_raised_cosine(0.3, 6), 2.0)
    starts = 20.0 * np.arange(frames)
    zeros = np.zeros(frames)
    stream = FrameStream(table, starts, 10, 1, symbols, zeros, zeros)
    for first in range(0, 20 * frames, 1 << 16):
        stream.chunk(first, 1 << 16)
    assert max(stop - first for first, stop in asked) == stream.group_frames < frames
    assert asked == sorted(set(asked)), "each group is made once, in order"
    assert len(stream._groups) == 2


class Offset:
    """A constant added, as an example of a front-end impairment of one's own."""

    def begin(self, context: Context):
        def stage(samples, first):
            samples += np.complex64(0.25)
            return samples

        return stage


def test_impairments_are_applied_in_order():
    link = make_link()
    choices = {"samples_per_symbol": 4, "frames": 5, "datatype": "ci8", "seed": 3}
    plain = simulate(link, **choices).samples()
    moved = simulate(link, impairments=[Offset()], **choices).samples()
    # The offset is a whole number of converter steps: added before the converter, it is exact
    # wherever the converter does not clip.
    assert np.array_equal(moved[moved.real < 0.99], plain[moved.real < 0.99] + np.float32(0.25))


def test_each_place_has_its_own_random_numbers():
    stages = begin_all([Noise(1.0), Noise(1.0)], 1e6, 1, seed=4)
    first, second = (stage(np.zeros((1, 5000), np.complex64), 0) for stage in stages)
    assert np.abs(np.mean(first * second.conj())) < 5 / np.sqrt(5000)
    assert Converter(8).bits == 8
    again = generator(4, Purpose.FRONT_END, 0, 0).standard_normal(3)
    assert not np.array_equal(again, generator(4, Purpose.FRONT_END, 0, 1).standard_normal(3))


def test_noise_refuses_a_negative_variance():
    with pytest.raises(InputError, match="variance"):
        Noise(-1.0).begin(Context(1.0, 1, 0, 0))
