"""How often does noise pass as a sync section?"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from campaign.links import campaign_link
from campaign.noise_scenes import SAMPLES_PER_SYMBOL, Scene
from campaign.sections import Row, Section
from spatiq.receiver.frame_search import LAGS_PER_SYMBOL, Detection, FrameSearch, sync_pattern
from spatiq.receiver.frame_search_kernels import metric_at
from spatiq.receiver.matched_filter import filter_bank
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.sample_stream import SampleStream

OTHER_NOISE_BAR = 3.0
_BLOCKS = 60
_RATES = (1e-3, 1e-4)
_PIECE = 50_000  # lags at a time


@dataclass(frozen=True)
class Case:
    """A scene, the stated rate, and whether the noise is what the threshold supposes."""

    scene: Scene
    rate: float
    white: bool = False


_OTHER = {
    "channels 8 dB apart": {"levels_db": (0.0, -8.0, -8.0, -8.0)},
    "three dead channels": {"levels_db": (0.0, -99.0, -99.0, -99.0)},
    "correlation 0.8": {"correlation": 0.8},
    "correlation 0.99": {"correlation": 0.99},
    "autoregressive, pole 0.7": {"pole": 0.7},
    "autoregressive, pole 0.95": {"pole": 0.95},
    "tone at 0.03/T, +0 dB": {"tone": 0.03},
    "tone at 0.03/T, +10 dB": {"tone": 0.03, "over_noise_db": 10.0},
    "tone at 0.27/T, +0 dB": {"tone": 0.27},
    "noise 0.02/T wide, +10 dB": {"band": 0.02, "over_noise_db": 10.0},
    "noise 0.2/T wide, +10 dB": {"band": 0.2, "over_noise_db": 10.0},
}


def _cases() -> Iterator[tuple[str, Case]]:
    for receivers in (1, 2, 4):
        for rate in _RATES:
            name = f"white, {receivers} channels, {rate:.0e}"
            yield name, Case(Scene(receivers), rate, white=True)
    for name, choices in _OTHER.items():
        for receivers in (1, 2, 4):
            over_channels = "levels_db" in choices or "correlation" in choices
            if receivers == 1 and over_channels:
                continue
            kept = dict(choices)
            if "levels_db" in kept:
                kept["levels_db"] = kept["levels_db"][:receivers]
            yield f"{name}, {receivers} channels", Case(Scene(receivers, **kept), 1e-4)


CASES = dict(_cases())
_QUICK = (
    "white, 1 channels, 1e-03",
    "white, 2 channels, 1e-03",
    "three dead channels, 4 channels",
    "tone at 0.03/T, +0 dB, 2 channels",
)


@dataclass(frozen=True, eq=False)
class Alarms:
    """Crossings of the threshold and what is left of them, per lag (mean over carrier bins)."""

    crossed: NDArray[np.float64]
    passed: NDArray[np.float64]
    worst_bin: float


def _alarms(case: Case, symbols: int, seed: int) -> Alarms:
    """Every lag and carrier bin looked at by direct correlation, as a peak is settled."""
    link = campaign_link(4, "QPSK", span=16)
    samples = case.scene.samples(int(symbols * SAMPLES_PER_SYMBOL), seed)
    receivers, count = samples.shape
    options = ReceiverOptions(false_alarm=case.rate)
    pattern = sync_pattern(link, options, receivers)
    stream = SampleStream(iter([_Block(samples)]), 0, count, receivers)
    search = FrameSearch(stream, filter_bank(link.pulse, SAMPLES_PER_SYMBOL), pattern)
    carriers = pattern.carrier_bins / pattern.transform_size
    reach = LAGS_PER_SYMBOL * (pattern.length - 1) + 1
    crossed, passed = [], []
    for first in range(0, search.last_lag + 1, _PIECE):
        lags = min(_PIECE, search.last_lag + 1 - first)
        metric = metric_at(search.instants(first, lags + reach), pattern.basis, carriers, lags)
        above = metric >= pattern.threshold
        crossed.append(above)
        kept = np.zeros_like(above)
        for i, b in np.argwhere(above):
            kept[i, b] = search.passes(Detection(first + int(i), int(b), float(metric[i, b])))
        passed.append(kept)
    both = np.concatenate(crossed), np.concatenate(passed)
    return Alarms(both[0].mean(axis=1), both[1].mean(axis=1), float(both[1].mean(axis=0).max()))


@dataclass(frozen=True, eq=False)
class _Block:
    samples: NDArray[np.complex64]


def interval(each: NDArray[np.float64]) -> tuple[float, float]:
    """95 % interval of the mean rate. Neighbouring lags share noise: Student's t of block means."""
    means = np.array([part.mean() for part in np.array_split(each, _BLOCKS)])
    reach = scipy.stats.t.isf(0.025, _BLOCKS - 1) * means.std(ddof=1) / np.sqrt(_BLOCKS)
    return float(means.mean() - reach), float(means.mean() + reach)


def _measured(key: str, quick: bool) -> Row:
    case = CASES[key]
    alarms = _alarms(case, 100_000 if quick else 400_000, 21_000 + list(CASES).index(key))
    raw = alarms.crossed.mean() / case.rate
    over = alarms.passed.mean() / case.rate
    low, high = (
        end / case.rate for end in interval(alarms.crossed if case.white else alarms.passed)
    )
    bar = "in interval" if case.white else f"at most {OTHER_NOISE_BAR:g}"
    text = f"{key:<40} {case.rate:7.0e} {raw:9.2f} {over:8.2f} {low:8.2f} to {high:5.2f}"
    text += f" {alarms.worst_bin / case.rate:9.2f}  {bar}"
    fault = not low <= 1.0 <= high if case.white else over > OTHER_NOISE_BAR
    return Row(text, ("rate",) if fault else ())


SECTION = Section(
    name="false-alarms",
    heading=(
        "False alarms over samples without a frame, per lag and carrier bin (7 of them), over the\n"
        "stated rate: crossings of the threshold, and what passes the second look at the noise's\n"
        "covariance over the channels. White noise: Beta(Nr, Nr (N-1)) (Scharf and Friedlander\n"
        "1994), the crossings' 95 % interval must hold 1; other noise: what passes, at most 3.\n"
        "Powers of tones and narrow-band noise: over N0 at the matched filter.\n"
        f"{'':<40} {'stated':>7} {'crossings':>9} {'passed':>8} {'95 % interval':>17}"
        f" {'worst bin':>9}  bar"
    ),
    keys=lambda quick: _QUICK if quick else tuple(CASES),
    measure=_measured,
)
