"""Recordings, jobs and results files for the tests of batch."""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np

from spatiq.batch.inputs import find_items
from spatiq.batch.work import RESULTS_FOLDER, Job
from spatiq.link.loading import load_link
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.writing import write_recording
from spatiq.transmit.simulation import simulate

LINK = """
format = 1
[air]
antennas = 2
symbol_rate_hz = 1e6
carrier_hz = 2.4e9
[modulation]
scheme = "spatial-modulation"
constellation = {name = "QPSK"}
[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = 16
[frame]
%s
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 6}
antennas = [0]
[[frame.section]]
kind = "pilots"
sequence = {type = "zadoff-chu", length = 16, root = 3}
send = "in-turn"
[[frame.section]]
kind = "payload"
symbols = 120
%s
"""
FRAME = 63 + 2 * 16 + 120
PRBS = """
[[payload.field]]
type = "prbs"
name = "PRBS15"
bits = "rest"
continuation = "running"
"""
COUNTER = '[[payload.field]]\ntype = "counter"\nbits = 8\n'
PERIOD = f"period_symbols = {FRAME + 20.5}"


def write_link(folder: Path, frame: str = "", fields: str = PRBS, name: str = "lab") -> Path:
    path = folder / f"{name}.link.toml"
    path.write_text(LINK % (frame, fields))
    return path


def write_capture(folder: Path, link: Path, name: str, samples=None, captures=None, **choices):
    """A simulated recording in files; its metadata's path."""
    choices = {
        "receive_channels": 2,
        "samples_per_symbol": 4.0,
        "snr_db": 14.0,
        "frames": 20,
        "seed": 1,
        "spacing": "link",
        "datatype": "ci16_le",
    } | choices
    folder.mkdir(parents=True, exist_ok=True)
    capture = simulate(load_link(link), **choices)
    written = write_recording(
        folder / name,
        capture.samples() if samples is None else samples(capture),
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        captures=captures,
        overwrite=True,
    )
    return written.meta_path


def make_job(folder: Path, meta: Path, link: Path, options=None, bound: float = 1e-2) -> Job:
    (folder / RESULTS_FOLDER).mkdir(parents=True, exist_ok=True)
    (item,) = find_items([str(meta)])
    return Job(item, link, options or ReceiverOptions(), folder, bound)


def contents(path: Path) -> dict[str, object]:
    """Everything in a results file but the time of measuring: name -> bytes and shape."""
    found: dict[str, object] = {}

    def note(name, thing):
        if name == "provenance/measured_at":
            return
        attributes = {k: np.asarray(v).tolist() for k, v in thing.attrs.items()}
        value = None
        if isinstance(thing, h5py.Dataset):
            raw = np.asarray(thing[()])
            value = raw.shape, raw.tolist() if raw.dtype == object else raw.tobytes()
        found[name] = repr(attributes), value

    with h5py.File(path, "r") as file:
        file.visititems(note)
    return found


def differences(one: Path, other: Path) -> list[str]:
    """Names of what differs between two results files."""
    first, second = contents(one), contents(other)
    return sorted(k for k in first.keys() | second.keys() if first.get(k) != second.get(k))
