"""Codebook of a checked link description.

A scheme is given those settings that its function in `SCHEMES` has parameters for; `_SETTINGS` says
which keys of [modulation] make each of them. Other keys are refused.
"""

from __future__ import annotations

import inspect
from collections.abc import Callable, Sequence
from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link import schema
from spatiq.link.places import Place, shown
from spatiq.signal import constellations
from spatiq.signal.codebooks import MAX_SETS, SCHEMES, Codebook
from spatiq.signal.constellations import Constellation
from spatiq.signal.differential import first_permutations
from spatiq.signal.several_antennas import first_sets

# Antennas chosen by one word, where it is not one: real and imaginary part choose theirs.
_CHOICES = {"quadrature-spatial-modulation": 2}


def _constellation(table: schema.Modulation, antennas: int, place: Place) -> Constellation:
    given, inside = table.constellation, place / "constellation"
    if given is None:
        raise inside.fault("nothing", f"a constellation: {table.scheme}")
    with inside.reporting():
        if isinstance(given, schema.NamedConstellation):
            return constellations.named(given.name, given.labelling)
        return constellations.explicit(given.points, given.labels, given.normalise)


def _check_antennas(chosen: Sequence[int], antennas: int, place: Place) -> None:
    """Different antennas, all of them there."""
    if len(set(chosen)) != len(chosen):
        raise place.fault(shown(list(chosen)), "different antennas")
    for i, antenna in enumerate(chosen):
        if antenna >= antennas:
            raise (place / i).fault(antenna, f"an antenna number, 0 to {antennas - 1}")


def _antenna_order(table: schema.Modulation, antennas: int, place: Place) -> list[int]:
    """Antenna of each spatial value: as stated, or all in ascending order."""
    order, inside = table.antenna_order, place / "antenna_order"
    expected = "2^k antennas, each once"
    if order is None:
        if antennas.bit_count() != 1:
            raise inside.fault(
                "nothing", f"{expected}: {antennas} antennas are no power of two, so it is needed"
            )
        return list(range(antennas))
    if len(order).bit_count() != 1 or len(set(order)) != len(order):
        raise inside.fault(shown(order), expected)
    _check_antennas(order, antennas, inside)
    return order


def _antenna_sets(table: schema.Modulation, antennas: int, place: Place) -> Sequence[Sequence[int]]:
    """Antenna set of each spatial value: as listed, or by the rule of `first_sets`."""
    listed, inside = table.antenna_sets, place / "antenna_sets"
    number = table.active_antennas
    if (listed is None) == (number is None):
        found = "nothing" if listed is None else "sets beside active_antennas"
        raise inside.fault(found, "antenna_sets or active_antennas, one of them")
    if listed is None:
        number = number or 0
        if number > antennas:
            raise (place / "active_antennas").fault(number, f"at most {antennas} antennas")
        if comb(antennas, number) >= 2 * MAX_SETS:
            sets = f"{comb(antennas, number)} sets of {number} of {antennas} antennas"
            raise (place / "active_antennas").fault(sets, f"fewer than {2 * MAX_SETS}")
        return first_sets(antennas, number)
    if len(listed).bit_count() != 1:
        raise inside.fault(f"{len(listed)} sets", "2^k antenna sets")
    seen: dict[frozenset[int], int] = {}
    for i, members in enumerate(listed):
        _check_antennas(members, antennas, inside / i)
        first = seen.setdefault(frozenset(members), i)
        if first != i:
            raise (inside / i).fault(f"the antennas of set {first} again", "sets that all differ")
    return listed


def _permutations(table: schema.Modulation, antennas: int, place: Place) -> Sequence[Sequence[int]]:
    """Permutation of each spatial value: as listed, or by the rule of `first_permutations`."""
    listed, inside = table.permutations, place / "permutations"
    if listed is None:
        if antennas > schema.MAX_WORD_BITS:  # a symbol each would take more bits than a word has
            raise place.fault(
                f"{antennas} antennas", f"at most {schema.MAX_WORD_BITS} in differential form"
            )
        return first_permutations(antennas)
    if len(listed).bit_count() != 1:
        raise inside.fault(f"{len(listed)} permutations", "2^k permutations")
    seen: dict[tuple[int, ...], int] = {}
    for i, rows in enumerate(listed):
        if sorted(rows) != list(range(antennas)):
            raise (inside / i).fault(shown(rows), f"the numbers 0 to {antennas - 1}, each once")
        first = seen.setdefault(tuple(rows), i)
        if first != i:
            raise (inside / i).fault(f"permutation {first} again", "permutations that all differ")
    return listed


def _streams(table: schema.Modulation, antennas: int, place: Place) -> str:
    return table.streams or "same"


def _vectors(table: schema.Modulation, antennas: int, place: Place) -> NDArray[np.complex128]:
    """Transmit vector of each word of a table."""
    listed, inside = table.words, place / "words"
    if listed is None:
        raise inside.fault("nothing", "a list of words")
    width = len(listed).bit_length() - 1
    if len(listed).bit_count() != 1:
        raise inside.fault(f"{len(listed)} words", "2^b words, every word of b bits once")
    vectors = np.zeros((len(listed), antennas), np.complex128)
    seen: set[str] = set()
    for i, entry in enumerate(listed):
        if len(entry.word) != width or entry.word in seen:
            raise (inside / i / "word").fault(
                repr(entry.word), f"{width} bits, every word of so many bits once"
            )
        seen.add(entry.word)
        _check_antennas(entry.antennas, antennas, inside / i / "antennas")
        if len(entry.symbols) != len(entry.antennas):
            found = f"{len(entry.symbols)} symbols"
            raise (inside / i / "symbols").fault(found, f"one for each of {len(entry.antennas)}")
        vectors[int(entry.word, 2), entry.antennas] = entry.symbols
    return vectors


def _normalise(table: schema.Modulation, antennas: int, place: Place) -> bool:
    if table.normalise is None:
        expected = "true (mean total power scaled to 1) or false (sent as written)"
        raise (place / "normalise").fault("nothing", expected)
    return table.normalise


_Builder = Callable[[schema.Modulation, int, Place], Any]
_SETTINGS: dict[str, tuple[_Builder, tuple[str, ...]]] = {
    "constellation": (_constellation, ("constellation",)),
    "antenna_order": (_antenna_order, ("antenna_order",)),
    "antenna_sets": (_antenna_sets, ("antenna_sets", "active_antennas")),
    "antenna_permutations": (_permutations, ("permutations",)),
    "streams": (_streams, ("streams",)),
    "vectors": (_vectors, ("words",)),
    "normalise": (_normalise, ("normalise",)),
}


def _refuse_other_keys(table: schema.Modulation, wanted: set[str], place: Place) -> None:
    for setting, (_, keys) in _SETTINGS.items():
        for key in keys:
            if setting not in wanted and getattr(table, key) is not None:
                if key == "constellation":
                    found, expected = "a constellation", f"none: {table.scheme} has none"
                else:
                    found, expected = "a value", f"none: it is no key of {table.scheme}"
                raise (place / key).fault(found, expected)


def _widths(settings: dict[str, Any], antennas: int, choices: int) -> tuple[int, int]:
    """Spatial and signal bits of a word that makes so many choices of its kind."""
    kinds = ("antenna_order", "antenna_sets", "antenna_permutations")
    chosen = next(settings[kind] for kind in kinds if kind in settings)
    points = settings.get("constellation")
    signal = 0 if points is None else points.bits
    if settings.get("streams") == "independent":
        signal *= max(len(s) for s in chosen)
    if "antenna_permutations" in settings:
        signal *= antennas
    return (len(chosen).bit_length() - 1) * choices, signal


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


def _table_positions(choice: str | list[int] | None, width: int, place: Place) -> list[int]:
    """Positions that a vector table's author counts as spatial: none unless listed."""
    if isinstance(choice, str):
        raise place.fault(choice, "a list of positions: a vector table has no spatial value")
    positions = [] if choice is None else [int(p) for p in choice]
    return _spatial_positions(positions, len(set(positions)), width, place)


def codebook(table: schema.Modulation, antennas: int, place: Place) -> Codebook:
    """The codebook that a scheme makes of its settings.

    Args:
        table: the checked table.
        antennas: Nt.
        place: where it stands.

    Raises:
        InputError: a setting missing, out of range, or not known to the scheme.
    """
    scheme = SCHEMES[table.scheme]
    wanted = set(inspect.signature(scheme).parameters)
    _refuse_other_keys(table, wanted, place)
    settings = {
        name: build(table, antennas, place)
        for name, (build, _) in _SETTINGS.items()
        if name in wanted
    }
    inside = place / "spatial_bits"
    if "vectors" in settings:
        width = len(settings["vectors"]).bit_length() - 1
        positions = _table_positions(table.spatial_bits, width, inside)
    else:
        choices = _CHOICES.get(table.scheme, 1)
        spatial, signal = _widths(settings, antennas, choices)
        width = spatial + signal
        if not 1 <= width <= schema.MAX_WORD_BITS:
            found = f"{width} bits a word ({spatial} spatial, {signal} signal)"
            raise place.fault(found, f"1 to {schema.MAX_WORD_BITS}")
        positions = _spatial_positions(table.spatial_bits or "first", spatial, width, inside)
    settings["spatial_positions"] = positions
    if "antennas" in wanted:
        settings["antennas"] = antennas
    with place.reporting():
        return scheme(**settings)
