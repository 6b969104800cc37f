"""Small link descriptions for the tests of the transmitting end."""

from __future__ import annotations

from spatiq.link.description import Link
from spatiq.link.loading import parse_link

RRC = 'shape = "root-raised-cosine"\nrolloff = 0.25\nspan_symbols = 16'
RECTANGLE = 'shape = "rectangular"'


def link_text(
    antennas: int = 2,
    constellation: str | None = "QPSK",
    payload: int = 64,
    pulse: str = RRC,
    fields: str = '[[payload.field]]\ntype = "prbs"\nname = "PRBS15"\nbits = "rest"',
    air: str = "carrier_hz = 2.4e9",
    frame: str = "",
    sync_order: int = 5,
) -> str:
    """A link: a sync section (m-sequence) from antenna 0, then payload; no constellation: SSK."""
    scheme = "space-shift-keying" if constellation is None else "spatial-modulation"
    points = "" if constellation is None else f'constellation = {{name = "{constellation}"}}'
    return f"""
format = 1
[air]
antennas = {antennas}
symbol_rate_hz = 1e6
{air}
[modulation]
scheme = "{scheme}"
{points}
[pulse]
{pulse}
[frame]
{frame}
[[frame.section]]
kind = "sync"
sequence = {{type = "m-sequence", order = {sync_order}}}
antennas = [0]
[[frame.section]]
kind = "payload"
symbols = {payload}
{fields}
"""


def make_link(**choices: object) -> Link:
    """The link of `link_text`."""
    return parse_link(link_text(**choices))  # type: ignore[arg-type]  # names are link_text's own
