"""Hostile and damaged input: refused in one line that names file, field, found and expected."""

from __future__ import annotations

import gzip
import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sigmf_files import counting, document, put

from spatiq.errors import InputError
from spatiq.recording import jsontext, open_recording
from spatiq.recording.jsontext import parse_metadata
from spatiq.recording.metadata import read_metadata

DATA = counting(10).tobytes()
HEAD = '"core:datatype":"ci16_le","core:version":"1.2.0","core:sample_rate":1e6'


def with_global(text: str) -> str:
    return f'{{"global":{{{HEAD},{text}}},"captures":[{{"core:sample_start":0}}],"annotations":[]}}'


def with_capture(text: str, *more: str) -> str:
    captures = ",".join("{" + t + "}" for t in (text, *more))
    return f'{{"global":{{{HEAD}}},"captures":[{captures}],"annotations":[]}}'


def without(key: str) -> str:
    meta = document()
    del meta["global"][key]
    return json.dumps(meta)


def instead(key: str, value: Any) -> str:
    meta = document()
    meta["global"][key] = value
    return json.dumps(meta)


START = "captures[0].core:sample_start: found {}; expected an integer >= 0"
RATE = "global.core:sample_rate: found {}; expected a finite number 0..1e+12"
NAME = (
    "global.core:dataset: found {}; expected the name of a file in the same folder, "
    "without any folder"
)
CHANNELS = "global.core:num_channels: found {}; expected an integer 1..1024"

# metadata text -> the whole message after the file's name
TABLE: dict[str, tuple[str | bytes, str]] = {
    "empty": ("", "found bad JSON at line 1, column 1 (Expecting value); expected a JSON object"),
    "not json": (
        '{"global": }',
        "found bad JSON at line 1, column 12 (Expecting value); expected a JSON object",
    ),
    "not utf-8": (b'{"a":"\xff"}', "found a bad byte at 6; expected UTF-8 text"),
    "not an object": ("[1,2]", "found an array with 2 elements; expected a JSON object"),
    "deep": ("[" * 100_000, "found nesting deeper than 64; expected at most 64 levels"),
    "rather deep": (
        '{"a":' * 70 + "1" + "}" * 70,
        "found nesting deeper than 64; expected at most 64 levels",
    ),
    "key twice": (
        with_global('"core:datatype":"cf32_le"'),
        "found key 'core:datatype' twice in one object; expected each key once",
    ),
    "NaN": (
        with_global('"x:y":NaN'),
        "found NaN; expected finite numbers, as JSON has no other",
    ),
    "overflow": (
        with_global('"x:y":1e999'),
        "found number '1e999'; expected numbers that fit double precision",
    ),
    "digits": (
        with_global('"x:y":' + "9" * 5000),
        "found a number of 5000 digits; expected numbers of up to 400 digits",
    ),
    "no global": ('{"captures":[]}', "global: found nothing; expected an object"),
    "global array": ('{"global":[]}', "global: found an array with 0 elements; expected an object"),
    "captures object": (
        f'{{"global":{{{HEAD}}},"captures":{{}}}}',
        "captures: found an object with 0 fields; expected an array of objects",
    ),
    "capture number": (
        f'{{"global":{{{HEAD}}},"captures":[7]}}',
        "captures[0]: found 7; expected an object",
    ),
    "annotation text": (
        f'{{"global":{{{HEAD}}},"captures":[],"annotations":["a"]}}',
        "annotations[0]: found 'a'; expected an object",
    ),
    "rate missing": (
        without("core:sample_rate"),
        "global.core:sample_rate: found nothing; expected samples per second, > 0",
    ),
    "rate zero": (
        instead("core:sample_rate", 0),
        "global.core:sample_rate: found 0; expected samples per second, > 0",
    ),
    "rate negative": (instead("core:sample_rate", -1.5), RATE.format("-1.5")),
    "rate huge": (instead("core:sample_rate", 1e30), RATE.format("1e+30")),
    "rate integer beyond double": (
        instead("core:sample_rate", 10**390),
        RATE.format("an integer of more than 30 digits"),
    ),
    "rate text": (instead("core:sample_rate", "1e6"), RATE.format("'1e6'")),
    "rate true": (instead("core:sample_rate", True), RATE.format("True")),
    "channels zero": (instead("core:num_channels", 0), CHANNELS.format("0")),
    "channels negative": (instead("core:num_channels", -1), CHANNELS.format("-1")),
    "channels absurd": (instead("core:num_channels", 10**9), CHANNELS.format("1000000000")),
    "channels float": (instead("core:num_channels", 2.0), CHANNELS.format("2.0")),
    "start missing": (with_capture('"core:frequency":1'), START.format("nothing")),
    "start negative": (with_capture('"core:sample_start":-1'), START.format("-1")),
    "start float": (with_capture('"core:sample_start":1.0'), START.format("1.0")),
    "start true": (with_capture('"core:sample_start":true'), START.format("True")),
    "start text": (with_capture('"core:sample_start":"0"'), START.format("'0'")),
    "start beyond 63 bits": (
        with_capture('"core:sample_start":9223372036854775808'),
        START.format("9223372036854775808"),
    ),
    "start past the end": (
        with_capture('"core:sample_start":10'),
        "captures[0].core:sample_start: found 10; expected an index below the 10 samples there are",
    ),
    "captures unsorted": (
        with_capture('"core:sample_start":5', '"core:sample_start":2'),
        "captures[1].core:sample_start: found 2; expected at least 5, as captures are sorted",
    ),
    "header negative": (
        with_capture('"core:sample_start":0,"core:header_bytes":-4'),
        "captures[0].core:header_bytes: found -4; expected an integer >= 0",
    ),
    "global index float": (
        with_capture('"core:sample_start":0,"core:global_index":0.5'),
        "captures[0].core:global_index: found 0.5; expected an integer >= 0",
    ),
    "frequency text": (
        with_capture('"core:sample_start":0,"core:frequency":"1 GHz"'),
        "captures[0].core:frequency: found '1 GHz'; expected a finite number -1e+12..1e+12",
    ),
    "datetime number": (
        with_capture('"core:sample_start":0,"core:datetime":5'),
        "captures[0].core:datetime: found 5; expected a string",
    ),
    "dataset parent": (with_global('"core:dataset":"../x"'), NAME.format("'../x'")),
    "dataset absolute": (with_global('"core:dataset":"/etc/hosts"'), NAME.format("'/etc/hosts'")),
    "dataset backslash": (
        with_global('"core:dataset":"a\\\\b"'),
        NAME.format(r"'a\\b'"),
    ),
    "dataset dots": (with_global('"core:dataset":".."'), NAME.format("'..'")),
    "dataset empty": (with_global('"core:dataset":""'), NAME.format("''")),
    "dataset escape codes": (
        with_global('"core:dataset":"a\\u001b[2J"'),
        NAME.format(r"'a\x1b[2J'"),
    ),
    "dataset surrogate": (with_global('"core:dataset":"\\ud800"'), NAME.format(r"'\ud800'")),
    "dataset long": (
        with_global(f'"core:dataset":"{"a" * 5000}"'),
        NAME.format("'" + "a" * 59 + "..."),
    ),
    "required extension": (
        with_global('"core:extensions":[{"name":"zip","version":"1.0.0","optional":false}]'),
        "global.core:extensions[0]: found required extension 'zip'; expected optional ones, "
        "or one of antenna, capture_details, signal, spatial, traceability",
    ),
    "extensions object": (
        with_global('"core:extensions":{}'),
        "global.core:extensions: found an object with 0 fields; expected an array",
    ),
    "extension without name": (
        with_global('"core:extensions":[{"optional":true}]'),
        "global.core:extensions[0]: found an object with 1 fields; expected an object with a name",
    ),
    "extension optional text": (
        with_global('"core:extensions":[{"name":"a","optional":"no"}]'),
        "global.core:extensions[0].optional: found 'no'; expected true or false",
    ),
    "version number": (
        instead("core:version", 1.2),
        "global.core:version: found 1.2; expected a string",
    ),
    "sha512 short": (
        instead("core:sha512", "abc"),
        "global.core:sha512: found 'abc'; expected 128 hexadecimal digits",
    ),
    "metadata_only text": (
        instead("core:metadata_only", "yes"),
        "global.core:metadata_only: found 'yes'; expected true or false",
    ),
    "offset float": (
        instead("core:offset", 1e3),
        "global.core:offset: found 1000.0; expected an integer >= 0",
    ),
}


@pytest.mark.nojit
@pytest.mark.parametrize("case", TABLE)
def test_refused_in_one_line(tmp_path: Path, case: str) -> None:
    text, expected = TABLE[case]
    path = put(tmp_path, "x", text, DATA)
    with pytest.raises(InputError) as caught:
        open_recording(path)
    assert str(caught.value) == f"{path}: {expected}"


@pytest.mark.parametrize(
    "value",
    ["CI16_LE", "i16_le", "cf32", "cu8_le", "ci16_leXYZ", "ci24_le", "cf16_le", "", 7, None, []],
)
def test_datatypes_are_checked_to_the_letter(tmp_path: Path, value: object) -> None:
    path = put(tmp_path, "x", instead("core:datatype", value), DATA)
    with pytest.raises(
        InputError, match=r"global.core:datatype: found .*; expected one of cf64_le"
    ):
        open_recording(path)


@pytest.mark.parametrize("value", ["rf32_le", "ri16_be", "ru8"])
def test_real_samples_are_refused_clearly(tmp_path: Path, value: str) -> None:
    path = put(tmp_path, "x", instead("core:datatype", value), DATA)
    expected = rf"found real samples \({value}\); expected complex samples"
    with pytest.raises(InputError, match=expected):
        open_recording(path)


@pytest.mark.parametrize(
    "text",
    [
        "2030-13-01T00:00:00Z",
        "2030-02-30T00:00:00Z",
        "2030-01-01T24:00:00Z",
        "2030-01-01T00:00:61Z",
        "2030-01-01T12:00:60Z",
        "2030-01-01T00:00:00+25:00",
        "2030-01-01",
        "yesterday",
        "2030-01-01T00:00:00Z\n",
        "0001-01-01T00:00:00+01:00",
        "9999-12-31T23:59:59-01:00",
        "٢٠٣٠-01-01T00:00:00Z",
    ],
)
def test_impossible_times_are_refused(tmp_path: Path, text: str) -> None:
    meta = document(captures=[{"core:sample_start": 0, "core:datetime": text}])
    with pytest.raises(InputError, match=r"captures\[0\].core:datetime: found .*; expected a date"):
        open_recording(put(tmp_path, "x", meta, DATA))


def test_channels_are_bounded_by_the_file(tmp_path: Path) -> None:
    path = put(tmp_path, "x", document(channels=1000), DATA)
    with pytest.raises(InputError) as caught:
        open_recording(path)
    assert str(caught.value) == (
        f"{tmp_path / 'x.sigmf-data'}: found 40 bytes, of which 40 are for samples; expected at "
        "least one frame of 4000 bytes (1000 channels of ci16_le)"
    )


@pytest.mark.parametrize(
    ("captures", "fields", "data"),
    [
        ([], {}, b""),
        ([], {}, b"abc"),
        ([], {"core_trailing_bytes": 10**18}, DATA),
        ([{"core:sample_start": 0, "core:header_bytes": 10**18}], {}, DATA),
    ],
)
def test_no_whole_frame(
    tmp_path: Path, captures: list[dict[str, int]], fields: dict[str, Any], data: bytes
) -> None:
    path = put(tmp_path, "x", document(captures=captures, **fields), data)
    with pytest.raises(InputError, match="expected at least one frame of 4 bytes"):
        open_recording(path)


def test_large_metadata_is_refused_before_it_is_read(tmp_path: Path) -> None:
    path = put(tmp_path, "x", document(), DATA)
    os.truncate(path, jsontext.MAX_METADATA_BYTES + 1)
    with pytest.raises(InputError, match=r"found 67108865 bytes; expected metadata of at most"):
        open_recording(path)


def link(target: str) -> Callable[[Path], None]:
    return lambda path: path.symlink_to(target)


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (link("/etc/passwd"), "found a link that leaves its folder; expected a file in the folder"),
        (link("../secret"), "found a link that leaves its folder; expected a file in the folder"),
        (link("nowhere"), "found No such file or directory; expected a readable file"),
        (link("x.sigmf-data"), "expected a readable file|Symlink loop"),
        (os.mkfifo, "found not a regular file; expected a file"),
        (Path.mkdir, "found not a regular file; expected a file"),
    ],
)
def test_what_is_not_a_file_of_the_folder(
    tmp_path: Path, make: Callable[[Path], None], text: str
) -> None:
    folder = tmp_path / "in"
    folder.mkdir()
    (tmp_path / "secret").write_bytes(DATA)
    path = put(folder, "x", document(), None)
    make(folder / "x.sigmf-data")
    with pytest.raises(InputError, match=text):
        open_recording(path)


def test_links_within_the_folder_and_to_the_folder_are_fine(tmp_path: Path) -> None:
    folder = tmp_path / "in"
    folder.mkdir()
    put(folder, "x", document(), DATA, "real")
    (folder / "x.sigmf-data").symlink_to("real")
    (tmp_path / "alias").symlink_to(folder)
    assert open_recording(tmp_path / "alias" / "x.sigmf-meta").n_samples == 10


def test_missing_files(tmp_path: Path) -> None:
    path = put(tmp_path, "x", document(), None)
    with pytest.raises(InputError, match=r"x\.sigmf-data: found no such file; expected the data"):
        open_recording(path)
    only = put(tmp_path, "y", document(core_metadata_only=True), None)
    with pytest.raises(InputError, match="found core:metadata_only, so no samples"):
        open_recording(only)
    (tmp_path / "z.sigmf-data").write_bytes(DATA)
    with pytest.raises(InputError, match=r"z\.sigmf-meta: found no such file"):
        open_recording(tmp_path / "z.sigmf-data")
    with pytest.raises(InputError, match=r"no\.sigmf-meta: found no such file"):
        open_recording(tmp_path / "no.sigmf-meta")


@pytest.mark.parametrize("name", ["x.wav", "x.xml", "x", "x.sigmf-meta.gz", ".sigmf-meta", ""])
def test_only_names_of_the_standard_are_opened(tmp_path: Path, name: str) -> None:
    if name:
        (tmp_path / name).write_bytes(gzip.compress(DATA))
    with pytest.raises(InputError, match="found no such recording; expected a file ending in"):
        open_recording(tmp_path / name)


def test_data_named_by_the_user_and_data_named_by_the_metadata(tmp_path: Path) -> None:
    put(tmp_path, "x", document(core_dataset="y.bin"), DATA, "y.bin")
    (tmp_path / "x.sigmf-data").write_bytes(DATA)
    with pytest.raises(InputError, match=r"found core:dataset 'y.bin'; expected x.sigmf-data"):
        open_recording(tmp_path / "x.sigmf-data")


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner),
    max_leaves=8,
)
NAMES = (
    "datatype version sample_rate num_channels offset dataset extensions trailing_bytes "
    "metadata_only sha512 frequency datetime sample_start header_bytes global_index"
)
FIELDS = st.sampled_from(NAMES.split()).map(lambda name: f"core:{name}")


@settings(deadline=None, max_examples=300)
@given(st.dictionaries(FIELDS, JSON), st.lists(st.dictionaries(FIELDS, JSON), max_size=3), JSON)
def test_any_metadata_is_read_or_refused(
    head: dict[str, Any], captures: list[dict[str, Any]], annotations: object
) -> None:
    meta = document()
    meta["global"].update(head)
    meta["captures"] = [{"core:sample_start": 0} | c for c in captures]
    if annotations is not None:
        meta["annotations"] = annotations
    try:
        found = read_metadata(json.dumps(meta).encode(), "x")
    except InputError as error:
        assert "\n" not in str(error)
        assert len(str(error)) < 600
        return
    assert found.sample_rate > 0
    assert 1 <= found.channels <= 1024
    assert all(c.start >= 0 for c in found.captures)


@given(st.binary(max_size=60))
def test_any_bytes_are_parsed_or_refused(data: bytes) -> None:
    try:
        document_read, _ = parse_metadata(data, "x")
    except InputError as error:
        assert str(error).startswith("x: found ")
        return
    assert isinstance(document_read, dict)
