"""Link descriptions of the campaigns: realistic frames with a known payload."""

from __future__ import annotations

from spatiq.link.loading import Link, parse_link

# Sixteen pilots for each antenna, sent in turn.
_PILOTS = "[[1, 0], [0, 1], [-1, 0], [0, 1], [1, 0], [0, -1], [1, 0], [0, 1]]"
_TEXT = """
format = 1
name = "{name}"

[air]
antennas = {antennas}
symbol_rate_hz = 1e6
carrier_hz = 2.45e9

[modulation]
scheme = "spatial-modulation"
constellation = {{ name = "{constellation}" }}

[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = {span}
{frame}
[[frame.section]]
kind = "sync"
sequence = {{ type = "m-sequence", order = 6 }}
antennas = [0]

[[frame.section]]
kind = "pilots"
sequence = {{ type = "list", symbols = {pilots} }}
antennas = {all_antennas}
send = "in-turn"
repeat = 2

[[frame.section]]
kind = "payload"
symbols = 1000

[payload]
[[payload.field]]
type = "prbs"
name = "PRBS23"
continuation = "{continuation}"
bits = "rest"
"""


def campaign_text(
    antennas: int,
    constellation: str,
    *,
    span: int = 32,
    period_symbols: float | None = None,
    continuation: str = "running",
) -> str:
    """A link description: 63 sync symbols, 16 pilots an antenna, 1000 payload words.

    Args:
        antennas: Nt.
        constellation: by name.
        span: of the root-raised-cosine pulse, symbol periods.
        period_symbols: frame period; None: frames may come at any time.
        continuation: of the reference, "running" or "restart".
    """
    return _TEXT.format(
        name=f"{antennas} antennas {constellation}",
        antennas=antennas,
        constellation=constellation,
        all_antennas=list(range(antennas)),
        span=span,
        pilots=_PILOTS,
        frame="" if period_symbols is None else f"\n[frame]\nperiod_symbols = {period_symbols}\n",
        continuation=continuation,
    )


def campaign_link(antennas: int, constellation: str, *, span: int = 32) -> Link:
    """The same, checked."""
    return parse_link(campaign_text(antennas, constellation, span=span))
