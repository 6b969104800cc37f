"""Every complex datatype, both byte orders: against an oracle and against the sigmf library."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import sigmf
from sigmf_files import LAYOUTS, document, oracle, put, random_components

from spatiq.errors import InputError
from spatiq.recording import open_recording
from spatiq.recording.datatypes import COMPLEX_DATATYPES, parse_datatype
from spatiq.recording.kernels import convert_floats, convert_integers

# complex64 has 24 bits: an exact value v is kept to half a unit in the last place.
HALF_ULP = 2.0**-24


def test_the_list_is_the_standards() -> None:
    # SigMF 1.2, "dataset format": c or r, the component, byte order if wider than a byte.
    assert sorted(COMPLEX_DATATYPES) == sorted(LAYOUTS)


@pytest.mark.nojit
@pytest.mark.parametrize("channels", [1, 2, 5])
@pytest.mark.parametrize("datatype", LAYOUTS)
def test_samples_and_clipping_equal_the_oracle(
    tmp_path: Path, datatype: str, channels: int
) -> None:
    raw = random_components(datatype, 301, channels, seed=channels)
    path = put(tmp_path, "x", document(datatype, channels), raw.tobytes())
    recording = open_recording(path)
    (block,) = recording.blocks()
    expected = oracle(raw)
    assert block.samples.dtype == np.complex64
    assert block.samples.flags.c_contiguous
    for part in ("real", "imag"):
        error = np.abs(getattr(block.samples, part) - getattr(expected, part))
        assert np.all(error <= HALF_ULP * np.abs(getattr(expected, part)))
    ends = np.zeros(raw.shape, bool)
    if raw.dtype.kind in "iu":
        ends = (raw == np.iinfo(raw.dtype).min) | (raw == np.iinfo(raw.dtype).max)
        assert ends.any()
    assert block.clipped.tolist() == ends.any(axis=2).sum(axis=0).tolist()
    assert recording.clipping_known == (raw.dtype.kind in "iu")
    assert block.invalid.tolist() == [0] * channels


@pytest.mark.parametrize("channels", [1, 3])
@pytest.mark.parametrize("datatype", LAYOUTS)
def test_the_library_reads_the_same(tmp_path: Path, datatype: str, channels: int) -> None:
    raw = random_components(datatype, 97, channels, seed=3)
    path = put(tmp_path, "x", document(datatype, channels), raw.tobytes())
    theirs = np.atleast_2d(sigmf.fromfile(str(path)).read_samples().T)
    (block,) = open_recording(path).blocks()
    # It narrows 32- and 64-bit components to single precision before it scales: one more rounding;
    # for unsigned 32 bits before it takes the offset off, where half a unit is 2^-24 of full scale.
    atol = 2 * HALF_ULP if datatype.startswith("cu32") else 0.0
    np.testing.assert_allclose(block.samples, theirs, rtol=4 * HALF_ULP, atol=atol)


@pytest.mark.parametrize("datatype", ["ci16_le", "cu16_be", "ci32_le", "cf32_le", "cf64_be"])
def test_full_scale_is_a_setting(tmp_path: Path, datatype: str) -> None:
    raw = random_components(datatype, 64, 2)
    path = put(tmp_path, "x", document(datatype, 2), raw.tobytes())
    (block,) = open_recording(path, full_scale=1500.0).blocks()
    # The reciprocal and the product round once each.
    np.testing.assert_allclose(block.samples, oracle(raw, 1500.0), rtol=4 * HALF_ULP)


@pytest.mark.parametrize(
    ("full_scale", "clipped"),
    [
        (None, [-32768, 32767]),
        (2048, [-32768, -2049, -2048, 2047, 2048, 32767]),
        (2000, [-32768, -2049, -2048, 2047, 2048, 32767]),
        (2047, [-32768, -2049, -2048, 2047, 2048, 32767]),
        (2048.5, [-32768, -2049, 32767]),
        (1e6, [-32768, 32767]),
    ],
)
@pytest.mark.nojit
def test_clipping_is_counted_at_the_converters_range(
    tmp_path: Path, full_scale: float | None, clipped: list[int]
) -> None:
    values = [-32768, -2049, -2048, -1999, 0, 1999, 2046, 2047, 2048, 32767]
    if full_scale == 2000:
        values = [v for v in values if abs(v) != 2046]
    raw = np.zeros((len(values), 1, 2), "<i2")
    for component in (0, 1):
        raw[:] = 0
        raw[:, 0, component] = values
        path = put(tmp_path, "x", document(), raw.tobytes())
        recording = open_recording(path, full_scale=full_scale)
        found = [v for v, b in zip(values, recording.blocks(1), strict=True) if b.clipped[0]]
        assert found == clipped


@pytest.mark.nojit
@pytest.mark.parametrize("datatype", ["cf32_le", "cf64_be"])
def test_floats_that_are_not_finite_are_counted_and_kept(tmp_path: Path, datatype: str) -> None:
    raw = random_components(datatype, 10, 2)
    raw[1, 0, 0] = np.nan
    raw[1, 0, 1] = np.inf
    raw[4, 1, 1] = -np.inf
    path = put(tmp_path, "x", document(datatype, 2), raw.tobytes())
    (block,) = open_recording(path).blocks()
    assert block.invalid.tolist() == [1, 1]
    assert np.isnan(block.samples[0, 1].real)
    assert block.samples[1, 4].imag == -np.inf


@pytest.mark.nojit
def test_integer_kernel_equals_numpy_over_several_runs() -> None:
    rng = np.random.default_rng(5)
    for code, work in (("i1", "f4"), ("u2", "f4"), ("i4", "f8"), ("u4", "f8")):
        limits = np.iinfo(code)
        raw = rng.integers(limits.min, limits.max, (4099, 2, 2), np.int64, True).astype(code)
        low, high = np.quantile(raw, [0.1, 0.8]).astype(np.int64)
        rule = np.array([3, 0.125, low, high], work)
        out = np.full((2, 4099, 2), np.nan, np.float32)
        clipped = np.array([7, 0], np.int64)
        convert_integers(raw, rule, out, clipped)
        wide = raw.astype(np.float64)
        np.testing.assert_array_equal(
            out, ((wide - 3) * 0.125).astype(np.float32).transpose(1, 0, 2)
        )
        hit = ((wide <= rule[2]) | (wide >= rule[3])).any(axis=2).sum(axis=0)
        assert (clipped - [7, 0]).tolist() == hit.tolist()


@pytest.mark.nojit
def test_float_kernel_equals_numpy_over_several_runs() -> None:
    rng = np.random.default_rng(6)
    for code in ("f4", "f8"):
        raw = rng.standard_normal((2500, 3, 2)).astype(code)
        raw[2400, 2, 1] = np.nan
        out = np.zeros((3, 2500, 2), np.float32)
        invalid = np.zeros(3, np.int64)
        convert_floats(raw, np.array([0.5], code), out, invalid)
        np.testing.assert_array_equal(
            out, (raw * raw.dtype.type(0.5)).astype("f4").transpose(1, 0, 2)
        )
        assert invalid.tolist() == [0, 0, 1]


@pytest.mark.parametrize("value", [0, -1.0, np.nan, np.inf, "1", True])
def test_full_scale_of_no_use_is_refused(value: float) -> None:
    with pytest.raises(InputError, match=r"^full scale: found .*; expected a number 1e-30"):
        parse_datatype("ci16_le", "x", value)
