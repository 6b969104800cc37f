"""Payload format of a checked link description."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from spatiq.link import schema_payload as tables
from spatiq.link.payload import PayloadFormat
from spatiq.link.payload_fields import (
    CounterSource,
    CrcSource,
    FieldSpan,
    FileSource,
    FixedSource,
    PrbsSource,
)
from spatiq.link.places import Place, shown
from spatiq.signal import crc, scramblers
from spatiq.signal.prbs import prbs

MAX_FILE_BYTES = 64 << 20
CRC_PARAMETERS = ("width", "poly", "init", "refin", "refout", "xorout")


def _file_bits(name: str, folder: Path | None, place: Place) -> NDArray[np.uint8]:
    """Bits of a file beside the link description, most significant bit of each byte first."""
    expected = "a file beside the link description"
    if folder is None:
        raise place.fault(shown(name), f"{expected}, which itself must be read from a folder")
    if name in (".", ".."):
        raise place.fault(shown(name), expected)
    try:
        path = (folder / name).resolve()
        if path.parent != folder.resolve():
            raise place.fault(shown(name), f"{expected}: links must not leave the folder")
        if not path.is_file():
            raise place.fault(f"{shown(name)}, which is no file there", expected)
        size = path.stat().st_size
        if not 1 <= size <= MAX_FILE_BYTES:
            raise place.fault(f"{shown(name)} of {size} bytes", f"1 to {MAX_FILE_BYTES} bytes")
        content = path.read_bytes()
    except OSError as fault:
        raise place.fault(f"{shown(name)}: {fault.strerror}", expected) from fault
    return np.unpackbits(np.frombuffer(content, np.uint8))


def _crc(table: tables.CrcField, place: Place) -> crc.Crc:
    stated = [key for key in CRC_PARAMETERS if getattr(table, key) is not None]
    if table.name is not None:
        if stated:
            raise (place / stated[0]).fault("a value", "none beside name")
        return crc.named(table.name)
    for key in CRC_PARAMETERS:
        if key not in stated:
            raise (place / key).fault("nothing", "name, or all of " + ", ".join(CRC_PARAMETERS))
    with place.reporting():
        return crc.Crc("explicit", **{key: getattr(table, key) for key in CRC_PARAMETERS})


def _covers(
    table: tables.CrcField, index: int, widths: list[int], code: crc.Crc, place: Place
) -> tuple[int, ...]:
    """Fields covered: earlier ones, each once, whole bytes where the code mirrors bytes."""
    if isinstance(table.covers, str):
        covered = tuple(range(index))
    else:
        covered = tuple(int(i) for i in table.covers)
        for i, other in enumerate(covered):
            if other >= index or other in covered[:i]:
                raise (place / "covers" / i).fault(
                    other, f"an earlier field, once each, below {index}"
                )
    total = sum(widths[i] for i in covered)
    if not total:
        raise (place / "covers").fault("no bits", "at least one field before the check bits")
    if code.refin and total % 8:
        raise (place / "covers").fault(
            f"{total} bits", "whole bytes (a multiple of 8 bits), as refin mirrors bytes"
        )
    return covered


def _source(
    table: tables.PayloadField, folder: Path | None, place: Place
) -> tuple[CounterSource | PrbsSource | FileSource | FixedSource | None, str]:
    """What gives the bits of a field that is no CRC, and one line about it."""
    if isinstance(table, tables.CounterField):
        if table.start >= 1 << table.bits:
            raise (place / "start").fault(table.start, f"0 to {(1 << table.bits) - 1}")
        text = f"frame number, {table.order}, from {table.start}"
        return CounterSource(table.start, table.order == "msb-first"), text
    if isinstance(table, tables.PrbsField):
        sequence = prbs(table.name, table.inverted)
        polarity = "inverted" if sequence.inverted else "not inverted"
        text = f"{table.name}, {polarity}, {table.continuation}"
        return PrbsSource(sequence, table.continuation == "running"), text
    if isinstance(table, tables.FileField):
        content = _file_bits(table.file, folder, place / "file")
        text = f"file {table.file}, {content.size} bits, {table.continuation}"
        return FileSource(table.file, content, table.continuation == "running"), text
    if isinstance(table, tables.FixedField):
        value = np.array([c == "1" for c in table.value], np.uint8)
        return FixedSource(value), f"fixed {shown(table.value)[1:-1]}"
    return None, "data, unknown to the receiver"


def _width(table: tables.PayloadField, place: Place) -> int | None:
    """Bits of a field; None for the rest."""
    if isinstance(table, tables.FixedField):
        return len(table.value)
    if isinstance(table, tables.CrcField):
        return _crc(table, place).width
    return None if isinstance(table.bits, str) else int(table.bits)


def _widths(fields: list[tables.PayloadField], n_bits: int, place: Place) -> list[int]:
    """Bits of each field, "rest" worked out."""
    stated = [_width(f, place / i) for i, f in enumerate(fields)]
    taken = sum(w for w in stated if w is not None)
    open_ended = [i for i, w in enumerate(stated) if w is None]
    if len(open_ended) > 1:
        raise (place / open_ended[1] / "bits").fault(
            "'rest' again", "one field that takes the rest"
        )
    needed = taken + len(open_ended)
    if needed > n_bits:
        raise place.fault(
            f"fields of at least {needed} bits",
            f"at most {n_bits} bits, what the frame's payload periods carry",
        )
    return [n_bits - taken if w is None else w for w in stated]


def _scrambler(table: tables.ScramblerTable, place: Place) -> scramblers.Scrambler:
    with place.reporting():
        if isinstance(table, tables.AdditiveTable):
            return scramblers.AdditiveScrambler(tuple(table.taps), table.seed)
        if isinstance(table, tables.Gold3gppTable):
            return scramblers.GoldScrambler(table.c_init)
        return scramblers.SelfSynchronisingScrambler(tuple(table.taps), table.state)


def payload_format(
    table: tables.Payload | None, n_bits: int, folder: Path | None, place: Place
) -> PayloadFormat:
    """What the payload's bits are.

    Args:
        table: the checked table; None when the file has none.
        n_bits: payload bits per frame.
        folder: where files that fields name must lie.
        place: where the table stands.

    Raises:
        InputError: fields that do not fit, a file that cannot be read, settings that clash.
    """
    if table is None:
        if n_bits:
            raise place.fault("nothing", f"[payload], fields of the frame's {n_bits} bits")
        return PayloadFormat(0, ())
    if not n_bits:
        raise place.fault("a table", 'none: the frame has no section of kind = "payload"')
    if n_bits > tables.MAX_BITS:
        raise place.fault(f"{n_bits} bits a frame", f"at most {tables.MAX_BITS}")
    where = place / "field"
    widths = _widths(table.field, n_bits, where)
    spans: list[FieldSpan] = []
    start = 0
    for i, (entry, width) in enumerate(zip(table.field, widths, strict=True)):
        if isinstance(entry, tables.CrcField):
            code = _crc(entry, where / i)
            covered = _covers(entry, i, widths, code, where / i)
            text = f"{code.name} over fields {', '.join(map(str, covered))}"
            check = CrcSource(code, covered)
            spans.append(FieldSpan("crc", start, start + width, text, check))
        else:
            source, text = _source(entry, folder, where / i)
            spans.append(FieldSpan(entry.type, start, start + width, text, source))
        start += width
    if start < n_bits:
        zeros = FixedSource(np.zeros(n_bits - start, np.uint8))
        spans.append(FieldSpan("fixed", start, n_bits, "padding, zeros", zeros, padding=True))
    scrambler = (
        None if table.scrambler is None else _scrambler(table.scrambler, place / "scrambler")
    )
    return PayloadFormat(n_bits, tuple(spans), scrambler)
