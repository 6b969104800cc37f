"""A night of recordings: simulated, two links in two folders, some broken in ten different ways."""

from __future__ import annotations

import json
import tarfile
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from spatiq.link.description import Link
from spatiq.link.loading import load_link
from spatiq.recording.writing import write_collection, write_recording
from spatiq.transmit.simulation import simulate

_LINK = """format = 1
name = "{name}"
[air]
antennas = {antennas}
symbol_rate_hz = 1e6
carrier_hz = 2.45e9
[modulation]
scheme = "spatial-modulation"
constellation = {{name = "QPSK"}}
[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = 16
[frame]
{period}
[[frame.section]]
kind = "sync"
sequence = {{type = "m-sequence", order = 6}}
antennas = [0]
[[frame.section]]
kind = "pilots"
sequence = {{type = "zadoff-chu", length = 16, root = 3}}
send = "in-turn"
[[frame.section]]
kind = "payload"
symbols = 400
[[payload.field]]
type = "prbs"
name = "PRBS15"
bits = "rest"
continuation = "running"
"""
_RULES = """format = 1
[[rule]]
file = "lamp-*"
leave_out = true
[[rule]]
link = "quay.link.toml"
folder = "quay/**"
[[rule]]
link = "mast.link.toml"
field = {"core:description" = "* mast*"}
"""
_START = np.datetime64("2027-11-05T21:00:00")


@dataclass
class Night:
    """What was made.

    Attributes:
        folder: with all recordings in folders below.
        rules: the rule file.
        frames: base name of each good recording -> frames sent.
        errors: base name -> whether it was made to stand out.
        broken: path (":" and member) of each broken one -> words its reason must hold.
    """

    folder: Path
    rules: Path
    frames: dict[str, int] = field(default_factory=dict)
    apart: list[str] = field(default_factory=list)
    broken: dict[str, str] = field(default_factory=dict)


def make_night(
    folder: Path, recordings: int, seed: int, *, frames: int = 16, share_broken: float = 0.05
) -> Night:
    """Write a night of recordings; one in twenty is broken, one in a hundred stands out."""
    folder.mkdir(parents=True, exist_ok=True)
    rules = folder / "night.rules.toml"
    rules.write_text(_RULES, encoding="utf-8")
    links = {}
    for name, antennas, period in (("quay", 4, ""), ("mast", 2, "period_symbols = 540.5")):
        path = folder / f"{name}.link.toml"
        text = _LINK.format(name=f"night {name}", antennas=antennas, period=period)
        path.write_text(text, encoding="utf-8")
        links[name] = load_link(path)
        (folder / name).mkdir(exist_ok=True)
    night = Night(folder, rules)
    rng = np.random.default_rng(seed)
    spoilt = np.zeros(recordings, bool)
    spoilt[rng.permutation(recordings)[: round(recordings * share_broken)]] = True
    ways = 0
    for k in range(recordings):
        name = ("quay", "mast")[k % 2]
        base = folder / name / f"{name}-{k:04d}"
        apart = not spoilt[k] and k % 100 == 7
        _write(base, links[name], k, seed, frames, apart)
        if spoilt[k]:
            way = BREAKING[ways % len(BREAKING)]
            path = way(base)
            night.broken[str(path)] = WORDS[way]
            ways += 1
            continue
        night.frames[base.name] = frames
        if apart:
            night.apart.append(base.name)
    return night


def _write(base: Path, link: Link, k: int, seed: int, frames: int, apart: bool) -> None:
    capture = simulate(
        link,
        receive_channels=2,
        snr_db=8.0 if apart else 19.0,
        samples_per_symbol=4,
        frames=frames,
        first_frame=k * frames,
        spacing="link" if link.period_symbols else 40.0,
        cfo_hz=2000.0 + 0.5 * k,
        seed=seed * 100_000 + k,
        datatype="ci16_le",
    )
    write_recording(
        base,
        capture.blocks(),
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        captures=[
            {
                "core:sample_start": 0,
                "core:datetime": f"{_START + np.timedelta64(60 * k, 's')}Z",
                "core:frequency": 2.45e9,
            }
        ],
        description=f"simulated recording of link {link.name}",
    )


def _meta(base: Path) -> Path:
    return base.with_name(f"{base.name}.sigmf-meta")


def _data(base: Path) -> Path:
    return base.with_name(f"{base.name}.sigmf-data")


def _change(base: Path, **fields: object) -> Path:
    meta = _meta(base)
    document = json.loads(meta.read_text())
    for name, value in fields.items():
        key = "core:" + name
        if value is None:
            del document["global"][key]
        else:
            document["global"][key] = value
    meta.write_text(json.dumps(document))
    return meta


def _metadata_cut_short(base: Path) -> Path:
    meta = _meta(base)
    meta.write_bytes(meta.read_bytes()[:90])
    return meta


def _data_missing(base: Path) -> Path:
    _data(base).unlink()
    return _meta(base)


def _data_empty(base: Path) -> Path:
    _data(base).write_bytes(b"")
    return _meta(base)


def _no_datatype(base: Path) -> Path:
    return _change(base, datatype=None)


def _odd_datatype(base: Path) -> Path:
    return _change(base, datatype="ci17_le")


def _slow_sampling(base: Path) -> Path:
    return _change(base, sample_rate=1.1e6)


def _metadata_missing(base: Path) -> Path:
    _meta(base).unlink()
    return _data(base)


def _archive_damaged(base: Path) -> Path:
    archive = base.with_name(f"{base.name}.sigmf")
    with tarfile.open(archive, "w") as tar:
        for path in (_meta(base), _data(base)):
            tar.add(path, f"{base.name}/{path.name}")
            path.unlink()
    archive.write_bytes(archive.read_bytes()[:700])
    return archive


def _stream_missing(base: Path) -> Path:
    written = write_collection(base.with_name(f"{base.name}-set"), [_meta(base)])
    _meta(base).unlink()
    _data(base).unlink()
    return Path(written)


def _no_rule(base: Path) -> Path:
    """In a folder of its own and with another description, no rule fits."""
    other = base.parent.parent / "elsewhere"
    other.mkdir(exist_ok=True)
    moved = _change(base, description="unknown").rename(other / _meta(base).name)
    _data(base).rename(other / _data(base).name)
    return moved


BREAKING: list[Callable[[Path], Path]] = [
    _metadata_cut_short,
    _data_missing,
    _data_empty,
    _no_datatype,
    _odd_datatype,
    _slow_sampling,
    _metadata_missing,
    _archive_damaged,
    _stream_missing,
    _no_rule,
]
WORDS: dict[Callable[[Path], Path], str] = {
    _metadata_cut_short: "JSON",
    _data_missing: "no such file; expected the data of",
    _data_empty: "0 bytes",
    _no_datatype: "core:datatype: found None",
    _odd_datatype: "ci17_le",
    _slow_sampling: "samples per symbol",
    _metadata_missing: "expected its metadata",
    _archive_damaged: "found no recording",
    _stream_missing: "no such file",
    _no_rule: "no rule that fits",
}
