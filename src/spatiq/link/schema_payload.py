"""Tables of a link description: the payload's fields and its scrambler.

To add a field: write its table here, enter it in the union and the discriminator, give it a source
in `spatiq.link.payload_fields`, build it in `spatiq.link.payload_building`, describe it in
manual.md.
"""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, Tag

from spatiq.link.schema_frame import Taps
from spatiq.link.values import OneOf, Table, Text, Whole, by_key, tag, text_or_else
from spatiq.signal import crc, prbs

MAX_FIELDS = 64
MAX_BITS = 16_000_000
MAX_COUNTER_BITS = 62
LARGEST_REGISTER = 2**64 - 1

Bits = Annotated[int, Whole(1, MAX_BITS)]
BitsOrRest = Annotated[
    Annotated[str, OneOf("rest", otherwise="a whole number of bits"), Tag(tag("text"))]
    | Annotated[Bits, Tag(tag("number"))],
    text_or_else("number"),
    Field(description="a whole number of bits, or 'rest'"),
]
Continuation = Annotated[str, OneOf("restart", "running")]
Register = Annotated[int, Whole(0, LARGEST_REGISTER)]


class CounterField(Table):
    """Frame number, modulo 2^bits."""

    type: Literal["counter"]
    bits: Annotated[int, Whole(1, MAX_COUNTER_BITS)]
    order: Annotated[str, OneOf("msb-first", "lsb-first")] = "msb-first"
    start: Annotated[int, Whole(0, 2**MAX_COUNTER_BITS - 1)] = 0


class PrbsField(Table):
    """Pseudo-random bits of ITU-T O.150."""

    type: Literal["prbs"]
    name: Annotated[str, OneOf(*prbs.NAMES)]
    inverted: bool | None = None
    bits: BitsOrRest
    continuation: Continuation = "restart"


class FileField(Table):
    """Bits of a file that lies beside the link description."""

    type: Literal["file"]
    file: Annotated[
        str,
        Text(r"^[^/\\\x00-\x1f]{1,255}$", "the name of a file beside the link description"),
    ]
    bits: BitsOrRest
    continuation: Continuation = "restart"


class FixedField(Table):
    """Bits written out."""

    type: Literal["fixed"]
    value: Annotated[str, Text(r"^[01]+$", "a string of 0 and 1")]


class DataField(Table):
    """Bits that the receiver does not know."""

    type: Literal["data"]
    bits: BitsOrRest


class CrcField(Table):
    """Check bits: by name in the catalogue, or by all of its parameters."""

    type: Literal["crc"]
    name: Annotated[str, OneOf(*crc.CATALOGUE)] | None = None
    width: Annotated[int, Whole(1, crc.MAX_WIDTH)] | None = None
    poly: Register | None = None
    init: Register | None = None
    refin: bool | None = None
    refout: bool | None = None
    xorout: Register | None = None
    covers: Annotated[
        Annotated[str, OneOf("all-before", otherwise="a list of field indices"), Tag(tag("text"))]
        | Annotated[
            list[Annotated[int, Whole(0, MAX_FIELDS - 1)]],
            Field(min_length=1, max_length=MAX_FIELDS),
            Tag(tag("list")),
        ],
        text_or_else("list"),
    ] = "all-before"


PayloadField = Annotated[
    Annotated[CounterField, Tag(tag("counter"))]
    | Annotated[PrbsField, Tag(tag("prbs"))]
    | Annotated[FileField, Tag(tag("file"))]
    | Annotated[FixedField, Tag(tag("fixed"))]
    | Annotated[DataField, Tag(tag("data"))]
    | Annotated[CrcField, Tag(tag("crc"))],
    by_key("type", "counter", "prbs", "file", "fixed", "data", "crc"),
]


class AdditiveTable(Table):
    """Bits XORed with what a shift register feeds back."""

    type: Literal["additive"]
    taps: Taps
    seed: Annotated[int, Whole(1, 2**62 - 1)]


class Gold3gppTable(Table):
    """Bits XORed with the sequence of 3GPP TS 38.211 clause 5.2.1."""

    type: Literal["gold-3gpp"]
    c_init: Annotated[int, Whole(0, 2**31 - 1)]


class SelfSynchronisingTable(Table):
    """Each bit sent is the plain bit XOR earlier bits sent."""

    type: Literal["self-synchronising"]
    taps: Taps
    state: Annotated[int, Whole(0, 2**62 - 1)] = 0


ScramblerTable = Annotated[
    Annotated[AdditiveTable, Tag(tag("additive"))]
    | Annotated[Gold3gppTable, Tag(tag("gold-3gpp"))]
    | Annotated[SelfSynchronisingTable, Tag(tag("self-synchronising"))],
    by_key("type", "additive", "gold-3gpp", "self-synchronising"),
]


class Payload(Table):
    """What the payload's bits are."""

    field: Annotated[
        list[PayloadField],
        Field(min_length=1, max_length=MAX_FIELDS, description="at least one [[payload.field]]"),
    ]
    scrambler: ScramblerTable | None = None
