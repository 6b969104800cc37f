"""Known symbols: sequences, and the vectors that sync and pilot sections send."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.link import schema_frame as tables
from spatiq.link.places import Place, shown
from spatiq.signal import sequences

Complex = NDArray[np.complex128]


def _base(table: tables.Sequence) -> Complex:
    """One period of a sequence, as its definition gives it."""
    if isinstance(table, tables.MSequence):
        values = sequences.m_sequence(table.order, table.taps, table.state)
        return np.asarray(values, np.complex128)
    if isinstance(table, tables.ZadoffChu):
        return sequences.zadoff_chu(table.length, table.root)
    if isinstance(table, tables.Gold):
        return np.asarray(sequences.gold(table.order, table.index), np.complex128)
    if isinstance(table, tables.Gold3gpp):
        bits = sequences.gold_3gpp(table.c_init, table.length)
        return np.asarray(1.0 - 2.0 * bits.astype(np.float64), np.complex128)
    return np.array(table.symbols, np.complex128)


def sequence(table: tables.Sequence, place: Place, shift: int = 0) -> Complex:
    """Symbols of a sequence: shifted cyclically, then cut or extended cyclically.

    Args:
        table: the sequence's table.
        place: where it stands.
        shift: cyclic shift beside the table's own.

    Returns:
        complex128, shape (n,): entry i is the base sequence's entry i + shifts, modulo its length.

    Raises:
        InputError: parameters that give no such sequence.
    """
    with place.reporting():
        base = _base(table)
    length = base.size if table.length is None else table.length
    index = (np.arange(length) + table.cyclic_shift + shift) % base.size
    return base[index]


def checked_antennas(given: list[int] | None, antennas: int, place: Place) -> list[int]:
    """Antennas of a section: as stated, or all.

    Raises:
        InputError: a number that is no antenna, or one given twice.
    """
    if given is None:
        return list(range(antennas))
    for i, antenna in enumerate(given):
        if antenna >= antennas:
            raise (place / i).fault(antenna, f"an antenna number, 0 to {antennas - 1}")
        if antenna in given[:i]:
            raise (place / i).fault(f"antenna {antenna} again", "each antenna once")
    return given


def _cover(table: tables.SyncSection | tables.PilotSection, count: int, place: Place) -> Complex:
    """Weight of each antenna (rows) in each repetition (columns)."""
    if table.cover is None:
        return np.ones((count, table.repeat), np.complex128)
    if len(table.cover) != count:
        raise place.fault(f"{len(table.cover)} lists", f"{count}, one for each antenna")
    for i, weights in enumerate(table.cover):
        if len(weights) != table.repeat:
            raise (place / i).fault(
                f"{len(weights)} weights", f"{table.repeat}, one for each repetition"
            )
    return np.array(table.cover, np.complex128)


def _together(
    table: tables.SyncSection | tables.PilotSection, chosen: list[int], antennas: int, place: Place
) -> Complex:
    shifts = table.antenna_shift
    if shifts is not None and len(shifts) != len(chosen):
        raise (place / "antenna_shift").fault(
            f"{len(shifts)} shifts", f"{len(chosen)}, one for each antenna"
        )
    cover = _cover(table, len(chosen), place / "cover")
    columns = [
        sequence(table.sequence, place / "sequence", shifts[i] if shifts else 0)
        for i in range(len(chosen))
    ]
    vectors = np.zeros((table.repeat * columns[0].size, antennas), np.complex128)
    for i, antenna in enumerate(chosen):
        vectors[:, antenna] = np.outer(cover[i], columns[i]).ravel()
    return vectors


def _in_turn(
    table: tables.SyncSection | tables.PilotSection, chosen: list[int], antennas: int, place: Place
) -> Complex:
    for key in ("cover", "antenna_shift"):
        if getattr(table, key) is not None:
            raise (place / key).fault("a value", 'none: it goes with send = "together"')
    symbols = sequence(table.sequence, place / "sequence")
    turn = np.zeros((len(chosen), symbols.size, antennas), np.complex128)
    for i, antenna in enumerate(chosen):
        turn[i, :, antenna] = symbols
    return np.tile(turn.reshape(-1, antennas), (table.repeat, 1))


def section_length(
    table: tables.SyncSection | tables.PilotSection, antennas: int, place: Place
) -> int:
    """Symbol periods that a sync or pilot section takes, found without building its vectors."""
    symbols = table.sequence.length
    if symbols is None:
        symbols = sequence(table.sequence, place / "sequence").size
    turns = 1
    if table.send == "in-turn":
        turns = antennas if table.antennas is None else len(table.antennas)
    return symbols * turns * table.repeat


def section_vectors(
    table: tables.SyncSection | tables.PilotSection, antennas: int, place: Place
) -> Complex:
    """What a sync or pilot section sends: complex128, shape (periods, Nt), power included.

    Raises:
        InputError: settings that do not go together.
    """
    chosen = checked_antennas(table.antennas, antennas, place / "antennas")
    if table.send is None and len(chosen) > 1:
        raise (place / "send").fault(
            "nothing", f"together or in-turn, for antennas {shown(chosen)}"
        )
    build = _in_turn if table.send == "in-turn" else _together
    vectors = build(table, chosen, antennas, place)
    return np.asarray(vectors * 10.0 ** (table.power_db / 20.0), np.complex128)
