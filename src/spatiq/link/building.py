"""Codebook and pulse of a checked link description."""

from __future__ import annotations

import inspect
from typing import Any

from spatiq.link import schema
from spatiq.link.places import Place, shown
from spatiq.signal import constellations, pulses
from spatiq.signal.codebooks import SCHEMES, Codebook
from spatiq.signal.constellations import Constellation
from spatiq.signal.pulses import Pulse


def _constellation(table: schema.ConstellationTable, place: Place) -> Constellation:
    with place.reporting():
        if isinstance(table, schema.NamedConstellation):
            return constellations.named(table.name, table.labelling)
        return constellations.explicit(table.points, table.labels, table.normalise)


def _antenna_order(table: schema.Modulation, antennas: int, place: Place) -> list[int]:
    """Antenna of each spatial value: as stated, or all in ascending order."""
    order = table.antenna_order
    expected = "2^k antennas, each once"
    if order is None:
        if antennas.bit_count() != 1:
            raise place.fault(
                "nothing", f"{expected}: {antennas} antennas are no power of two, so it is needed"
            )
        return list(range(antennas))
    if len(order).bit_count() != 1 or len(set(order)) != len(order):
        raise place.fault(shown(order), expected)
    for i, antenna in enumerate(order):
        if antenna >= antennas:
            raise (place / i).fault(antenna, f"an antenna number, 0 to {antennas - 1}")
    return order


def _spatial_positions(
    choice: str | list[int], spatial: int, width: int, place: Place
) -> list[int]:
    """Positions in the word (0 = first bit) of the spatial value's bits, most significant first."""
    if choice == "first":
        return list(range(spatial))
    if choice == "last":
        return list(range(width - spatial, width))
    positions = [int(p) for p in choice]
    if len(positions) != spatial or len(set(positions)) != spatial:
        raise place.fault(shown(choice), f"first, last, or {spatial} different positions")
    for i, position in enumerate(positions):
        if position >= width:
            raise (place / i).fault(position, f"a position in the word, 0 to {width - 1}")
    return positions


def codebook(table: schema.Modulation, antennas: int, place: Place) -> Codebook:
    """The codebook that a scheme makes of its settings.

    A scheme is given those settings that its function in `SCHEMES` has parameters for.

    Raises:
        InputError: a setting missing, out of range, or not known to the scheme.
    """
    scheme = SCHEMES[table.scheme]
    wanted = inspect.signature(scheme).parameters
    order = _antenna_order(table, antennas, place / "antenna_order")
    settings: dict[str, Any] = {"antennas": antennas, "antenna_order": order}
    signal = 0
    if "constellation" in wanted:
        if table.constellation is None:
            raise (place / "constellation").fault("nothing", f"a constellation: {table.scheme}")
        points = _constellation(table.constellation, place / "constellation")
        settings["constellation"] = points
        signal = points.bits
    elif table.constellation is not None:
        raise (place / "constellation").fault(
            "a constellation", f"none: {table.scheme} sends the symbol 1 only"
        )
    spatial = len(order).bit_length() - 1
    width = spatial + signal
    if not 1 <= width <= schema.MAX_WORD_BITS:
        raise place.fault(
            f"{width} bits a word ({spatial} spatial, {signal} signal)",
            f"1 to {schema.MAX_WORD_BITS}",
        )
    settings["spatial_positions"] = _spatial_positions(
        table.spatial_bits, spatial, width, place / "spatial_bits"
    )
    with place.reporting():
        return scheme(**settings)


def pulse(table: schema.PulseTable, place: Place) -> Pulse:
    """The pulse.

    Raises:
        InputError: what makes no pulse, such as taps that are all zero.
    """
    with place.reporting():
        if isinstance(table, schema.RootRaisedCosine):
            return pulses.root_raised_cosine(table.rolloff, table.span_symbols)
        if isinstance(table, schema.Tapped):
            return pulses.explicit_taps(table.taps, table.samples_per_symbol)
        return pulses.rectangular()
