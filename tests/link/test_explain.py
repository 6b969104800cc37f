"""The explanation says what the link is, in lines of at most 100 columns."""

import json
import tomllib
from pathlib import Path

import jsonschema
import pytest
from links import base, parsed

from spatiq.link import load_link
from spatiq.link.schema import json_schema

DATA = Path(__file__).parent / "data"


def test_bench_link():
    text = load_link(DATA / "bench.link.toml").explain()
    assert all(len(line) <= 100 for line in text.splitlines())
    for line in (
        "Link: four-antenna bench link",
        "  symbol period      1 µs",
        "  carrier            2.45 GHz",
        "  0  sync        0-62      63     63 µs  m-sequence of order 6, from antenna 0, +1.5 dB",
        "     all        0-603     604    604 µs",
        "  bits per word             6: 2 spatial, 4 signal",
        "  payload bits per frame    2328",
        "  gross bit rate            6 Mbit/s during payload",
        # 2328 bits in 700 symbol periods of 1 us.
        "  net bit rate              3.32571 Mbit/s of payload bits, at the stated frame period",
        "  000000  0        -0.9487 -0.9487j",
        "  antenna  by bits 0, 1 of the word (0 = first bit): 00: 0, 01: 1, 10: 3, 11: 2",
        "  2  prbs       24-2023    2000  PRBS15, inverted, running",
        "     fixed    2080-2327     248  padding, zeros",
    ):
        assert line in text.splitlines()


def test_short_code_table_is_complete():
    text = load_link(DATA / "covered.link.toml").explain()
    rows = [r.split() for r in text.splitlines() if r[2:6].strip("01") == "" and r[6:8] == "  "]
    assert len([r for r in rows if r and len(r[0]) == 4]) == 16
    # Word 0001: bits 3 and 1 make the spatial value 10, which is antenna 0; label 00 is -4j.
    assert "  0001  0        +0.0000 -1.4606j" in text


@pytest.mark.parametrize("shape", [{"shape": "rectangular"}, base()["pulse"]])
def test_pulses(shape):
    tables = base()
    tables["pulse"] = shape
    tables["air"]["carrier_hz"] = 1
    text = parsed(tables).explain()
    assert ("not strictly band-limited" in text) == (shape["shape"] == "rectangular")


def test_json_schema_accepts_what_the_program_accepts_and_refuses_unknown_keys():
    schema = json_schema()
    json.dumps(schema)
    validator = jsonschema.Draft202012Validator(schema)
    validator.check_schema(schema)
    for name in ("bench", "covered"):
        tables = tomllib.loads((DATA / f"{name}.link.toml").read_text())
        assert not list(validator.iter_errors(tables))
    tables = base()
    assert validator.is_valid(tables)
    tables["frame"]["section"][0]["repat"] = 1
    assert not validator.is_valid(tables)
    tables = base()
    tables["air"]["antennas"] = 65
    assert not validator.is_valid(tables)
