"""Bad link descriptions give one line that says where, what was found and what is accepted."""

import re

import numpy as np
import pytest
from links import base, parsed, toml

from spatiq.errors import InputError
from spatiq.link import Link, load_link, parse_link


def at(tables, path):
    """The container and key that a dotted path with indices names."""
    steps = [int(s) if s.isdigit() else s for s in re.findall(r"[^.\[\]]+", path)]
    for step in steps[:-1]:
        tables = tables[step]
    return tables, steps[-1]


MISSING = object()

# path to set, value, field of the error, what was found, what is accepted
FAULTS = [
    ("format", 2, "format", "2", "1 to 1"),
    ("format", MISSING, "format", "nothing", "whole number"),
    ("airs", 1, "airs", "unknown key", r"format, name, air.*\(nearest: air\)"),
    ("air", MISSING, "air", "nothing", r"\[air\] table"),
    ("air", 3, "air", "3", "table"),
    ("air.antennas", 0, "air.antennas", "0", "whole number, 1 to 64"),
    ("air.antennas", 65, "air.antennas", "65", "1 to 64"),
    ("air.antennas", True, "air.antennas", "True", "1 to 64"),
    ("air.antennas", 4.0, "air.antennas", "4.0", "whole number"),
    ("air.symbol_rate_hz", 0, "air.symbol_rate_hz", "0", "0.001 to"),
    ("air.symbol_rate_hz", float("nan"), "air.symbol_rate_hz", "nan", "number"),
    ("air.symbol_rate_hz", 10**400, "air.symbol_rate_hz", "1000", "number"),
    ("air.clock", "lockd", "air.clock", "'lockd'", r"locked, independent \(nearest: locked\)"),
    ("modulation.scheme", "spatial", "modulation.scheme", "'spatial'", "space-shift-keying"),
    (
        "modulation.constellation",
        MISSING,
        "modulation.constellation",
        "nothing",
        "a constellation",
    ),
    (
        "modulation.constellation.name",
        "qpsk",
        "modulation.constellation.name",
        "'qpsk'",
        "nearest: QPSK",
    ),
    (
        "modulation.scheme",
        "space-shift-keying",
        "modulation.constellation",
        "a constellation",
        "none",
    ),
    ("modulation.antenna_order", [0, 1, 2], "modulation.antenna_order", r"\[0, 1, 2\]", "2\\^k"),
    ("modulation.antenna_order", [0, 0], "modulation.antenna_order", r"\[0, 0\]", "each once"),
    ("modulation.antenna_order[1]", 4, "modulation.antenna_order[1]", "4", "0 to 3"),
    ("modulation.spatial_bits", "frist", "modulation.spatial_bits", "'frist'", "nearest: first"),
    ("modulation.spatial_bits", [0], "modulation.spatial_bits", r"\[0\]", "2 different"),
    ("modulation.spatial_bits", [0, 4], "modulation.spatial_bits[1]", "4", "0 to 3"),
    (
        "modulation.constellation",
        {"points": [1, -1], "labels": ["0", "0"], "normalise": True},
        "modulation.constellation.labels[1]",
        "'0' again",
        "each label once",
    ),
    (
        "modulation.constellation",
        {"points": [1, -1], "labels": ["0", "1"]},
        "modulation.constellation.normalise",
        "nothing",
        "true",
    ),
    ("pulse.shape", "rectangle", "pulse.shape", "'rectangle'", "nearest: rectangular"),
    ("pulse.shape", MISSING, "pulse.shape", "nothing", "root-raised-cosine"),
    ("pulse.rolloff", 1.5, "pulse.rolloff", "1.5", "0 to 1"),
    (
        "pulse",
        {"shape": "taps", "taps": [0, 0], "samples_per_symbol": 2},
        "pulse.taps",
        "0",
        "not all zero",
    ),
    ("frame.section", [], "frame.section", r"\[\]", "at least 1"),
    ("frame.section[0].kind", "pilot", "frame.section[0].kind", "'pilot'", "nearest: pilots"),
    ("frame.section[0].kind", "pilots", "frame.section", "no sync section", "at least one"),
    ("frame.section[0].repat", 2, "frame.section[0].repat", "unknown key", "nearest: repeat"),
    ("frame.section[0].sequence.order", 17, "frame.section[0].sequence.order", "17", "2 to 16"),
    (
        "frame.section[0].sequence.taps",
        [5, 1],
        "frame.section[0].sequence.taps",
        r"\[5, 1\]",
        "max",
    ),
    ("frame.section[0].sequence.state", 32, "frame.section[0].sequence.state", "32", "1 to 31"),
    ("frame.section[0].antennas[0]", 4, "frame.section[0].antennas[0]", "4", "0 to 3"),
    ("frame.section[0].antennas", [1, 1], "frame.section[0].antennas[1]", "again", "once"),
    ("frame.section[0].antennas", [1, 2], "frame.section[0].send", "nothing", "in-turn"),
    ("frame.section[1].sequence.root", 4, "frame.section[1].sequence.root", "4", "common factor"),
    ("frame.section[1].send", "in-turn", "frame.section[1].cover", "a value", "together"),
    ("frame.section[1].cover", [[1, 1]], "frame.section[1].cover", "1 lists", "4, one for each"),
    ("frame.section[1].cover[2]", [1], "frame.section[1].cover[2]", "1 weights", "2, one for"),
    ("frame.section[1].cover[2][1]", "x", "frame.section[1].cover[2][1]", "'x'", "imaginary"),
    ("frame.section[1].antenna_shift", [1], "frame.section[1].antenna_shift", "1 shifts", "4"),
    ("frame.section[3].known.first", 100, "frame.section[3].known.first", "100", "0 to 99"),
    ("frame.section[3].symbols", 10**6, "frame.section[3]", "1000051", "at most 1000000"),
    ("frame.period_symbols", 100, "frame.period_symbols", "100", "at least.*151"),
    ("frame.period_s", 1.0, "frame.period_s", "seconds", "not both"),
    ("payload", MISSING, "payload", "nothing", "360 bits"),
    ("payload.field[0].start", 4096, "payload.field[0].start", "4096", "0 to 4095"),
    ("payload.field[1].bits", 299, "payload.field", "361 bits", "at most 360"),
    ("payload.field[1].bits", "rst", "payload.field[1].bits", "'rst'", "rest.*whole number"),
    ("payload.field[2].value", "012", "payload.field[2].value", "'012'", "0 and 1"),
    ("payload.field[3].name", "CRC-31", "payload.field[3].name", "'CRC-31'", "nearest: CRC-32"),
    ("payload.field[3].name", MISSING, "payload.field[3].width", "nothing", "name, or all of"),
    ("payload.field[3].poly", 3, "payload.field[3].poly", "a value", "none beside name"),
    ("payload.field[3].covers", [0, 3], "payload.field[3].covers[1]", "3", "earlier field"),
    ("payload.field[3].covers", [0, 0], "payload.field[3].covers[1]", "0", "once"),
    ("payload.field[3].covers", "all", "payload.field[3].covers", "'all'", "all-before"),
    (
        "payload.field[3]",
        {
            "type": "crc",
            "width": 4,
            "poly": 16,
            "init": 0,
            "refin": False,
            "refout": False,
            "xorout": 0,
        },
        "payload.field[3].poly",
        "16",
        "2\\^4 - 1",
    ),
    ("payload.scrambler.type", "gold", "payload.scrambler.type", "'gold'", "nearest: gold-3gpp"),
    ("payload.scrambler.seed", 128, "payload.scrambler.seed", "128", "1 to 127"),
]


@pytest.mark.parametrize(("path", "value", "field", "found", "expected"), FAULTS)
def test_fault_says_where_what_and_what_else(path, value, field, found, expected):
    tables = base()
    container, key = at(tables, path)
    if value is MISSING:
        del container[key]
    else:
        container[key] = value
    with pytest.raises(InputError) as caught:
        parsed(tables)
    assert caught.value.source == "test.link.toml"
    assert caught.value.field == field
    assert re.search(found, caught.value.found), caught.value
    assert re.search(expected, caught.value.expected), caught.value
    assert "\n" not in str(caught.value)


def test_refin_needs_whole_bytes():
    tables = base()
    tables["payload"]["field"][3]["name"] = "CRC-32"
    assert isinstance(parsed(tables), Link)  # 112 bits covered
    tables["payload"]["field"][0]["bits"] = 11
    with pytest.raises(InputError, match=r"covers: found 111 bits; expected whole bytes"):
        parsed(tables)


def test_two_fields_cannot_take_the_rest():
    tables = base()
    tables["payload"]["field"][1]["bits"] = "rest"
    tables["payload"]["field"][4]["bits"] = "rest"
    with pytest.raises(InputError, match=r"payload\.field\[4\]\.bits: found 'rest' again"):
        parsed(tables)


def test_antennas_that_are_no_power_of_two_need_an_order():
    tables = base()
    tables["air"]["antennas"] = 5
    del tables["modulation"]["antenna_order"]
    with pytest.raises(InputError, match=r"modulation\.antenna_order: found nothing"):
        parsed(tables)


def test_word_of_no_bits():
    tables = base()
    tables["modulation"] = {"scheme": "space-shift-keying", "antenna_order": [2]}
    with pytest.raises(InputError, match=r"modulation: found 0 bits a word"):
        parsed(tables)


def test_payload_without_payload_section():
    tables = base()
    tables["frame"]["section"].pop()
    with pytest.raises(InputError, match=r"payload: found a table; expected none"):
        parsed(tables)
    del tables["payload"]
    link = parsed(tables)
    assert link.payload.n_bits == 0
    assert not link.payload.has_reference
    assert link.payload.encode(np.arange(3)).shape == (3, 0)
    assert "no payload" in link.explain()


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("format = ", "Invalid value"),
        ("a = " + "[" * 100_000, "nested too deeply|Invalid|Unclosed"),
        ("format = " + "1" * 5000, "4300"),
        ("format = 1\nformat = 1", "overwrite"),
    ],
)
def test_text_that_is_no_toml(text, found):
    with pytest.raises(InputError, match=found):
        parse_link(text)


def test_load_link_reads_name_path_and_text(tmp_path):
    path = tmp_path / "night.link.toml"
    path.write_text(toml(base()), encoding="utf-8")
    link = load_link(path)
    assert (link.name, link.path, link.text) == ("night", path, toml(base()))
    assert (link.antennas, link.symbol_rate_hz, link.carrier_hz) == (4, 1e6, 2e9)
    assert (link.clock, link.period_symbols, link.frame_symbols) == ("locked", 300, 151)
    named = {"name": "bench 3", **base()}
    path.write_text(toml(named), encoding="utf-8")
    assert load_link(str(path)).name == "bench 3"


def test_load_link_that_cannot_be_read(tmp_path):
    with pytest.raises(InputError, match=r"absent\.toml: found No such file"):
        load_link(tmp_path / "absent.toml")
    with pytest.raises(InputError, match="readable file"):
        load_link(tmp_path)
    (tmp_path / "bytes.toml").write_bytes(b"format = 1 # \xff")
    with pytest.raises(InputError, match="not UTF-8"):
        load_link(tmp_path / "bytes.toml")


def with_file(name):
    tables = base()
    tables["payload"]["field"][1] = {"type": "file", "file": name, "bits": 64}
    return tables


def test_files_stay_in_the_folder(tmp_path):
    inside = tmp_path / "inside"
    inside.mkdir()
    (tmp_path / "secret").write_bytes(b"x")
    (inside / "known").write_bytes(b"\x80\x01")
    (inside / "empty").write_bytes(b"")
    (inside / "link").symlink_to(tmp_path / "secret")
    assert parsed(with_file("known"), inside).payload.fields[1].type == "file"
    place = r"payload\.field\[1\]\.file"
    for name in ("../secret", "a/b", "", "\\x"):
        with pytest.raises(InputError, match=rf"{place}: .*name of a file"):
            parsed(with_file(name), inside)
    for name, found in [
        ("..", "'..'"),
        ("link", "links must not leave"),
        ("absent", "no file there"),
        ("empty", "0 bytes"),
    ]:
        with pytest.raises(InputError, match=f"{place}: .*{found}"):
            parsed(with_file(name), inside)
    with pytest.raises(InputError, match=f"{place}: .*read from a folder"):
        parsed(with_file("known"))


def test_period_in_seconds():
    tables = base()
    del tables["frame"]["period_symbols"]
    tables["frame"]["period_s"] = 151e-6
    assert parsed(tables).period_symbols == pytest.approx(151, rel=1e-12)
    tables["frame"]["period_s"] = 150.9e-6
    with pytest.raises(InputError, match=r"frame\.period_s: found 150\.9 symbol periods"):
        parsed(tables)
    del tables["frame"]["period_s"]
    assert parsed(tables).period_symbols is None
