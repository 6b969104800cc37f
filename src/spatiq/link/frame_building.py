"""Frame layout of a checked link description."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from spatiq.link import schema_frame as tables
from spatiq.link.block_building import block_run, blocks_text
from spatiq.link.blocks import BlockRun
from spatiq.link.known_symbols import checked_antennas, section_length, section_vectors, sequence
from spatiq.link.layout import FrameLayout, Period, SectionSpan
from spatiq.link.places import Place

# Known vectors of a frame, as complex128, then stay below 512 MB.
MAX_SYMBOL_ANTENNAS = 32_000_000


@dataclass(frozen=True, eq=False)
class _Part:
    """One section, built: what each of its periods carries."""

    known: NDArray[np.complex128]
    kind: NDArray[np.uint8]
    amplitude: float
    text: str
    block: int = 1  # periods that a word takes; more than 1: a reference block comes first
    run: BlockRun | None = None  # blocks, as if the section were the frame's first

    @property
    def carries(self) -> NDArray[np.bool_]:
        """Periods that words, or the reference block before them, take."""
        reference = (self.kind == Period.PILOT) & (self.block > 1)
        return np.asarray((self.kind == Period.PAYLOAD) | reference)


def _antennas_text(chosen: list[int]) -> str:
    if len(chosen) > 1 and chosen == list(range(chosen[0], chosen[-1] + 1)):
        return f"antennas {chosen[0]}-{chosen[-1]}"
    return ("antenna " if len(chosen) == 1 else "antennas ") + ",".join(map(str, chosen))


def sequence_text(table: tables.Sequence) -> str:
    """A sequence in a few words."""
    if isinstance(table, tables.MSequence):
        text = f"m-sequence of order {table.order}"
    elif isinstance(table, tables.ZadoffChu):
        text = f"Zadoff-Chu {table.length}, root {table.root}"
    elif isinstance(table, tables.Gold):
        text = f"Gold of order {table.order}, index {table.index}"
    elif isinstance(table, tables.Gold3gpp):
        text = f"3GPP Gold, c_init {table.c_init}"
    else:
        text = f"list of {len(table.symbols)}"
    if table.length is not None and not isinstance(table, tables.ZadoffChu):
        text += f", length {table.length}"
    return text + (f", shifted {table.cyclic_shift}" if table.cyclic_shift else "")


def _power_text(power_db: float) -> str:
    return f", {power_db:+g} dB" if power_db else ""


def _known_part(
    table: tables.SyncSection | tables.PilotSection, antennas: int, place: Place
) -> _Part:
    vectors = section_vectors(table, antennas, place)
    if not np.any(vectors != 0):
        raise (place / "sequence").fault("symbols that are all zero", "a symbol other than zero")
    if table.kind == "sync":
        _check_searchable(vectors, place)
    chosen = list(range(antennas)) if table.antennas is None else table.antennas
    how = f" {table.send}" if len(chosen) > 1 else ""
    repeated = f", {table.repeat} times" if table.repeat > 1 else ""
    extras = ", covered" if table.cover else ""
    extras += ", shifted per antenna" if table.antenna_shift else ""
    text = f"{sequence_text(table.sequence)}{repeated},{how} from {_antennas_text(chosen)}"
    period = Period.SYNC if table.kind == "sync" else Period.PILOT
    kind = np.full(vectors.shape[0], period, np.uint8)
    return _Part(vectors, kind, 0.0, text + extras + _power_text(table.power_db))


def _check_searchable(vectors: NDArray[np.complex128], place: Place) -> None:
    """A search compares a section with noise: that needs more periods than the section has freedom.

    Whatever is received fits N symbols of N independent antennas, so such a section says nothing.
    """
    periods, antennas = vectors.shape
    if periods <= antennas:
        rank = int(np.linalg.matrix_rank(vectors))
        if periods <= rank:
            raise place.fault(
                f"{periods} symbol periods",
                f"at least {rank + 1}, as {rank} independent antennas send in this sync section",
            )


def _differential_part(table: tables.PayloadSection, antennas: int, place: Place) -> _Part:
    """A reference block, antenna j sending 1 in period j, then a block for each word."""
    if table.known is not None:
        raise (place / "known").fault("a table", "none: in differential form blocks follow blocks")
    if table.symbols % antennas or table.symbols < 2 * antennas:
        raise (place / "symbols").fault(
            table.symbols, f"two or more blocks of {antennas}: a reference block, then the words'"
        )
    amplitude = 10.0 ** (table.power_db / 20.0)
    known = np.zeros((table.symbols, antennas), np.complex128)
    known[:antennas] = amplitude * np.eye(antennas)
    kind = np.full(table.symbols, Period.PAYLOAD, np.uint8)
    kind[:antennas] = Period.PILOT
    text = f"reference block, then words of payload in blocks of {antennas}"
    return _Part(known, kind, amplitude, text + _power_text(table.power_db), antennas)


def _payload_part(table: tables.PayloadSection, antennas: int, place: Place) -> _Part:
    amplitude = 10.0 ** (table.power_db / 20.0)
    known = np.zeros((table.symbols, antennas), np.complex128)
    kind = np.full(table.symbols, Period.PAYLOAD, np.uint8)
    text = "words of payload"
    if table.known is not None:
        inside = table.known
        if inside.first >= table.symbols:
            raise (place / "known" / "first").fault(
                inside.first, f"a period of the section, 0 to {table.symbols - 1}"
            )
        where = np.arange(inside.first, table.symbols, inside.every)
        chosen = checked_antennas(inside.antennas, antennas, place / "known" / "antennas")
        symbols = sequence(inside.sequence, place / "known" / "sequence")
        turn = np.arange(where.size)
        antenna = np.array(chosen)[turn % len(chosen)]
        known[where, antenna] = amplitude * symbols[turn % symbols.size]
        kind[where] = Period.KNOWN
        text += f", a known symbol every {inside.every} from {_antennas_text(chosen)}"
        if where.size == table.symbols:
            raise (place / "symbols").fault(
                table.symbols, "room for a payload word beside the known symbols"
            )
    return _Part(known, kind, amplitude, text + _power_text(table.power_db))


def _part_in_blocks(table: tables.PayloadSection, antennas: int, block: int, place: Place) -> _Part:
    run = block_run(table, block, place)
    periods = run.count * (run.length + run.guard)
    kind = np.full(periods, Period.SILENCE, np.uint8)
    if run.has_prefix:
        kind[:] = Period.PREFIX
        kind[run.periods] = Period.BODY
    kind[run.payload] = Period.PAYLOAD
    amplitude = 10.0 ** (table.power_db / 20.0)
    text = f"{blocks_text(run)}{_power_text(table.power_db)}"
    return _Part(np.zeros((periods, antennas), np.complex128), kind, amplitude, text, run=run)


def _part(table: tables.Section, antennas: int, block: int, place: Place) -> _Part:
    if isinstance(table, tables.PayloadSection):
        if table.blocks is not None:
            return _part_in_blocks(table, antennas, block, place)
        build = _payload_part if block == 1 else _differential_part
        return build(table, antennas, place)
    if isinstance(table, tables.SilenceSection):
        nothing = np.zeros((table.symbols, antennas), np.complex128)
        kind = np.full(table.symbols, Period.SILENCE, np.uint8)
        return _Part(nothing, kind, 0.0, "nothing sent")
    return _known_part(table, antennas, place)


def _check_length(frame: tables.Frame, antennas: int, place: Place) -> None:
    """Bounds, before memory is taken."""
    limit = min(tables.MAX_SYMBOLS, MAX_SYMBOL_ANTENNAS // antennas)
    total = 0
    for i, table in enumerate(frame.section):
        inside = place / "section" / i
        if isinstance(table, tables.SyncSection | tables.PilotSection):
            total += section_length(table, antennas, inside)
        elif isinstance(table, tables.PayloadSection) and table.blocks is not None:
            blocks = table.blocks
            total += table.symbols // blocks.length * (blocks.length + blocks.guard)
        else:
            total += table.symbols
        if total > limit:
            raise inside.fault(
                f"a frame of {total} symbol periods up to here",
                f"at most {limit} with {antennas} antennas",
            )


def frame_layout(frame: tables.Frame, antennas: int, place: Place, block: int = 1) -> FrameLayout:
    """Which symbol period carries what.

    Args:
        frame: the checked table.
        antennas: Nt.
        block: periods that a word takes, 1 or (differential form) Nt.
        place: where it stands.

    Raises:
        InputError: no sync section, a frame too long, or settings that do not go together.
    """
    if not any(isinstance(s, tables.SyncSection) for s in frame.section):
        raise (place / "section").fault("no sync section", 'at least one of kind = "sync"')
    _check_length(frame, antennas, place)
    parts = [_part(s, antennas, block, place / "section" / i) for i, s in enumerate(frame.section)]
    stops = np.cumsum([p.kind.size for p in parts])
    spans = tuple(
        SectionSpan(s.kind, int(stop) - p.kind.size, int(stop), p.text)
        for s, p, stop in zip(frame.section, parts, stops, strict=True)
    )
    kind = np.concatenate([p.kind for p in parts])
    amplitude = np.concatenate([np.full(p.kind.size, p.amplitude) for p in parts])
    payload = np.flatnonzero(np.concatenate([p.carries for p in parts]))
    return FrameLayout(
        known=np.concatenate([p.known for p in parts]),
        kind=kind,
        payload_index=payload.astype(np.int64),
        payload_amplitude=amplitude[payload],
        sections=spans,
        blocks=tuple(
            replace(part.run, start=span.start)
            for part, span in zip(parts, spans, strict=True)
            if part.run is not None
        ),
    )


def period_symbols(frame: tables.Frame, symbol_rate: float, place: Place) -> float | None:
    """Frame period, start to start, in symbol periods; None when the file states none.

    Args:
        frame: the checked table.
        symbol_rate: Hz.
        place: where the frame's table stands.

    Raises:
        InputError: stated twice.
    """
    if frame.period_s is None:
        return frame.period_symbols
    if frame.period_symbols is not None:
        raise (place / "period_s").fault(
            "a period in seconds", "period_symbols or period_s, not both"
        )
    return frame.period_s * symbol_rate


def check_period(period: float | None, length: int, frame: tables.Frame, place: Place) -> None:
    """Frames must not overlap.

    Raises:
        InputError: a period shorter than the frame.
    """
    # A period in seconds is rounded: a billionth of the frame is no overlap.
    if period is not None and period < length * (1 - 1e-9):
        key = "period_s" if frame.period_s is not None else "period_symbols"
        raise (place / key).fault(
            f"{period:.12g} symbol periods", f"at least the frame's length, {length}"
        )
