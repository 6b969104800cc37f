"""How often is a weak frame missed?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.stats

from campaign.captures import matched, places_found, recorded
from campaign.links import campaign_link
from campaign.sections import Row, Section
from spatiq.receiver.frame_search import threshold
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.channel import Given
from spatiq.transmit.simulation import simulate

MISS_BAR = 1e-3
_FRAMES_AT_ONCE = 500
_SYNC = 63
_REACH = 0.05  # carrier offset, +- share of the symbol rate


@dataclass(frozen=True)
class Case:
    """Frames of unit-magnitude channels at one SNR."""

    samples_per_symbol: float
    receivers: int
    snr_db: float
    barred: bool = True


CASES = {
    "2 channels, 0 dB, 4.0690104 samples per symbol": Case(4.0690104, 2, 0.0),
    "2 channels, 0 dB, 4 samples per symbol": Case(4.0, 2, 0.0),
    "2 channels, 0 dB, 1.7320508 samples per symbol": Case(1.7320508, 2, 0.0),
    "2 channels, -2 dB, 4 samples per symbol": Case(4.0, 2, -2.0, barred=False),
    "1 channel, 0 dB, 4 samples per symbol": Case(4.0, 1, 0.0, barred=False),
    "4 channels, -3 dB, 4 samples per symbol": Case(4.0, 4, -3.0, barred=False),
}


def _count(case: Case, frames: int, seed: int) -> tuple[int, int]:
    """Frames missed, and places found where none is."""
    link = campaign_link(4, "QPSK", payload=32, span=16)
    angles = np.random.default_rng(seed).uniform(0, 2 * np.pi, (frames, case.receivers, 4))
    reach = _REACH * link.symbol_rate_hz
    capture = simulate(
        link,
        receive_channels=case.receivers,
        channels=Given(np.exp(1j * angles)),
        snr_db=case.snr_db,
        samples_per_symbol=case.samples_per_symbol,
        frames=frames,
        spacing=(30.0, 90.0),
        cfo_hz=(-reach, reach),
        seed=seed,
    )
    options = ReceiverOptions(cfo_range=_REACH)
    with recorded(capture) as recording:
        starts = places_found(recording, link, options)
    hit = matched(capture.truth, starts, case.samples_per_symbol)
    return int(np.sum(hit < 0)), int(starts.size - np.sum(hit >= 0))


def closed_form(case: Case) -> float:
    """Miss probability at the right instant and carrier: noncentral F, see the heading."""
    nr, options = case.receivers, ReceiverOptions()
    limit = threshold(options.false_alarm, _SYNC, 1, nr)
    statistic = limit * (_SYNC - 1) / (1 - limit)
    power = 2 * _SYNC * nr * 10 ** (case.snr_db / 10)
    return float(scipy.stats.ncf.cdf(statistic, 2 * nr, 2 * nr * (_SYNC - 1), power))


def _measured(key: str, quick: bool) -> Row:
    case, frames = CASES[key], 1000 if quick else 3000
    misses = elsewhere = 0
    for first in range(0, frames, _FRAMES_AT_ONCE):
        missed, false = _count(case, min(_FRAMES_AT_ONCE, frames - first), 11_000 + first)
        misses, elsewhere = misses + missed, elsewhere + false
    bar = f"{MISS_BAR:.0e}" if case.barred else "none"
    text = f"{key:<48} {frames:>6} {misses:>7} {misses / frames:>9.1e} {bar:>7}"
    text += f" {closed_form(case):>12.1e} {elsewhere:>9}"
    return Row(text, ("misses",) if case.barred and misses > MISS_BAR * frames else ())


SECTION = Section(
    name="misses",
    heading=(
        "Frames missed. Symbol SNR per receive channel as stated on every frame (unit-magnitude\n"
        "channels, phases drawn), 63 sync symbols, carrier +-5 % of the symbol rate, false-alarm\n"
        f"rate 1e-10; bar: at most {MISS_BAR:.0e} of 3,000 frames (1,000 in the quick campaign).\n"
        "Closed form: at the right instant and carrier, F(2 Nr, 2 Nr (N-1)), noncentral, 2 N Nr\n"
        "SNR (Scharf and Friedlander 1994); a grid of half symbols and of carriers 1/(2N) apart\n"
        "costs up to 0.9 dB each.\n"
        f"{'':<48} {'frames':>6} {'missed':>7} {'ratio':>9} {'bar':>7} {'closed form':>12}"
        f" {'elsewhere':>9}"
    ),
    keys=lambda quick: tuple(CASES)[:1] if quick else tuple(CASES),
    measure=_measured,
)
