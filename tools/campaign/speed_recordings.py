"""Recordings on which speed is measured."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from campaign.links import campaign_text
from spatiq.link.loading import load_link
from spatiq.recording.writing import write_recording
from spatiq.transmit.simulation import simulate

SAMPLES_PER_SYMBOL = 4
RECEIVERS = 2
SNR_DB = 15.0
# The same carrier offset throughout: 0.7 % of the symbol rate.
_CFO_HZ = 7e3
_FRAME = 63 + 4 * 16 + 1000


@dataclass(frozen=True)
class Kind:
    """A kind of recording.

    Attributes:
        name: for the table.
        silence: symbol periods after each frame, drawn between two bounds; None: none at all.
        period: whether the link description declares the frame period.
        quick: whether it is among the few of the quick campaign.
    """

    name: str
    silence: tuple[float, float] | None
    period: bool
    quick: bool


KINDS = (
    Kind("dense, period declared", None, True, False),
    Kind("dense, no period", None, False, True),
    # Nine frames' length of silence on average.
    Kind("sparse, no period", (5.0 * _FRAME, 13.0 * _FRAME), False, True),
)


@dataclass(frozen=True)
class Made:
    """Files of a recording."""

    kind: Kind
    meta: Path
    link: Path


def make_recording(folder: Path, kind: Kind, samples: int) -> Made:
    """Write link and recording of about `samples` samples per channel: 4x2 QPSK, ci16_le."""
    stem = kind.name.replace(", ", "-").replace(" ", "-")
    link = folder / f"{stem}.link.toml"
    period = float(_FRAME) if kind.period else None
    link.write_text(campaign_text(4, "QPSK", span=24, period_symbols=period), encoding="utf-8")
    silence = 0.0 if kind.silence is None else sum(kind.silence) / 2
    capture = simulate(
        load_link(link),
        receive_channels=RECEIVERS,
        snr_db=SNR_DB,
        samples_per_symbol=SAMPLES_PER_SYMBOL,
        frames=max(1, int(samples / ((_FRAME + silence) * SAMPLES_PER_SYMBOL))),
        spacing="back-to-back" if kind.silence is None else kind.silence,
        cfo_hz=_CFO_HZ,
        seed=11,
        datatype="ci16_le",
    )
    base = folder / stem
    write_recording(
        base, capture.blocks(), sample_rate=capture.sample_rate, datatype=capture.datatype
    )
    return Made(kind, base.with_suffix(".sigmf-meta"), link)
