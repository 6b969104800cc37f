"""Plain links against a genie: the points, and their table."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from campaign.fidelity_figures import (
    BER_BAR,
    BOUND_SIGMAS,
    EVM_BAR,
    PREDICTION_BAR,
    PointFigures,
    point_figures,
)
from campaign.links import campaign_link
from campaign.operating_points import operating_snr
from campaign.sections import Row, Section
from campaign.trial import Outcome, Setting, join, run_trial

# Transmit antennas, constellation, receive antennas.
SCHEMES = ((4, "QPSK", 2), (2, "BPSK", 2), (8, "16QAM", 4))
SAMPLES_PER_SYMBOL = (4.0, 4.0690104)
BIT_ERROR_RATIOS = (1e-1, 3e-2, 1e-2, 3e-3, 1e-3)
_FRAMES_AT_ONCE = 200


@dataclass(frozen=True)
class Extent:
    """How long a point is measured: at least so many bits, and so many errors of the genie."""

    bits: int
    errors: int

    def frames(self, ber: float, frame_bits: int) -> int:
        """Frames needed for both, and a few for those that are missed."""
        return int(np.ceil(max(self.bits, self.errors / ber) / frame_bits * 1.03)) + 1


FULL = Extent(bits=200_000, errors=15_000)
QUICK = Extent(bits=200_000, errors=2_500)
_QUICK_POINTS = {
    (4, 4.0690104): (1e-1, 1e-2, 1e-3),
    (2, 4.0): (1e-1, 1e-2),
    (8, 4.0690104): (3e-2, 3e-3),
}

_HEADER = (
    "Nt x Nr  modulation  samples   SNR      bits   frames       ref. genie    over bound"
    "   BER over genie   of which     of which       EVM  predicted      confusion\n"
    "                     /symbol    dB              missed false unkn. BER      sigmas"
    "                    channel  timing,carr.   error  over genie\n"
)


@dataclass(frozen=True)
class Point:
    """A row of the table; `seed` is its own, whichever other rows are measured."""

    antennas: int
    constellation: str
    receivers: int
    samples_per_symbol: float
    ber: float
    seed: int

    @property
    def key(self) -> str:
        """Name of the row."""
        rate = f"{self.samples_per_symbol:g} samples per symbol"
        return f"{self.antennas}x{self.receivers} {self.constellation}, {rate}, BER {self.ber:g}"


def _points(quick: bool) -> Iterator[Point]:
    seed = 0
    for scheme in SCHEMES:
        for rate in SAMPLES_PER_SYMBOL:
            for ber in BIT_ERROR_RATIOS:
                seed += 1_000_000
                if not quick or ber in _QUICK_POINTS.get((scheme[0], rate), ()):
                    yield Point(*scheme, rate, ber, seed)


def _row(name: str, setting: Setting, figures: PointFigures) -> str:
    f = figures
    exact = "exact" if not f.miscounts else f"{f.miscounts} wrong"
    return (
        f"{name:<19}  {setting.samples_per_symbol:<9.7g} {setting.snr_db:5.1f} {f.bits:>9}"
        f" {f.missed:>5} {f.false_frames:>5} {f.unresolved:>5}  {f.genie_ber:.2e}"
        f" {f.bound_sigmas:+7.1f}   {f.ber.value:.4f} +- {f.ber.error:.4f}"
        f"  {f.channel.value:.4f}    {f.sampling.value:.4f}"
        f"      {100 * (f.evm - 1):+5.2f} %  {f.prediction.value:.3f} +- {f.prediction.error:.3f}"
        f"  {exact}"
    )


def _measure(setting: Setting, frames: int, seed: int) -> Outcome:
    outcomes = []
    for first in range(0, frames, _FRAMES_AT_ONCE):
        count = min(_FRAMES_AT_ONCE, frames - first)
        outcomes.append(run_trial(setting, count, seed + first))
    return join(outcomes)


def _keys(quick: bool) -> tuple[str, ...]:
    return tuple(point.key for point in _points(quick))


def _measured(key: str, quick: bool) -> Row:
    point = next(p for p in _points(quick) if p.key == key)
    extent = QUICK if quick else FULL
    link = campaign_link(point.antennas, point.constellation)
    snr_db = operating_snr(link, point.receivers, point.ber)
    setting = Setting(link, point.receivers, point.samples_per_symbol, snr_db)
    frame_bits = link.words_per_frame * link.codebook.bits
    outcome = _measure(setting, extent.frames(point.ber, frame_bits), point.seed)
    figures = point_figures(setting, outcome)
    name = f"{point.antennas} x {point.receivers}    {point.constellation}"
    return Row(
        _row(name, setting, figures), tuple(figures.faults()), figures.ber.value, compares=True
    )


SECTION = Section(
    name="links",
    heading=(
        "Receiver against a genie (maximum likelihood, told timing, carrier and channel) on the\n"
        "same noise. Flat i.i.d. Rayleigh channel and carrier offset (+-2 % of the symbol rate)\n"
        "drawn for each frame; 63 sync symbols, 16 pilots an antenna, 1000 payload words; BER\n"
        "over the frames found. Standard errors by resampling frames.\n"
        f"Bars: BER over genie {BER_BAR:.2f}; EVM error {100 * EVM_BAR:.0f} %; predicted BER within"
        f" {100 * PREDICTION_BAR:.0f} % of the genie's;\nconfusion matrix exact; genie at most"
        f" {BOUND_SIGMAS:.0f} sigmas above the union bound.\n{_HEADER.rstrip()}"
    ),
    keys=_keys,
    measure=_measured,
)
