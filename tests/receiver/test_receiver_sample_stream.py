"""Sample stream and spoiled samples: the same samples however the recording is cut into blocks."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from receiver_cases import complex_noise, planes_of

from spatiq.receiver.framing_kernels import cut_window
from spatiq.receiver.sample_stream import SampleStream, to_planes
from spatiq.receiver.spoiled_samples import SpoiledSamples

SAMPLES = complex_noise(np.random.default_rng(1), (2, 5000), 1.0).astype(np.complex64)
START = 300  # file index of the segment's first sample


def blocks_of(samples, size):
    for at in range(0, samples.shape[1], size):
        yield SimpleNamespace(samples=np.ascontiguousarray(samples[:, at : at + size]))


def expected(samples, first, last):
    """Samples first..last-1 of a segment that starts at START, zero outside."""
    padded = np.zeros((samples.shape[0], last - first), np.complex64)
    for i in range(max(first, START), min(last, START + samples.shape[1])):
        padded[:, i - first] = samples[:, i - START]
    return planes_of(padded)


@settings(max_examples=60, derandomize=True)
@given(
    size=st.integers(1, 6000),
    steps=st.lists(st.tuples(st.integers(0, 900), st.integers(0, 400), st.booleans()), max_size=20),
)
def test_any_block_size_gives_the_same_samples(size, steps):
    stream = SampleStream(blocks_of(SAMPLES, size), START, START + 5000, 2)
    first = START - 50
    for forward, length, release in steps:
        first += forward
        got = stream.planes(first, first + length)
        np.testing.assert_array_equal(got, expected(SAMPLES, first, first + length))
        if release:
            stream.release(first)


@pytest.mark.nojit
def test_memory_is_given_back_and_what_was_released_is_refused():
    long = np.zeros((1, 1 << 20), np.complex64)
    stream = SampleStream(blocks_of(long, 1 << 14), 0, 1 << 20, 1)
    for at in range(0, (1 << 20) - 1000, 10_000):
        stream.planes(at, at + 1000)
        stream.release(at)
    assert stream._planes.shape[2] <= 1 << 17
    with pytest.raises(ValueError, match="have been released, asked 5"):
        stream.planes(5, 10)


@pytest.mark.nojit
def test_planes_kernel_copies_parts_and_empties_what_is_not_finite():
    samples = SAMPLES[:, :50].copy()
    samples[0, 7] = complex(np.nan, 1.0)
    samples[1, 8] = complex(2.0, -np.inf)
    planes = np.full((2, 2, 80), 5.0, np.float32)
    assert to_planes(samples, planes, 20) == 2
    samples[0, 7] = samples[1, 8] = 0.0
    np.testing.assert_array_equal(planes[:, :, 20:70], planes_of(samples))
    assert np.all(planes[:, :, :20] == 5.0) and np.all(planes[:, :, 70:] == 5.0)


@settings(max_examples=60, derandomize=True)
@given(
    size=st.integers(1, 700),
    bad=st.sets(st.integers(0, 599), max_size=30),
    first=st.integers(START - 20, START + 620),
    length=st.integers(0, 200),
)
def test_samples_that_are_not_finite_are_told_and_read_as_zero(size, bad, first, length):
    samples = SAMPLES[:, :600].copy()
    for i in bad:
        samples[i % 2, i] = (np.nan, np.inf, 1j * np.inf)[i % 3]
    reach = 25
    spoiled = SpoiledSamples(reach)
    stream = SampleStream(blocks_of(samples, size), START, START + 600, 2, spoiled)
    got = stream.planes(START, START + 600)
    clean = np.where(np.isfinite(samples), samples, 0)
    np.testing.assert_array_equal(got, planes_of(clean))
    # Ranges at least as long as the reach: the only ones that frames ask for.
    last = first + reach + length
    touched = any(first <= START + i <= last for i in bad)
    assert spoiled.within(first, last) == touched
    spoiled.forget(first)
    assert spoiled.within(first, last) == touched


@pytest.mark.nojit
def test_spoiled_runs_are_joined_and_forgotten():
    spoiled = SpoiledSamples(10)
    spoiled.add(np.array([5, 6, 14, 40]))
    spoiled.add(np.array([41, 100]))
    assert spoiled._starts == [5, 40, 100] and spoiled._stops == [15, 42, 101]
    assert not spoiled.within(15, 39.5)
    assert spoiled.within(41, 50) and not spoiled.within(41.5, 99)
    spoiled.forget(50)
    assert spoiled._starts == [100]


@pytest.mark.nojit
def test_cutting_a_window_counts_samples_at_full_scale_once():
    planes = planes_of(SAMPLES[:, :100] * 0.1)
    planes[0, 0, 10] = planes[0, 1, 10] = 1.0  # both parts: one sample
    planes[1, 1, 11] = -1.0
    planes[1, 0, 60] = 1.0  # outside the stretch that counts
    window = np.empty_like(planes)
    assert cut_window(planes, window, -1.0, 0.99, 5, 50) == 2
    np.testing.assert_array_equal(window, planes)
    assert cut_window(planes, window, -np.inf, np.inf, 0, 100) == 0
