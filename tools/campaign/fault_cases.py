"""Faults of a transmitter, each at two severities, and the cause that should be named for it."""

from __future__ import annotations

import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from spatiq.acceptance.limits import parse_limits
from spatiq.acceptance.setup import Setup
from spatiq.acceptance.verification import verify
from spatiq.link.loading import parse_link
from spatiq.recording import open_recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.simulation import simulate
from spatiq.transmit.transmitter_faults import LateSwitch, Permuted, PortLevel, TransmitterFault

LINK = """
format = 1
[air]
antennas = 4
symbol_rate_hz = 1e6
carrier_hz = 2.4e9
[modulation]
scheme = "spatial-modulation"
constellation = { name = "QPSK" }
[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = 16
[frame]
period_symbols = 420
[[frame.section]]
kind = "sync"
sequence = { type = "m-sequence", order = 6 }
antennas = [0]
[[frame.section]]
kind = "pilots"
sequence = { type = "zadoff-chu", length = 17, root = 3 }
antennas = [0, 1, 2, 3]
send = "in-turn"
[[frame.section]]
kind = "payload"
symbols = 256
[payload]
[[payload.field]]
type = "prbs"
name = "PRBS15"
bits = "rest"
[[payload.field]]
type = "crc"
name = "CRC-16/3GPP"
[payload.scrambler]
type = "additive"
taps = [7, 4]
seed = 93
"""
_POINTS = 'constellation = {{ points = {}, labels = ["00", "01", "10", "11"], normalise = true }}'
_QPSK = 'constellation = { name = "QPSK" }'
FRAMES = 12


def _points(points: str) -> tuple[str, str]:
    return _QPSK, _POINTS.format(points)


@dataclass(frozen=True)
class Case:
    """One fault at one severity.

    Attributes:
        name: of the row.
        expected: what the name of the first cause holds; empty: no cause is to be named.
        change: text of the description, and what the transmitter goes by instead.
        faults: of the transmitter.
        backoff_db: of the receiver's converter; None: floating point.
        alike: difference in phase of antennas 0 and 3 at the second channel, radians.
    """

    name: str
    expected: str
    change: tuple[str, str] = ("", "")
    faults: tuple[TransmitterFault, ...] = ()
    backoff_db: float | None = None
    alike: float | None = None


_SCRAMBLER = "[payload.scrambler]" + LINK.split("[payload.scrambler]")[1]
CASES = (
    Case("clean", ""),
    Case("two antennas swapped", "1 sent by 2, 2 sent by 1", faults=(Permuted((0, 2, 1, 3)),)),
    Case("all antennas permuted", "0 sent by 2", faults=(Permuted((2, 3, 1, 0)),)),
    Case("antenna dead", "antenna 2 dead", faults=(PortLevel(2, -np.inf),)),
    Case("antenna all but dead", "antenna 1 dead", faults=(PortLevel(1, -30.0),)),
    Case("antenna 12 dB weak", "antenna 1 weak", faults=(PortLevel(1, -12.0),)),
    Case("antenna 16 dB weak", "antenna 3 weak", faults=(PortLevel(3, -16.0),)),
    Case("switch 60 ns late", "switch slow or late", faults=(LateSwitch(0.06),)),
    Case("switch 150 ns late", "switch slow or late", faults=(LateSwitch(0.15),)),
    # 3GPP QPSK: 00 1+j, 01 1-j, 10 -1+j, 11 -1-j.
    Case("points turned by 90", "rotated", _points("[[-1, 1], [1, 1], [-1, -1], [1, -1]]")),
    Case("points conjugated", "conjugated", _points("[[1, -1], [1, 1], [-1, -1], [-1, 1]]")),
    Case("natural labels", "labelled otherwise", _points("[[1, 1], [1, -1], [-1, -1], [-1, 1]]")),
    Case("PRBS9", "reference sequence PRBS9", ('"PRBS15"', '"PRBS9"')),
    Case("PRBS23", "reference sequence PRBS23", ('"PRBS15"', '"PRBS23"')),
    Case("PRBS inverted", "inverted", ('"PRBS15"', '"PRBS15"\ninverted = false')),
    Case("scrambler off", "scrambler", (_SCRAMBLER, "")),
    Case("other CRC", "CRC", ('"CRC-16/3GPP"', '"CRC-16/X.25"')),
    Case("clipped", "receiver clipped", backoff_db=3.0),
    Case("antennas alike, 0.05 rad", "antennas 0-3 indistinguishable", alike=0.05),
    Case("antennas alike, 0.2 rad", "antennas 0-3 indistinguishable", alike=0.2),
    Case("clipped a little", "receiver clipped", backoff_db=6.0),
)


def first_cause(case: Case, snr_db: float, seed: int) -> tuple[str, ...]:
    """Names of the causes, the first one first; cabled through a combiner, two receive channels."""
    rng = np.random.default_rng([seed, 77])
    phases = 2 * np.pi * (np.arange(4) / 4 + rng.uniform(-0.02, 0.02, 4))
    if case.alike is not None:
        phases[3] = phases[0] + case.alike
    channel = np.stack([np.ones(4), np.exp(1j * phases)]) * np.exp(2j * np.pi * rng.random(4))
    link = parse_link(LINK)
    sent = parse_link(LINK.replace(*case.change)) if case.change[0] else link
    converter = {} if case.backoff_db is None else {"backoff_db": case.backoff_db}
    capture = simulate(
        sent,
        samples_per_symbol=4.0,
        frames=FRAMES,
        receive_channels=2,
        channels=channel,
        snr_db=snr_db,
        cfo_hz=float(rng.uniform(-5e3, 5e3)),
        clock_ppm=float(rng.uniform(-10, 10)),
        datatype="cf32_le" if case.backoff_db is None else "ci16_le",
        seed=seed,
        faults=case.faults,
        **converter,
    )
    limits = parse_limits('format = 1\n[[limit]]\nfigure = "evm_rms"\nupper = 100\n')
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder) / "capture"
        rate, kind = capture.sample_rate, capture.datatype
        write_recording(base, capture.samples(), sample_rate=rate, datatype=kind)
        recording = open_recording(base.with_suffix(".sigmf-meta"))
        found = verify(recording, link, limits, setup=Setup.COMBINED)
    return tuple(cause.name for cause in found.causes)
