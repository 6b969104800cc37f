"""A link description in words and tables, for the one who checks that it says what was meant."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spatiq.link.layout import FrameLayout, Period, words_in
from spatiq.link.payload import PayloadFormat
from spatiq.link.tables_text import columns, pairs, quantity
from spatiq.signal.codebooks import Codebook, DifferentialCodebook
from spatiq.signal.pulses import Pulse, isi_floor
from spatiq.signal.scramblers import (
    AdditiveScrambler,
    GoldScrambler,
    Scrambler,
    SelfSynchronisingScrambler,
)

# Samples per symbol at which the floor of intersymbol interference is shown.
RATIOS = (2.0, 2.5, 4.0, 8.0)
ALL_WORDS = 32
FIRST_WORDS = 16


def explanation(
    *,
    name: str,
    symbol_rate_hz: float,
    carrier_hz: float | None,
    clock: str,
    codebook: Codebook,
    pulse: Pulse,
    layout: FrameLayout,
    payload: PayloadFormat,
    period_symbols: float | None,
) -> str:
    """The whole text, lines of at most 100 columns; see `spatiq.link.description.Link`."""
    blocks = [
        [f"Link: {name}", *_air(symbol_rate_hz, carrier_hz, clock, layout)],
        ["Frame", *_layout(layout, symbol_rate_hz)],
        ["Rates", *_rates(codebook, layout, payload, symbol_rate_hz, period_symbols)],
        ["Words", *_words(codebook)],
        ["Payload fields, in the order sent", *_fields(payload)],
        ["Pulse", *_pulse(pulse, symbol_rate_hz)],
    ]
    return "\n\n".join("\n".join(lines) for lines in blocks) + "\n"


def _air(
    symbol_rate_hz: float, carrier_hz: float | None, clock: str, layout: FrameLayout
) -> list[str]:
    clocks = {
        "locked": "carrier and symbol clock from one reference",
        "independent": "carrier and symbol clock independent",
    }
    carrier = "not stated" if carrier_hz is None else quantity(carrier_hz, "Hz", 10)
    return pairs(
        [
            ("transmit antennas", f"{layout.antennas}, numbered from 0"),
            ("symbol rate", quantity(symbol_rate_hz, "Hz", 10)),
            ("symbol period", quantity(1 / symbol_rate_hz, "s")),
            ("carrier", carrier),
            ("clock", clocks[clock]),
        ]
    )


def _layout(layout: FrameLayout, symbol_rate_hz: float) -> list[str]:
    rows = []
    for i, span in enumerate(layout.sections):
        periods = f"{span.start}-{span.stop - 1}"
        duration = quantity(span.length / symbol_rate_hz, "s")
        rows.append([str(i), span.kind, periods, str(span.length), duration, span.text])
    whole = quantity(layout.length / symbol_rate_hz, "s")
    rows.append(["", "all", f"0-{layout.length - 1}", str(layout.length), whole, ""])
    head = ["#", "kind", "periods", "length", "duration", "what is sent"]
    return columns(head, rows, frozenset({0, 2, 3, 4}))


def _rates(
    codebook: Codebook,
    layout: FrameLayout,
    payload: PayloadFormat,
    symbol_rate_hz: float,
    period_symbols: float | None,
) -> list[str]:
    spatial = int(np.sum(codebook.spatial_bits))
    signal = codebook.bits - spatial
    gross = codebook.bits * symbol_rate_hz / codebook.block
    if layout.blocks:  # guards, and subcarriers that carry nothing
        sections = sum(s.length for s in layout.sections if s.kind == "payload")
        gross *= layout.payload_index.size / sections
    interspersed = int(np.sum(layout.kind == Period.KNOWN))
    entries = [
        ("bits per word", f"{codebook.bits}: {spatial} spatial, {signal} signal"),
        ("payload words per frame", f"{words_in(layout, codebook)}"),
        ("payload bits per frame", f"{payload.n_bits}"),
        ("known symbols among them", f"{interspersed} symbol periods"),
        ("gross bit rate", f"{quantity(gross, 'bit/s')} during payload"),
    ]
    back_to_back = period_symbols is None
    period = layout.length if period_symbols is None else period_symbols
    seconds = period / symbol_rate_hz
    how = "frames back to back" if back_to_back else "at the stated frame period"
    rate = quantity(payload.n_bits / seconds, "bit/s")
    entries.append(("net bit rate", f"{rate} of payload bits, {how}"))
    if back_to_back:
        entries.append(("frame period", "not stated: frames may come at any time"))
    else:
        stated = f"{period:.12g} symbol periods, {quantity(seconds, 's', 10)}"
        entries.append(("frame period", f"{stated}, {quantity(1 / seconds, 'Hz')}"))
    return pairs(entries)


def _symbol(value: complex) -> str:
    return f"{value.real:+.4f} {value.imag:+.4f}j"


def _word_row(codebook: Codebook, word: int) -> list[str]:
    chosen = int(codebook.set_index[word])
    antennas = codebook.antenna_sets[chosen]
    if isinstance(codebook, DifferentialCodebook):
        turns = codebook.turns[word]
        symbols = ", ".join(f"{360 * int(t) / codebook.roots:g}°" for t in turns)
    else:
        symbols = ", ".join(_symbol(complex(codebook.vectors[word, a])) for a in antennas)
    bits = format(word, f"0{codebook.bits}b")
    return [bits, codebook.set_names[chosen], symbols]


def _words(codebook: Codebook) -> list[str]:
    marks = "".join("s" if spatial else "." for spatial in codebook.spatial_bits)
    points = codebook.constellation
    named = f"{points.name}, {points.size} points" if points.bits else "none"
    lines = pairs(
        [
            ("scheme", codebook.scheme),
            ("constellation", named),
            ("word, first bit first", f"{marks}  (s chooses the antennas, . the symbol)"),
            ("antenna sets", f"{len(codebook.antenna_sets)}"),
        ]
    )
    listed = codebook.size <= ALL_WORDS or codebook.scheme == "vector-table"
    count = codebook.size if listed else FIRST_WORDS
    head = ["word", "antenna", "symbol"]
    if codebook.block > 1:
        head = ["word", "permutation", "turn of each column"]
    lines += columns(head, [_word_row(codebook, w) for w in range(count)])
    if count < codebook.size:
        lines.append(f"  ... {codebook.size - count} more words, by this rule:")
        lines += _rule(codebook)
    return lines


def _pattern(codebook: Codebook, word: int, chosen: NDArray[np.bool_]) -> str:
    bits = format(word, f"0{codebook.bits}b")
    return "".join(b for b, c in zip(bits, chosen, strict=True) if c)


def _rule(codebook: Codebook) -> list[str]:
    """Antennas by the spatial bits, symbol by the rest: how the table goes on."""
    spatial = codebook.spatial_bits
    sets = {
        _pattern(codebook, w, spatial): codebook.set_names[int(codebook.set_index[w])]
        for w in range(codebook.size)
    }
    chosen = [f"{bits}: {name}" for bits, name in sorted(sets.items())]
    places = ", ".join(map(str, np.flatnonzero(~spatial)))
    name = codebook.constellation.name
    entries = []
    if spatial.any():
        where = ", ".join(map(str, np.flatnonzero(spatial)))
        text = f"by bits {where} of the word (0 = first bit): {', '.join(chosen)}"
        entries.append(("permutation" if codebook.block > 1 else "antenna", text))
    if not spatial.all():
        where = f"bits {places} of the word"
        signal = codebook.bits - int(spatial.sum())
        many = signal > codebook.constellation.bits
        text = (
            f"points of {name}: labels one behind the other" if many else f"point of {name}: label"
        )
        entries.append(("symbols" if many else "symbol", f"{text}, {where}"))
    return pairs(entries)


def _fields(payload: PayloadFormat) -> list[str]:
    if not payload.n_bits:
        return ["  no payload in this frame"]
    rows = []
    for i, span in enumerate(payload.fields):
        number = "" if span.padding else str(i)
        rows.append(
            [number, span.type, f"{span.start}-{span.stop - 1}", str(span.width), span.text]
        )
    lines = columns(["#", "type", "bits", "length", "content"], rows, frozenset({0, 2, 3}))
    countable = int(payload.known_mask.sum())
    lines += pairs(
        [
            ("scrambler", _scrambler(payload.scrambler)),
            ("bits known to the receiver", f"{countable} of {payload.n_bits}"),
        ]
    )
    return lines


def _scrambler(scrambler: Scrambler | None) -> str:
    if isinstance(scrambler, AdditiveScrambler):
        return f"additive, taps {list(scrambler.taps)}, seed {scrambler.seed}"
    if isinstance(scrambler, GoldScrambler):
        return f"3GPP Gold, c_init {scrambler.c_init}"
    if isinstance(scrambler, SelfSynchronisingScrambler):
        return f"self-synchronising, taps {list(scrambler.taps)}, state {scrambler.state}"
    return "none" if scrambler is None else str(scrambler)


def _pulse(pulse: Pulse, symbol_rate_hz: float) -> list[str]:
    width = quantity(pulse.bandwidth * symbol_rate_hz, "Hz")
    limited = "" if pulse.band_limited else ", main lobe only: not strictly band-limited"
    lines = pairs(
        [
            ("shape", pulse.name),
            ("support", f"{2 * pulse.half_span:g} symbol periods"),
            ("bandwidth", f"{pulse.bandwidth:g} symbol rates, {width} two-sided{limited}"),
        ]
    )
    rows = []
    for ratio in RATIOS:
        floor = isi_floor(pulse, ratio)
        rows.append([f"{ratio:g}", f"{floor:.1f} dB" if np.isfinite(floor) else "none"])
    head = ["samples per symbol", "intersymbol interference after the matched filter"]
    return lines + columns(head, rows, frozenset({0}))
