"""The link description's tables: air, modulation and pulse here, frame and payload beside."""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import Field, Tag

from spatiq.link.schema_frame import Antenna, Antennas, Frame
from spatiq.link.schema_payload import Payload
from spatiq.link.values import (
    ComplexNumber,
    Number,
    OneOf,
    Table,
    Text,
    Whole,
    by_key,
    by_presence,
    tag,
    text_or_else,
)
from spatiq.signal import constellations, pulses
from spatiq.signal.codebooks import MAX_SETS, SCHEMES
from spatiq.signal.several_antennas import STREAMS

FORMAT = 1
MAX_ANTENNAS = 64
MAX_WORD_BITS = 16

BitString = Annotated[str, Text(r"^[01]{1,16}$", "a string of 1 to 16 characters 0 and 1")]
ShortText = Annotated[str, Text(r"^[^\x00-\x1f\x7f]{1,120}$", "one line of 1 to 120 characters")]


class Air(Table):
    """What is on the air."""

    antennas: Annotated[int, Whole(1, MAX_ANTENNAS)]
    symbol_rate_hz: Annotated[float, Number(1e-3, 1e12)]
    carrier_hz: Annotated[float, Number(0.0, 1e13, above=True)] | None = None
    clock: Annotated[str, OneOf("locked", "independent")] = "independent"


class NamedConstellation(Table):
    """A constellation of the standards."""

    name: Annotated[str, OneOf(*constellations.NAMES)]
    labelling: Annotated[str, OneOf(*constellations.LABELLINGS)] = "3gpp"


class ExplicitConstellation(Table):
    """A constellation point by point."""

    points: Annotated[
        list[Annotated[complex, ComplexNumber()]],
        Field(min_length=2, max_length=constellations.MAX_POINTS),
    ]
    labels: Annotated[
        list[Annotated[str, Text(r"^[01]{1,12}$", "a string of 0 and 1")]],
        Field(
            min_length=2,
            max_length=constellations.MAX_POINTS,
            description="a list of bit strings, one a point",
        ),
    ]
    normalise: Annotated[
        bool,
        Field(description="true (points scaled to mean power 1) or false (sent as written)"),
    ]


ConstellationTable = Annotated[
    Annotated[ExplicitConstellation, Tag(tag("explicit"))]
    | Annotated[NamedConstellation, Tag(tag("named"))],
    by_presence("points", "explicit", "named"),
]


class Word(Table):
    """One word of a vector table: what its antennas send."""

    word: BitString
    antennas: Antennas
    symbols: Annotated[
        list[Annotated[complex, ComplexNumber()]],
        Field(min_length=1, max_length=MAX_ANTENNAS, description="a list of complex numbers"),
    ]


AntennaLists = Annotated[
    list[Annotated[list[Antenna], Field(min_length=1, max_length=MAX_ANTENNAS)]],
    Field(min_length=1, max_length=MAX_SETS),
]


class Modulation(Table):
    """How a word of bits chooses antennas and symbols."""

    scheme: Annotated[str, OneOf(*SCHEMES)]
    constellation: ConstellationTable | None = None
    spatial_bits: (
        Annotated[
            Annotated[
                str, OneOf("first", "last", otherwise="a list of bit positions"), Tag(tag("text"))
            ]
            | Annotated[
                list[Annotated[int, Whole(0, MAX_WORD_BITS - 1)]],
                Field(max_length=MAX_WORD_BITS),
                Tag(tag("list")),
            ],
            text_or_else("list"),
        ]
        | None
    ) = None
    antenna_order: Annotated[list[Antenna], Field(min_length=1, max_length=MAX_ANTENNAS)] | None = (
        None
    )
    active_antennas: Annotated[int, Whole(1, MAX_ANTENNAS)] | None = None
    antenna_sets: AntennaLists | None = None
    streams: Annotated[str, OneOf(*STREAMS)] | None = None
    permutations: AntennaLists | None = None
    words: Annotated[list[Word], Field(min_length=2, max_length=1 << MAX_WORD_BITS)] | None = None
    normalise: bool | None = None


class RootRaisedCosine(Table):
    """Root raised cosine, cut off."""

    shape: Literal["root-raised-cosine"]
    rolloff: Annotated[float, Number(0.0, 1.0)]
    span_symbols: Annotated[float, Number(1.0, pulses.MAX_SPAN)]


class Rectangular(Table):
    """One symbol period of constant height."""

    shape: Literal["rectangular"]


class Tapped(Table):
    """A pulse by its samples."""

    shape: Literal["taps"]
    taps: Annotated[
        list[Annotated[float, Number(-1e6, 1e6)]],
        Field(min_length=1, max_length=pulses.MAX_TAPS, description="a list of real numbers"),
    ]
    samples_per_symbol: Annotated[float, Number(1.0, 1024.0)]


PulseTable = Annotated[
    Annotated[RootRaisedCosine, Tag(tag("root-raised-cosine"))]
    | Annotated[Rectangular, Tag(tag("rectangular"))]
    | Annotated[Tapped, Tag(tag("taps"))],
    by_key("shape", "root-raised-cosine", "rectangular", "taps"),
    Field(description="a [pulse] table"),
]


class LinkSpec(Table):
    """A whole link description, format 1."""

    format: Annotated[int, Whole(FORMAT, FORMAT)]
    name: ShortText | None = None
    air: Annotated[Air, Field(description="an [air] table")]
    modulation: Annotated[Modulation, Field(description="a [modulation] table")]
    pulse: PulseTable
    frame: Annotated[Frame, Field(description="a [frame] table")]
    payload: Payload | None = None


def json_schema() -> dict[str, Any]:
    """JSON Schema of the link description (as TOML gives it: tables are objects)."""
    return LinkSpec.model_json_schema()
