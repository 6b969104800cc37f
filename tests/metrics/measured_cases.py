"""Simulated recordings in SigMF files, measured whole, for the tests of measuring."""

from __future__ import annotations

from pathlib import Path
from types import SimpleNamespace

import numpy as np

from spatiq.link.description import Link
from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import COLUMN_NAMES
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.simulation import simulate

FIELDS = {
    "running": """
[[payload.field]]
type = "prbs"
name = "PRBS23"
bits = "rest"
continuation = "running"
""",
    "restart": '[[payload.field]]\ntype = "prbs"\nname = "PRBS15"\nbits = "rest"\n',
    "counter, crc": """
[[payload.field]]
type = "counter"
bits = 8
[[payload.field]]
type = "prbs"
name = "PRBS9"
bits = "rest"
[[payload.field]]
type = "crc"
name = "CRC-16/3GPP"
""",
}


def measured_link(
    fields: str = FIELDS["restart"],
    antennas: int = 4,
    constellation: str | None = "QPSK",
    payload: int = 256,
    frame: str = "",
    extra: str = "",
) -> Link:
    scheme = "space-shift-keying" if constellation is None else "spatial-modulation"
    points = "" if constellation is None else f'constellation = {{name = "{constellation}"}}'
    return parse_link(f"""
format = 1
[air]
antennas = {antennas}
symbol_rate_hz = 1e6
carrier_hz = 2.4e9
[modulation]
scheme = "{scheme}"
{points}
[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = 24
[frame]
{frame}
[[frame.section]]
kind = "sync"
sequence = {{type = "m-sequence", order = 6}}
antennas = [0]
[[frame.section]]
kind = "pilots"
sequence = {{type = "zadoff-chu", length = 17, root = 3}}
send = "in-turn"
[[frame.section]]
kind = "payload"
symbols = {payload}
{extra}
{fields}
""")


def measured(folder: Path, link: Link, options=None, samples=None, **choices) -> SimpleNamespace:
    """Everything measured of a simulated recording, batches joined, and the truth behind it."""
    settings = {
        "receive_channels": 2,
        "samples_per_symbol": 4.0,
        "frames": 30,
        "spacing": 20.0,
        "seed": 1,
    }
    capture = simulate(link, **(settings | choices))
    made = capture.samples() if samples is None else samples(capture)
    written = write_recording(
        folder / "capture",
        made,
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        overwrite=True,
    )
    recording = open_recording(written.meta_path)
    summary = Summary(link)
    batches, lost = [], []
    for batch in measure(recording, link, options or ReceiverOptions()):
        summary.add(batch)
        batches.append(batch)
        lost += batch.lost
    columns = {n: np.concatenate([b.columns[n] for b in batches]) for n in COLUMN_NAMES}

    def joined(name):
        return np.concatenate([getattr(b, name) for b in batches])

    starts = capture.truth.starts
    index = np.array([int(np.argmin(np.abs(starts - s))) for s in columns["start_sample"]], int)
    return SimpleNamespace(
        capture=capture,
        truth=capture.truth,
        recording=recording,
        columns=columns,
        index=index,
        lost=lost,
        confusion=joined("confusion"),
        words=joined("words_decided"),
        sent=joined("words_sent"),
        channel=joined("channel"),
        antenna_evm=joined("antenna_evm_percent"),
        summary=summary.as_dict(),
        batches=batches,
    )
