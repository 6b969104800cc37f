"""The [modulation] table of every scheme: rules that choose sets, and what is refused."""

import re

import numpy as np
import pytest

from spatiq.errors import InputError
from spatiq.link.loading import parse_link
from spatiq.signal.differential import first_permutations
from spatiq.signal.several_antennas import first_sets

TEXT = """
format = 1
air = {{ antennas = {antennas}, symbol_rate_hz = 1e6 }}
pulse = {{ shape = "rectangular" }}
modulation = {{ {modulation} }}
[[frame.section]]
kind = "sync"
sequence = {{ type = "m-sequence", order = 5 }}
antennas = [0]
[[frame.section]]
kind = "payload"
symbols = {symbols}
{more}
[[payload.field]]
type = "prbs"
name = "PRBS9"
bits = "rest"
"""
QPSK = 'constellation = { name = "QPSK" }'
GENERAL = f'scheme = "generalised-spatial-modulation", {QPSK}'
KEYS = 'scheme = "generalised-space-shift-keying"'
QUADRATURE = 'scheme = "quadrature-spatial-modulation"'
CHANGES = f'scheme = "differential-spatial-modulation", {QPSK}'
TABLE = 'scheme = "vector-table", normalise = false'


def link(modulation, antennas=4, symbols=60, more=""):
    text = TEXT.format(modulation=modulation, antennas=antennas, symbols=symbols, more=more)
    return parse_link(text, "x.toml")


def word(bits, antennas, symbols):
    return f'{{ word = "{bits}", antennas = {antennas}, symbols = {symbols} }}'


def words(*entries):
    return f"{TABLE}, words = [{', '.join(word(*e) for e in entries)}]"


FAULTS = [
    (GENERAL, "antenna_sets", "nothing", "one of them"),
    (f"{GENERAL}, active_antennas = 2, antenna_sets = [[0]]", "antenna_sets", "beside", "one of"),
    (f"{GENERAL}, active_antennas = 5", "active_antennas", "5", "at most 4 antennas"),
    (f"{GENERAL}, active_antennas = 0", "active_antennas", "0", "1 to 64"),
    (f"{GENERAL}, antenna_sets = [[0], [1], [2]]", "antenna_sets", "3 sets", "2\\^k"),
    (f"{GENERAL}, antenna_sets = [[0, 1], [1, 0]]", "antenna_sets[1]", "set 0 again", "differ"),
    (f"{GENERAL}, antenna_sets = [[0, 0], [1]]", "antenna_sets[0]", r"\[0, 0\]", "different"),
    (f"{GENERAL}, antenna_sets = [[0, 4], [1]]", "antenna_sets[0][1]", "4", "0 to 3"),
    (
        f'{GENERAL}, antenna_sets = [[0, 1], [2]], streams = "independent"',
        "antenna_sets",
        "different size",
        "one size",
    ),
    (f'{GENERAL}, active_antennas = 2, streams = "own"', "streams", "'own'", "same, independent"),
    (f"{KEYS}, active_antennas = 2, {QPSK}", "constellation", "a constellation", "none"),
    (f'{KEYS}, active_antennas = 2, streams = "same"', "streams", "a value", "no key of"),
    (f"{KEYS}, active_antennas = 4", "", "0 bits", "1 to 16"),
    (f"{QUADRATURE}, {QPSK}, active_antennas = 2", "active_antennas", "a value", "no key of"),
    (
        f'{QUADRATURE}, constellation = {{ name = "BPSK", labelling = "802.11" }}',
        "",
        "send the same",
        "all differ",
    ),
    (f"{QUADRATURE}, {QPSK}, spatial_bits = [0, 1]", "spatial_bits", r"\[0, 1\]", "4 different"),
    (CHANGES.replace("QPSK", "16QAM"), "", "36 bits|68 bits|20 bits", "1 to 16"),
    (
        f"{CHANGES}, permutations = [[0, 1, 2, 3], [0, 1, 1, 3]]",
        "permutations[1]",
        "0, 1, 1",
        "0 to",
    ),
    (
        f"{CHANGES}, permutations = [[0, 1, 2, 3], [0, 1, 2, 3]]",
        "permutations[1]",
        "permutation 0 again",
        "differ",
    ),
    (
        f"{CHANGES}, permutations = [[3, 2, 1, 0], [0, 1, 2, 3], [0, 1, 3, 2]]",
        "permutations",
        "3",
        "2\\^k",
    ),
    (TABLE, "words", "nothing", "a list of words"),
    (
        f'scheme = "vector-table", words = [{word("0", [0], [1])}, {word("1", [0], [-1])}]',
        "normalise",
        "nothing",
        "true",
    ),
    (words(("0", [0], [1]), ("0", [1], [1])), "words[1].word", "'0'", "once"),
    (words(("0", [0], [1]), ("11", [1], [1])), "words[1].word", "'11'", "1 bits"),
    (words(("0", [0], [1]), ("1", [0, 1], [1])), "words[1].symbols", "1 symbols", "each of 2"),
    (words(("0", [0], [1]), ("1", [4], [1])), "words[1].antennas[0]", "4", "0 to 3"),
    (words(("0", [0], [1]), ("1", [1], [0])), "words", "word 1 sends nothing", "active"),
    (words(("0", [0], [1]), ("1", [0], [1])), "", "0 and 1 send the same", "all differ"),
    (
        f'{words(("0", [0], [1]), ("1", [0], [2]))}, spatial_bits = "first"',
        "spatial_bits",
        "first",
        "list",
    ),
]


@pytest.mark.parametrize(("modulation", "key", "found", "expected"), FAULTS)
def test_what_is_refused(modulation, key, found, expected):
    with pytest.raises(InputError) as caught:
        link(modulation)
    assert caught.value.field == ("modulation." + key).rstrip(".")
    assert re.search(found, caught.value.found), caught.value
    assert re.search(expected, caught.value.expected), caught.value
    assert "\n" not in str(caught.value)


@pytest.mark.parametrize(("points", "antennas"), [("16QAM", 2), ("64QAM", 2)])
def test_the_differential_form_takes_phases_only(points, antennas):
    """Points of several magnitudes do not stay among themselves when they are multiplied."""
    with pytest.raises(InputError, match=r"constellation: found .*; expected phase-shift keying"):
        link(CHANGES.replace("QPSK", points), antennas)


def test_one_antenna_has_no_differential_form():
    with pytest.raises(InputError, match="1 antenna; expected at least 2"):
        link(CHANGES, 1)


@pytest.mark.parametrize("symbols", [2, 61])
def test_payload_sections_of_the_differential_form_are_whole_blocks(symbols):
    with pytest.raises(InputError, match=rf"section\[1\].symbols: found {symbols}; .* blocks of 2"):
        link(CHANGES, 2, symbols)


def test_no_known_symbols_among_differential_blocks():
    known = 'known = { every = 9, sequence = { type = "list", symbols = [1] } }'
    with pytest.raises(InputError, match=r"section\[1\].known: .* blocks follow blocks"):
        link(CHANGES, 2, 60, known)


def test_frame_of_the_differential_form():
    made = link(CHANGES, 2, 60, "power_db = 6.0")
    assert made.words_per_frame == 29  # of 30 blocks, the first is the reference
    assert made.payload.n_bits == 29 * 5
    assert made.layout.payload_runs() == (60,)
    np.testing.assert_allclose(made.layout.known[31:33], 10**0.3 * np.eye(2))
    carried = made.carried(np.zeros((1, 29), np.int64))
    assert carried.shape == (1, 60)
    # Words of zeros change nothing: antennas 0, 1, 0, 1, ... send 1.
    np.testing.assert_array_equal(carried[0], np.tile([0, 4], 30))


@pytest.mark.nojit
def test_sets_and_permutations_by_rule():
    """As the manual lists them."""
    assert first_sets(4, 2) == [(0, 1), (0, 2), (0, 3), (1, 2)]
    assert first_permutations(3) == [(0, 1, 2), (0, 2, 1), (1, 0, 2), (1, 2, 0)]
    assert [len(first_sets(n, n // 2)) for n in (2, 5, 6, 8)] == [2, 8, 16, 64]
    assert [len(first_permutations(n)) for n in (2, 4, 5, 6, 7)] == [2, 16, 64, 256, 256]


def test_a_word_of_sixteen_bits():
    """65,536 words, as many as there may be."""
    made = link(
        f'{GENERAL.replace("QPSK", "64QAM")}, active_antennas = 2, streams = "independent"', 8
    )
    assert made.codebook.size == 1 << 16
    assert len(made.codebook.antenna_sets) == 16
    assert "65520 more words" in made.explain()
