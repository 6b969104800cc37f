"""Whatever a file holds: an InputError or a Link, nothing else."""

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from links import base, parsed, toml

from spatiq.errors import InputError
from spatiq.link import Link, parse_link

SCALARS = st.one_of(
    st.booleans(),
    st.integers(-3, 70),
    st.integers(-(2**70), 2**70),
    st.floats(),
    st.floats(-2, 40),
    st.text(max_size=8),
    st.sampled_from(
        [
            "rest",
            "together",
            "in-turn",
            "sync",
            "pilots",
            "payload",
            "silence",
            "list",
            "gold",
            "prbs",
            "data",
            "crc",
            "file",
            "first",
            "last",
            "gold-3gpp",
            "taps",
            "8PSK",
            "PRBS20-zs",
            "space-shift-keying",
            "self-synchronising",
            "<sync>",
            "../x",
        ]
    ),
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.one_of(
        st.lists(inner, max_size=4), st.dictionaries(st.text(max_size=6), inner, max_size=3)
    ),
    max_leaves=6,
)
KEYS = st.sampled_from(
    ["length", "repeat", "cover", "taps", "order", "bits", "covers", "state", "power_db", "first"]
)


def containers(value):
    """All tables and lists of a value, itself first."""
    yield value
    for inner in value.values() if isinstance(value, dict) else value:
        if isinstance(inner, dict | list):
            yield from containers(inner)


@st.composite
def mutated(draw):
    tables = base()
    for _ in range(draw(st.integers(1, 3))):
        place = draw(st.sampled_from(list(containers(tables))))
        keys = list(place) if isinstance(place, dict) else list(range(len(place)))
        action = draw(st.sampled_from(["set", "set", "drop", "add"]))
        if action == "add" and isinstance(place, dict):
            place[draw(st.one_of(KEYS, st.text(max_size=6)))] = draw(VALUES)
        elif action == "add":
            place.append(draw(VALUES))
        elif keys and action == "drop":
            del place[draw(st.sampled_from(keys))]
        elif keys:
            place[draw(st.sampled_from(keys))] = draw(VALUES)
    return tables


def link_or_one_line(parse):
    try:
        link = parse()
    except InputError as fault:
        assert "\n" not in str(fault)
        assert fault.found and fault.expected
        return None
    assert isinstance(link, Link)
    return link


@settings(max_examples=500000, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(mutated())
def test_mutated_tables(tables):
    link = link_or_one_line(lambda: parsed(tables))
    if link is not None:
        assert all(len(line) <= 100 for line in link.explain().splitlines())


TEXT = toml(base())


@settings(max_examples=5000, deadline=None)
@given(st.integers(0, len(TEXT)), st.integers(0, 8), st.text(max_size=8))
def test_mutated_text(start, cut, insert):
    text = TEXT[:start] + insert + TEXT[start + cut :]
    link_or_one_line(lambda: parse_link(text))


@settings(max_examples=100, deadline=None)
@given(st.text())
def test_any_text(text):
    assert link_or_one_line(lambda: parse_link(text)) is None


def test_the_unmutated_description_is_a_link():
    assert isinstance(parsed(base()), Link)
