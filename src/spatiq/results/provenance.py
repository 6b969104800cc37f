"""Where figures come from: what was measured, with what, when."""

from __future__ import annotations

import hashlib
import json
import platform
from datetime import UTC, datetime
from importlib.metadata import version
from typing import TYPE_CHECKING

import spatiq

if TYPE_CHECKING:
    from spatiq.link.description import Link
    from spatiq.receiver.options import ReceiverOptions
    from spatiq.recording.recording import Recording

# Name in /provenance -> meaning. The documented layout is checked against this table.
FIELDS: dict[str, str] = {
    "program": "name and version of the program that measured",
    "measured_at": "UTC time at which the measurement began, ISO 8601",
    "link_name": "name of the link description",
    "link_file": "its file name, without folder",
    "link_text": "its full text",
    "link_sha256": "SHA-256 of that text in UTF-8",
    "options": "receiver options, JSON",
    "recording_name": "name of the recording",
    "recording_file": "its file name, without folder",
    "recording_sha256": "SHA-256 over its data files",
    "recording_warnings": "what was odd in its metadata, JSON array of texts",
    "sample_rate_hz": "sample rate as the metadata state it",
    "carrier_hz": "carrier frequency, from the metadata or else the link; empty when unknown",
    "channels": "receive channels",
    "datatype": "sample type as the metadata state it",
    "samples": "samples per channel",
    "symbol_rate_hz": "symbol rate of the link",
    "frame_symbols": "symbol periods per frame",
    "python": "version of the interpreter",
    "numpy": "version of NumPy",
    "scipy": "version of SciPy",
    "numba": "version of numba",
    "h5py": "version of h5py",
}


def sha256_text(text: str) -> str:
    """SHA-256 of a text in UTF-8, hexadecimal."""
    return hashlib.sha256(text.encode()).hexdigest()


def describe(link: Link, recording: Recording, options: ReceiverOptions) -> dict[str, str]:
    """All of `FIELDS` but the recording's digest, which takes a pass over the data."""
    carrier = recording.carrier_hz if recording.carrier_hz is not None else link.carrier_hz
    return {
        "program": f"spatiq {spatiq.__version__}",
        "measured_at": datetime.now(UTC).isoformat(timespec="seconds"),
        "link_name": link.name,
        "link_file": link.path.name if link.path is not None else "",
        "link_text": link.text,
        "link_sha256": sha256_text(link.text),
        "options": json.dumps(options.as_dict(), sort_keys=True),
        "recording_name": recording.name,
        "recording_file": recording.path.name,
        "recording_warnings": json.dumps(list(recording.warnings)),
        "sample_rate_hz": repr(float(recording.sample_rate)),
        "carrier_hz": "" if carrier is None else repr(float(carrier)),
        "channels": str(recording.channels),
        "datatype": recording.datatype,
        "samples": str(recording.n_samples),
        "symbol_rate_hz": repr(float(link.symbol_rate_hz)),
        "frame_symbols": str(link.frame_symbols),
        "python": platform.python_version(),
        **{name: version(name) for name in ("numpy", "scipy", "numba", "h5py")},
    }
