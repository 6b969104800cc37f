"""What real producers write and the standard does not: accepted, each with a warning."""

from __future__ import annotations

import hashlib
import json
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sigmf_files import counting, document, put

from spatiq.errors import InputError
from spatiq.recording import open_recording
from spatiq.recording.times import Instant, parse_time

DATA = counting(50).tobytes()


def warnings_of(folder: Path, meta: dict[str, Any] | bytes) -> list[str]:
    recording = open_recording(put(folder, "x", meta, DATA))
    start = f"{folder / 'x.sigmf-meta'}: "
    assert all(w.startswith(start) for w in recording.warnings)
    return [w.removeprefix(start) for w in recording.warnings]


def test_a_clean_recording_has_no_warning(tmp_path: Path) -> None:
    meta = document(core_sha512=hashlib.sha512(DATA).hexdigest().upper())
    meta["annotations"] = [{"core:sample_start": 3}, {"core:sample_start": 9}]
    meta["global"]["core:extensions"] = [
        {"name": "capture_details", "version": "1.0.0", "optional": False},
        {"name": "lab", "version": "1.0.0", "optional": True},
    ]
    meta["global"]["lab:note"] = 1
    assert warnings_of(tmp_path, meta) == []


@pytest.mark.parametrize("version", ["1.0", "v1.0.0", "0.0.2", "2.0.0"])
def test_versions(tmp_path: Path, version: str) -> None:
    assert warnings_of(tmp_path, document(core_version=version)) == [
        f"global.core:version is '{version}'; read as version 1"
    ]


def test_missing_version(tmp_path: Path) -> None:
    found = warnings_of(tmp_path, document(core_version=None))
    assert found == ["global.core:version is missing"]


def test_frequency_and_time_in_global(tmp_path: Path) -> None:
    meta = document(
        core_frequency=2.4e9,
        core_datetime="2030-03-05T16:50:27Z",
        captures=[{"core:sample_start": 0}, {"core:sample_start": 20, "core:global_index": 30}],
    )
    assert len(warnings_of(tmp_path, meta)) == 2
    recording = open_recording(tmp_path / "x.sigmf-meta")
    assert [s.frequency for s in recording.segments] == [2.4e9, 2.4e9]
    assert recording.carrier_hz == 2.4e9
    # The start time is that of the first sample only.
    assert [str(s.datetime) for s in recording.segments] == ["2030-03-05T16:50:27Z", "None"]


@pytest.mark.parametrize(
    ("text", "instant"),
    [
        ("2025-03-05 16:50:27.349406-05:00", "2025-03-05T21:50:27.349406Z"),
        ("2025-03-05T16:50:27+0130", "2025-03-05T15:20:27Z"),
        ("2025-03-05 16:50:27Z", "2025-03-05T16:50:27Z"),
        ("2025-03-05T16:50:27.5 UTC", "2025-03-05T16:50:27.5Z"),
        ("2025-03-05T16:50:27", "None"),
    ],
)
def test_times(tmp_path: Path, text: str, instant: str) -> None:
    meta = document(captures=[{"core:sample_start": 0, "core:datetime": text}])
    (warning,) = warnings_of(tmp_path, meta)
    assert warning.startswith(f"captures[0].core:datetime '{text}' ")
    assert str(open_recording(tmp_path / "x").segments[0].datetime) == instant


def test_undeclared_namespaces_and_unsorted_annotations(tmp_path: Path) -> None:
    meta = document(**{"maker:gain": 3})
    meta["captures"][0]["other:x"] = 1
    meta["annotations"] = [{"core:sample_start": 9}, {"core:sample_start": 3}]
    assert warnings_of(tmp_path, meta) == [
        "namespaces that are not declared: 'maker', 'other'; ignored",
        "annotations are not sorted",
    ]


def test_missing_arrays_and_byte_order_mark(tmp_path: Path) -> None:
    meta = document()
    del meta["captures"], meta["annotations"]
    text = b"\xef\xbb\xbf" + json.dumps(meta).encode()
    assert warnings_of(tmp_path, text) == [
        "begins with a byte-order mark; ignored",
        "captures is missing; taken as empty",
        "annotations is missing; taken as empty",
    ]


def test_extension_that_does_not_say_whether_it_is_optional(tmp_path: Path) -> None:
    (warning,) = warnings_of(tmp_path, document(core_extensions=[{"name": "lab"}]))
    assert "core:extensions[0] does not say whether it is optional" in warning


def test_metadata_only_with_the_data_present(tmp_path: Path) -> None:
    (warning,) = warnings_of(tmp_path, document(core_metadata_only=True))
    assert warning == "core:metadata_only is set, yet the data are here; ignored"


def test_24_bit_samples_in_32_bit_words(tmp_path: Path) -> None:
    raw = np.array([[[2**23 - 1, -(2**23)]]], "<i4")
    path = put(tmp_path, "x", document("ci32_le"), raw.tobytes())
    (block,) = open_recording(path, full_scale=2**23).blocks()
    assert block.samples[0, 0] == np.complex64(complex(1 - 2.0**-23, -1))
    assert block.clipped.tolist() == [1]


def test_hash_is_checked_on_request(tmp_path: Path) -> None:
    good = document(core_sha512=hashlib.sha512(DATA).hexdigest().upper())
    assert open_recording(put(tmp_path, "x", good, DATA), verify_hash=True).warnings == ()
    path = put(tmp_path, "y", good, DATA[:-4] + b"abcd")
    assert open_recording(path).n_samples == 50
    with pytest.raises(InputError, match=r"y\.sigmf-data: found SHA-512 .* as core:sha512 says"):
        open_recording(path, verify_hash=True)
    none = open_recording(put(tmp_path, "z", document(), DATA), verify_hash=True)
    assert "cannot be verified" in none.warnings[0]


def test_digest_is_that_of_the_data_file(tmp_path: Path) -> None:
    recording = open_recording(put(tmp_path, "x", document(), DATA))
    assert recording.digest() == hashlib.sha256(DATA).hexdigest()


# RFC 3339, section 5.8: its own examples, among them a leap second in two zones.
@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("1985-04-12T23:20:50.52Z", 482196050 + Fraction(52, 100)),
        ("1996-12-19T16:39:57-08:00", Fraction(851042397)),
        ("1990-12-31T23:59:60Z", Fraction(662688000)),
        ("1990-12-31T15:59:60-08:00", Fraction(662688000)),
        ("1937-01-01T12:00:27.87+00:20", -1041337173 + Fraction(87, 100)),
    ],
)
def test_examples_of_rfc_3339(text: str, seconds: Fraction) -> None:
    instant = parse_time(text).instant
    assert instant is not None
    assert instant.seconds == seconds


@given(st.integers(-62_135_596_800, 253_402_300_799), st.integers(0, 15), st.data())
def test_printed_instants_are_read_back_exactly(
    whole: int, digits: int, data: st.DataObject
) -> None:
    part = data.draw(st.integers(0, 10**digits - 1))
    instant = Instant(whole + Fraction(part, 10**digits), digits)
    parsed = parse_time(str(instant))
    assert parsed.instant == instant
    assert parsed.remark == ""


@given(st.text(max_size=40))
def test_any_text_is_a_time_or_a_value_error(text: str) -> None:
    try:
        parsed = parse_time(text)
    except ValueError:
        return
    assert parsed.instant is None or str(parsed.instant).endswith("Z")
