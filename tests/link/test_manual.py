"""The manual alone suffices: a transmitter written from its words sends what is expected."""

import itertools
import re
from pathlib import Path

import numpy as np
import pytest
from plain_transmitter import PlainTransmitter, manual_text, table_rows
from pydantic import BaseModel

from spatiq.link.layout import Period
from spatiq.link.loading import load_link, parse_link
from spatiq.link.schema import LinkSpec
from spatiq.signal import crc, prbs
from spatiq.signal.codebooks import registered
from spatiq.signal.scramblers import AdditiveScrambler
from spatiq.transmit.frames import vectors_of_words

DATA = Path(__file__).parent / "data"
MANUAL = manual_text()
EXAMPLE = MANUAL.split("```toml\n")[1].split("```")[0]

WIDE = """
format = 1
air = {{ antennas = {antennas}, symbol_rate_hz = 1e5 }}
pulse = {{ shape = "rectangular" }}
{modulation}
[[frame.section]]
kind = "sync"
sequence = {sequence}
antennas = [0]
[[frame.section]]
kind = "payload"
symbols = {symbols}
[[payload.field]]
type = "prbs"
name = "{name}"
bits = "rest"
continuation = "running"
[payload.scrambler]
type = "gold-3gpp"
c_init = 2147483646
"""


def received_vectors(link, frame_numbers, data=None):
    """Symbols as the package sees them: (F, K, Nt)."""
    words = link.codebook.bits_to_words(link.payload.encode(frame_numbers, data))
    return vectors_of_words(link, words)


def assert_agree(link, text, frame_numbers, folder=None):
    transmitter = PlainTransmitter(text, MANUAL, folder)
    rng = np.random.default_rng(3)
    data = rng.integers(0, 2, (len(frame_numbers), link.payload.data_bits), np.uint8)
    sent = link.payload.encode(np.array(frame_numbers), data)
    frames = received_vectors(link, np.array(frame_numbers), data)
    for i, n in enumerate(frame_numbers):
        assert sent[i].tolist() == transmitter.sent_bits(n, data[i].tolist())
        # Phases of a long Zadoff-Chu sequence are computed by plain floating point there.
        np.testing.assert_allclose(frames[i], transmitter.frame(n, data[i].tolist()), atol=1e-9)


@pytest.mark.nojit
@pytest.mark.parametrize("name", ["bench", "covered"])
def test_plain_transmitter_sends_what_the_link_says(name):
    path = DATA / f"{name}.link.toml"
    assert_agree(load_link(path), path.read_text(), [0, 1, 7, 30], DATA)


@pytest.mark.nojit
def test_plain_transmitter_agrees_on_the_example():
    assert_agree(parse_link(EXAMPLE), EXAMPLE, [0, 1, 15, 16, 1000])


NAMED = [
    f'{{ name = "{name}", labelling = "{labelling}" }}'
    for name, labelling in itertools.product(
        ["BPSK", "QPSK", "8PSK", "16QAM", "64QAM", "256QAM"], ["3gpp", "802.11"]
    )
]


@pytest.mark.parametrize("constellation", NAMED)
@pytest.mark.parametrize("places", ['"first"', '"last"'])
def test_every_named_constellation(constellation, places):
    modulation = (
        f'modulation = {{ scheme = "spatial-modulation", constellation = {constellation}, '
        f"spatial_bits = {places} }}"
    )
    text = WIDE.format(
        antennas=4,
        modulation=modulation,
        sequence='{ type = "zadoff-chu", length = 12, root = 5 }',
        symbols=150,
        name="PRBS11",
    )
    assert_agree(parse_link(text), text, [0, 3])


QPSK = 'constellation = { name = "QPSK" }'
SCHEMES = [
    (4, f'scheme = "generalised-spatial-modulation", active_antennas = 2, {QPSK}'),
    (
        5,
        'scheme = "generalised-spatial-modulation", '
        "antenna_sets = [[4, 1], [0, 2], [3, 1], [2, 4]], "
        f'streams = "independent", spatial_bits = "last", {QPSK}',
    ),
    (
        3,
        'scheme = "generalised-spatial-modulation", antenna_sets = [[0], [2, 1]], '
        'spatial_bits = [1], constellation = { name = "8PSK" }',
    ),
    (6, 'scheme = "generalised-space-shift-keying", active_antennas = 3'),
    (3, 'scheme = "generalised-space-shift-keying", antenna_sets = [[2], [0, 1]]'),
    (4, f'scheme = "quadrature-spatial-modulation", {QPSK}'),
    (
        5,
        'scheme = "quadrature-spatial-modulation", antenna_order = [3, 0], spatial_bits = [4, 1], '
        'constellation = { name = "16QAM", labelling = "802.11" }',
    ),
    (2, f'scheme = "differential-spatial-modulation", {QPSK}'),
    (3, 'scheme = "differential-spatial-modulation", constellation = { name = "BPSK" }'),
    (
        5,
        'scheme = "differential-spatial-modulation", spatial_bits = [3, 0], '
        "permutations = [[0, 1, 2, 3, 4], [4, 0, 2, 3, 1], [1, 0, 4, 2, 3], [3, 4, 0, 1, 2]], "
        'constellation = { points = [[0, 2], [0, -2]], labels = ["1", "0"], normalise = false }',
    ),
    (
        3,
        'scheme = "vector-table", normalise = true, words = ['
        '{ word = "10", antennas = [1], symbols = [[0, 1]] }, '
        '{ word = "00", antennas = [0], symbols = [1] }, '
        '{ word = "01", antennas = [2, 0], symbols = [-1, [0.5, 0.25]] }, '
        '{ word = "11", antennas = [2], symbols = [3] }]',
    ),
]


@pytest.mark.parametrize(("antennas", "modulation"), SCHEMES)
def test_every_scheme(antennas, modulation):
    text = WIDE.format(
        antennas=antennas,
        modulation=f"modulation = {{ {modulation} }}",
        sequence='{ type = "m-sequence", order = 5 }',
        symbols=120,
        name="PRBS9",
    )
    text = text.replace("symbols = 120", 'symbols = 120\npower_db = -3\n[[frame.section]]\n'
                        'kind = "payload"\nsymbols = 60')  # fmt: skip
    assert_agree(parse_link(text), text, [0, 1, 5])


def test_every_scheme_of_the_registry_is_transmitted_by_the_manual():
    named = {re.search(r'scheme = "([^"]+)"', modulation)[1] for _, modulation in SCHEMES}
    assert named | {"spatial-modulation", "space-shift-keying"} == set(registered())


SEQUENCES = [
    *(f'{{ type = "m-sequence", order = {n} }}' for n in range(2, 17)),
    *(
        f'{{ type = "gold", order = {n}, index = {i} }}'
        for n in (5, 6, 7, 9, 10, 11)
        for i in (0, 1, 2, 3, 2**n)
    ),
    '{ type = "zadoff-chu", length = 139, root = 5, cyclic_shift = 138 }',
    '{ type = "m-sequence", order = 4, state = 9, length = 40, cyclic_shift = 14 }',
    '{ type = "gold-3gpp", c_init = 1, length = 100 }',
]


@pytest.mark.parametrize("sequence", SEQUENCES)
def test_every_sequence(sequence):
    text = WIDE.format(
        antennas=2,
        modulation='modulation = { scheme = "space-shift-keying" }',
        sequence=sequence,
        symbols=8,
        name="PRBS7",
    )
    assert_agree(parse_link(text), text, [0])


@pytest.mark.parametrize("name", prbs.NAMES)
def test_every_prbs(name):
    text = WIDE.format(
        antennas=8,
        modulation='modulation = { scheme = "space-shift-keying" }',
        sequence='{ type = "gold", order = 5, index = 3 }',
        symbols=1000,
        name=name,
    )
    assert_agree(parse_link(text), text, [0, 1, 6])


def test_example_bits_and_symbols_are_those_printed():
    link = parse_link(EXAMPLE)
    rows = table_rows(MANUAL, "n", "plain", "as sent")
    numbers = np.array([int(r[0]) for r in rows])
    sent = link.payload.encode(numbers)
    plain = link.payload.descramble(sent)
    assert ["".join(map(str, b)) for b in plain] == [r[1] for r in rows]
    assert ["".join(map(str, b)) for b in sent] == [r[2] for r in rows]
    printed = [
        [complex(c.replace(" ", "")) for c in row[2:]]
        for row in table_rows(MANUAL, "period", "carries")
    ]
    frames = received_vectors(link, np.array([1]))
    np.testing.assert_allclose(frames[0], printed, atol=5.001e-5)


def test_manual_tables_are_those_of_the_code():
    assert [row[0] for row in table_rows(MANUAL, "name", "n", "taps")] == list(prbs.NAMES)
    rows = table_rows(MANUAL, "name", "width", "poly")
    assert [row[0] for row in rows] == list(crc.CATALOGUE)
    transmitter = PlainTransmitter(EXAMPLE, MANUAL)
    bits = np.unpackbits(np.frombuffer(b"123456789", np.uint8)).tolist()
    for row in rows:
        check = transmitter.check_bits({"name": row[0]}, bits)
        assert int("".join(map(str, check)), 2) == int(row[7], 16)
        np.testing.assert_array_equal(crc.CATALOGUE[row[0]].compute([bits])[0], check)


def test_first_bits_quoted_in_the_manual():
    # ITU-T O.150 (05/96) clauses 5.1 and 5.3, register begun with all ones.
    for name in ("PRBS9", "PRBS15"):
        (digits,) = re.findall(rf"{name} ([01]{{32}})", MANUAL)
        assert "".join(map(str, prbs.prbs(name).bits(0, 32))) == digits
    # IEEE 802.11 clause 17.3.5.5.
    digits = re.findall(r"c = ([01 ]+) \.\.\.", MANUAL)[0].replace(" ", "")
    scrambler = AdditiveScrambler((7, 4), 127)
    assert "".join(map(str, scrambler.sequence(24))) == digits == "000011101111001011001001"


def models(annotation, found):
    """All tables of the schema, by walking annotations."""
    is_table = isinstance(annotation, type) and issubclass(annotation, BaseModel)
    if is_table and annotation not in found:
        found.add(annotation)
        for info in annotation.model_fields.values():
            models(info.annotation, found)
    for inner in getattr(annotation, "__args__", ()):
        models(inner, found)
    return found


def test_manual_names_every_key_and_variant():
    tables = models(LinkSpec, set())
    assert len(tables) > 20
    for table in tables:
        for key, info in table.model_fields.items():
            assert f"`{key}`" in MANUAL or f"[{key}]" in MANUAL or f".{key}]" in MANUAL, key
            for value in getattr(info.annotation, "__args__", ()):
                if isinstance(value, str):
                    assert f'"{value}"' in MANUAL, value


def test_layout_kinds_of_the_example():
    link = parse_link(EXAMPLE)
    names = {
        Period.SYNC: "sync",
        Period.PILOT: "pilot",
        Period.KNOWN: "known",
        Period.PAYLOAD: "word",
    }
    printed = [row[1].split()[0] for row in table_rows(MANUAL, "period", "carries")]
    assert [names[Period(k)] for k in link.layout.kind] == printed
