"""Link descriptions of the campaigns: realistic frames with a known payload."""

from __future__ import annotations

from typing import Any

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
clock = "{clock}"

[modulation]
{modulation}

[pulse]
shape = "root-raised-cosine"
rolloff = {rolloff}
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
symbols = {payload}
{known}
[payload]
[[payload.field]]
type = "prbs"
name = "PRBS23"
continuation = "{continuation}"
bits = "rest"
"""


def campaign_text(
    antennas: int,
    constellation: str | None,
    *,
    span: int = 32,
    period_symbols: float | None = None,
    continuation: str = "running",
    payload: int = 1000,
    rolloff: float = 0.25,
    clock: str = "independent",
    known_every: int | None = None,
) -> str:
    """A link description: 63 sync symbols, 16 pilots an antenna, 1000 payload words.

    Args:
        antennas: Nt.
        constellation: by name; None: space-shift keying.
        span: of the root-raised-cosine pulse, symbol periods.
        period_symbols: frame period; None: frames may come at any time.
        continuation: of the reference, "running" or "restart".
        payload: symbol periods of the payload section.
        rolloff: of the pulse.
        clock: "locked" to the carrier's reference, or "independent".
        known_every: one payload period in so many is a known symbol, antennas in rotation.
    """
    scheme = "space-shift-keying" if constellation is None else "spatial-modulation"
    modulation = f'scheme = "{scheme}"'
    if constellation is not None:
        modulation += f'\nconstellation = {{ name = "{constellation}" }}'
    everyone = list(range(antennas))
    known = ""
    if known_every is not None:
        sequence = '{ type = "list", symbols = [[1, 0]] }'
        known = f"known = {{ every = {known_every}, sequence = {sequence}, antennas = {everyone} }}"
    return _TEXT.format(
        name=f"{antennas} antennas {constellation or 'space-shift keying'}",
        antennas=antennas,
        modulation=modulation,
        all_antennas=everyone,
        span=span,
        rolloff=rolloff,
        clock=clock,
        payload=payload,
        known=known,
        pilots=_PILOTS,
        frame="" if period_symbols is None else f"\n[frame]\nperiod_symbols = {period_symbols}\n",
        continuation=continuation,
    )


def campaign_link(antennas: int, constellation: str | None, **choices: Any) -> Link:
    """The same, checked; choices of `campaign_text`."""
    return parse_link(campaign_text(antennas, constellation, **choices))
