"""Probable causes: what they saw, how sure, what to try. Each is a test with a stated false alarm.

A cause is named when its evidence would arise without it with a probability below `CHANCE`, all
hypotheses of its kind counted, and when its size matters. Nothing wrong: nothing is named.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.acceptance.figure_kinds import Figure
from spatiq.acceptance.observation import ObservedFrames
from spatiq.acceptance.payload_causes import Payloads, payload_causes
from spatiq.acceptance.power import gain_powers
from spatiq.acceptance.probable_cause import CHANCE, Cause
from spatiq.link.description import Link

# What is too small to matter, though it may be significant.
_LEAST_SHARE = 0.02  # of a symbol period, of a switch that is late
_WEAK_DB = 9.0  # below the mean of the others: weak
_DEAD_DB = 20.0
_LEAST_CLIPPED = 1e-4  # share of samples
_ALIKE = 0.98  # signature correlation


@dataclass(frozen=True, eq=False)
class Evidence:
    """What causes are judged from.

    Attributes:
        link: what should have been sent.
        figures: of the whole recording.
        kept: some frames with their symbols.
        payloads: decided words of these.
        clipped: samples at full scale within frames, and samples in frames.
        over_air: whether fading may be at work.
    """

    link: Link
    figures: list[Figure]
    kept: list[ObservedFrames]
    payloads: Payloads
    clipped: tuple[int, int]
    over_air: bool


def probable_causes(evidence: Evidence) -> list[Cause]:
    """Causes, the surest first."""
    if not evidence.kept:
        return []
    tests: list[Callable[[Evidence], list[Cause]]] = [
        _weak_antennas,
        lambda e: payload_causes(e.payloads),
        _late_switch,
        _clipping,
        _alike_antennas,
        _references,
    ]
    return [cause for test in tests for cause in test(evidence)]


def _figure(evidence: Evidence, name: str, subject: str = "") -> Figure | None:
    return next((f for f in evidence.figures if f.kind.name == name and f.subject == subject), None)


def _weak_antennas(evidence: Evidence) -> list[Cause]:
    """An antenna's power against the mean of the others'.

    Cabled: t test on the margin beyond `_WEAK_DB`. Over the air, Rayleigh fading that stands still
    is the rival: then the ratio is F distributed, 2 Nr degrees of freedom for each antenna.
    """
    power = np.concatenate([_powers(frames) for frames in evidence.kept])
    used = np.flatnonzero(np.any(evidence.kept[0].sent != 0, axis=(0, 1)))
    if used.size < 2 or len(power) < 4:
        return []
    receive = evidence.kept[0].fit.gain.shape[1]
    found = []
    for a in used.tolist():
        others = power[:, used[used != a]].mean(axis=1)
        margin = power[:, a] - others * 10 ** (-_WEAK_DB / 10)
        error = float(margin.std(ddof=1) / np.sqrt(margin.size))
        chance = float(scipy.stats.t.cdf(margin.mean() / max(error, 1e-300), margin.size - 1))
        ratio = max(float(power[:, a].mean() / others.mean()), 0.0)
        if evidence.over_air:
            freedom = (2 * receive, 2 * receive * (used.size - 1))
            chance = max(chance, float(scipy.stats.f.cdf(ratio, *freedom)))
        if chance > CHANCE:
            continue
        name = "dead" if ratio < 10 ** (-_DEAD_DB / 10) else "weak"
        saw = f"{-10 * np.log10(ratio):.1f} dB below the others" if ratio > 0 else "no power"
        advice = "check its amplifier, the switch's position, connector and cable"
        found.append(Cause(f"antenna {a} {name}", saw, chance, advice))
    return found


def _powers(frames: ObservedFrames) -> NDArray[np.float64]:
    """Power of each antenna while it sends (F, Nt), what noise adds taken off."""
    periods = np.maximum(np.sum(frames.sent != 0, axis=1), 1)
    level = np.sum(np.abs(frames.sent) ** 2, axis=1) / periods
    return np.asarray(gain_powers(frames)[0].mean(axis=1) * level)


def _late_switch(evidence: Evidence) -> list[Cause]:
    """Share of the antenna before in the symbols that follow a change, over frames (t test)."""
    above, below = [], []
    for frames in evidence.kept:
        regressor = _of_the_antenna_before(frames)
        numerator, weight = frames.fit.amount(regressor)
        above.append(numerator)
        below.append(weight)
    top, bottom = np.concatenate(above), np.concatenate(below)
    count = top.size
    if count < 4 or not np.all(bottom > 0):
        return []
    share = top.sum() / bottom.sum()
    left = (top.sum() - top) / (bottom.sum() - bottom)
    error = float(np.sqrt(np.sum((left - left.mean()) ** 2) * (count - 1) / count))
    chance = float(scipy.stats.t.sf(share / max(error, 1e-12), count - 1))
    if chance > CHANCE or share < _LEAST_SHARE:
        return []
    # Gains are fitted to symbols of which a share is misplaced: their differences shrink so.
    share = float(share / (1 + share))
    late = share / evidence.link.symbol_rate_hz * 1e9
    return [
        Cause(
            f"antenna switch slow or late by about {late:.3g} ns",
            f"{100 * share:.1f} % of a symbol after a change comes from the antenna before",
            chance,
            "advance the switch control, or take a faster switch",
        )
    ]


def _of_the_antenna_before(frames: ObservedFrames) -> NDArray[np.complex128]:
    """What the receiver would see less of the new antenna and more of the old one (F, K, Nr)."""
    on = frames.sent != 0
    single = on.sum(axis=2) == 1
    chosen = single[:, 1:] & single[:, :-1] & np.any(on[:, 1:] != on[:, :-1], axis=2)
    symbol = np.where(chosen, frames.sent.sum(axis=2)[:, 1:], 0.0)
    moved = (on[:, :-1].astype(float) - on[:, 1:]) * symbol[..., None]
    out = np.zeros(frames.fit.reference.shape, np.complex128)
    out[:, 1:] = moved @ frames.fit.gain.transpose(0, 2, 1)
    return out


def _clipping(evidence: Evidence) -> list[Cause]:
    """A count: without clipping there is none."""
    clipped, samples = evidence.clipped
    if not samples or clipped < _LEAST_CLIPPED * samples:
        return []
    return [
        Cause(
            "receiver clipped",
            f"{clipped} samples at full scale within frames, {100 * clipped / samples:.2g} %",
            0.0,
            "more attenuation, or less gain ahead of the converter",
        )
    ]


def _alike_antennas(evidence: Evidence) -> list[Cause]:
    """Antennas that look alike, as opposed to a weak signal: the interval of their correlation."""
    found = []
    for figure in evidence.figures:
        if figure.kind.name == "signature_correlation" and figure.low > _ALIKE:
            found.append(
                Cause(
                    f"antennas {figure.subject} indistinguishable",
                    f"signature correlation {figure.value:.4f}, whatever the signal's power",
                    CHANCE,
                    "another place or spacing of the antennas, more receive channels; one channel "
                    "alone sees only amplitude and phase",
                )
            )
    if evidence.kept[0].fit.gain.shape[1] == 1:
        return []
    return found


def _references(evidence: Evidence) -> list[Cause]:
    """Carrier and clock of a link that says locked: their errors are one, in ppm."""
    carrier, clock = (_figure(evidence, f"{name}_error_ppm") for name in ("carrier", "clock"))
    if evidence.link.clock != "locked" or carrier is None or clock is None or carrier.frames < 4:
        return []
    half = np.hypot((carrier.high - carrier.low) / 2, (clock.high - clock.low) / 2)
    quantile = float(scipy.stats.t.ppf(0.5 + carrier.confidence / 2, carrier.frames - 1))
    apart = clock.value - carrier.value
    chance = 2 * float(scipy.stats.t.sf(abs(apart) / (half / quantile), carrier.frames - 1))
    if chance > CHANCE or abs(apart) < 1.0:
        return []
    return [
        Cause(
            "clock and carrier not locked to one reference",
            f"they differ by {apart:.2f} ppm",
            chance,
            "feed symbol clock and oscillator from one reference, or describe them as independent",
        )
    ]
