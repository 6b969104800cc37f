"""A recording of any size on disk: a simulated piece over and over, its seams in silence.

    python -m campaign.long_recording FOLDER GIGABYTES

Run as a process of its own, so that the one that measures memory stays small.
"""

from __future__ import annotations

import json
import shutil
import sys
from pathlib import Path

from campaign.links import campaign_text
from spatiq.link.loading import load_link
from spatiq.recording.writing import write_recording
from spatiq.transmit.simulation import simulate

_PIECE_FRAMES = 2000


def make_long_recording(folder: Path, gigabytes: float) -> None:
    """Write long.link.toml and long.sigmf-*, ci16_le, two channels, at least that large."""
    link = folder / "long.link.toml"
    # The reference begins anew in each frame: pieces put together stay a sound recording.
    link.write_text(campaign_text(4, "QPSK", span=24, continuation="restart"), encoding="utf-8")
    capture = simulate(
        load_link(link),
        receive_channels=2,
        snr_db=15.0,
        samples_per_symbol=4,
        frames=_PIECE_FRAMES,
        spacing=(0.0, 100.0),
        cfo_hz=7e3,
        seed=5,
        datatype="ci16_le",
    )
    piece = write_recording(
        folder / "piece",
        capture.blocks(),
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
    )
    size = piece.data_path.stat().st_size
    with (folder / "long.sigmf-data").open("wb") as whole:
        for _ in range(-(-int(gigabytes * 1e9) // size)):
            with piece.data_path.open("rb") as part:
                shutil.copyfileobj(part, whole, 1 << 22)
    document = json.loads(piece.meta_path.read_text(encoding="utf-8"))
    del document["global"]["core:sha512"]  # that of the piece
    text = json.dumps(document, indent=2)
    (folder / "long.sigmf-meta").write_text(text, encoding="utf-8")
    piece.data_path.unlink()
    piece.meta_path.unlink()


if __name__ == "__main__":
    make_long_recording(Path(sys.argv[1]), float(sys.argv[2]))
