"""Tables of a link description: the frame, its sections and their known sequences.

To add a sequence or a section: write its table here, enter it in the union and in the
discriminator below it, build it in `spatiq.link.known_symbols` or `spatiq.link.frame_building`, and
describe it in manual.md (a test checks that the manual names every key).
"""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, Tag

from spatiq.link.blocks import FORMS
from spatiq.link.values import (
    ComplexNumber,
    Number,
    OneOf,
    Table,
    Whole,
    by_key,
    tag,
)

MAX_SYMBOLS = 1_000_000
MAX_SECTIONS = 1000
MAX_REPEAT = 10_000
MAX_POWER_DB = 60.0
MAX_BLOCK = 65_536

Antenna = Annotated[int, Whole(0, 63)]
Antennas = Annotated[
    list[Antenna],
    Field(min_length=1, max_length=64, description="a list of antenna numbers, 0 the first"),
]
Symbols = Annotated[int, Whole(1, MAX_SYMBOLS)]
Power = Annotated[float, Number(-MAX_POWER_DB, MAX_POWER_DB)]
Shift = Annotated[int, Whole(0, MAX_SYMBOLS)]
Weight = Annotated[complex, ComplexNumber()]
Taps = Annotated[
    list[Annotated[int, Whole(1, 62)]],
    Field(min_length=1, max_length=62, description="a list of stage numbers, 1 to 62"),
]


class _Sequence(Table):
    """What all sequences share: cut or extended cyclically, begun elsewhere."""

    cyclic_shift: Shift = 0


class MSequence(_Sequence):
    """Maximal-length sequence of +-1."""

    type: Literal["m-sequence"]
    order: Annotated[int, Whole(2, 16)]
    taps: Taps | None = None
    state: Annotated[int, Whole(1, 65535)] | None = None
    length: Symbols | None = None


class ZadoffChu(_Sequence):
    """Zadoff-Chu sequence; `length` is the N of its formula."""

    type: Literal["zadoff-chu"]
    length: Annotated[int, Whole(2, MAX_SYMBOLS)]
    root: Annotated[int, Whole(1, MAX_SYMBOLS)]


class Gold(_Sequence):
    """Gold sequence of +-1 from a preferred pair."""

    type: Literal["gold"]
    order: Annotated[int, Whole(5, 11)]
    index: Annotated[int, Whole(0, 2048)]
    length: Symbols | None = None


class Gold3gpp(_Sequence):
    """+-1 from the pseudo-random bits of 3GPP TS 38.211 clause 5.2.1."""

    type: Literal["gold-3gpp"]
    c_init: Annotated[int, Whole(0, 2**31 - 1)]
    length: Symbols


class SymbolList(_Sequence):
    """Symbols written out."""

    type: Literal["list"]
    symbols: Annotated[
        list[Annotated[complex, ComplexNumber()]],
        Field(min_length=1, max_length=100_000, description="a list of [real, imaginary] pairs"),
    ]
    length: Symbols | None = None


Sequence = Annotated[
    Annotated[MSequence, Tag(tag("m-sequence"))]
    | Annotated[ZadoffChu, Tag(tag("zadoff-chu"))]
    | Annotated[Gold, Tag(tag("gold"))]
    | Annotated[Gold3gpp, Tag(tag("gold-3gpp"))]
    | Annotated[SymbolList, Tag(tag("list"))],
    by_key("type", "m-sequence", "zadoff-chu", "gold", "gold-3gpp", "list"),
    Field(description="a table with type, such as {type = 'm-sequence', order = 6}"),
]


class _KnownSection(Table):
    """Known symbols, from one antenna after the other or from all at once."""

    sequence: Sequence
    antennas: Antennas | None = None
    send: Annotated[str, OneOf("together", "in-turn")] | None = None
    repeat: Annotated[int, Whole(1, MAX_REPEAT)] = 1
    power_db: Power = 0.0
    cover: (
        Annotated[
            list[Annotated[list[Weight], Field(min_length=1, max_length=MAX_REPEAT)]],
            Field(min_length=1, max_length=64),
        ]
        | None
    ) = None
    antenna_shift: Annotated[list[Shift], Field(min_length=1, max_length=64)] | None = None


class SyncSection(_KnownSection):
    """Known symbols that the frame search looks for."""

    kind: Literal["sync"]


class PilotSection(_KnownSection):
    """Known symbols for channel estimation."""

    kind: Literal["pilots"]


class Interspersed(Table):
    """Known symbols at regular places inside a payload section."""

    every: Annotated[int, Whole(2, MAX_SYMBOLS)]
    first: Annotated[int, Whole(0, MAX_SYMBOLS - 1)] = 0
    sequence: Sequence
    antennas: Antennas | None = None


class Blocks(Table):
    """Payload in blocks, with a guard each against echoes."""

    form: Annotated[str, OneOf(*FORMS)]
    length: Annotated[int, Whole(2, MAX_BLOCK)]
    guard: Annotated[int, Whole(0, MAX_BLOCK)]
    subcarriers: (
        Annotated[
            list[Annotated[int, Whole(0, MAX_BLOCK - 1)]],
            Field(min_length=1, max_length=MAX_BLOCK, description="a list of subcarrier numbers"),
        ]
        | None
    ) = None


class PayloadSection(Table):
    """Words of payload bits."""

    kind: Literal["payload"]
    symbols: Symbols
    power_db: Power = 0.0
    known: Interspersed | None = None
    blocks: Blocks | None = None


class SilenceSection(Table):
    """Nothing is sent."""

    kind: Literal["silence"]
    symbols: Symbols


Section = Annotated[
    Annotated[SyncSection, Tag(tag("sync"))]
    | Annotated[PilotSection, Tag(tag("pilots"))]
    | Annotated[PayloadSection, Tag(tag("payload"))]
    | Annotated[SilenceSection, Tag(tag("silence"))],
    by_key("kind", "sync", "pilots", "payload", "silence"),
]


class Frame(Table):
    """Sections in the order sent, and how often frames begin."""

    period_symbols: Annotated[float, Number(0.0, 1e12, above=True)] | None = None
    period_s: Annotated[float, Number(0.0, 1e9, above=True)] | None = None
    section: Annotated[
        list[Section],
        Field(min_length=1, max_length=MAX_SECTIONS, description="at least one [[frame.section]]"),
    ]
