"""Carrier, timing and channel estimates against their bounds, through the whole chain."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from campaign.captures import Samples, matched, recorded
from campaign.links import campaign_link
from campaign.sections import Row, Section
from spatiq.link.loading import Link
from spatiq.metrics.estimator_bounds import (
    known_vectors_offset,
    known_vectors_timing,
    rrc_mean_square_bandwidth,
)
from spatiq.receiver.chain import chain_parts, receive, standard_stages
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording
from spatiq.transmit.channel import Given
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import simulate
from spatiq.transmit.truth import Truth

CARRIER_BAR_DB = 1.0  # over the Cramer-Rao bound, up to 30 dB
TIMING_BAR_DB = 1.0  # over the modified bound, up to 25 dB
CHANNEL_BAR_DB = 0.5  # over least squares with perfect synchronisation, up to 30 dB
FLOOR_BAR_DB = -50.0  # EVM that the timing error alone would give, without noise
_SNRS = (0.0, 5.0, 10.0, 15.0, 20.0, 25.0, 30.0, 70.0)
_QUICK = (10.0, 25.0, 70.0)
_ROLLOFF = 0.25
_FRAMES_AT_ONCE = 250
_RECEIVERS = 2

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Estimates:
    """What a part of the chain says of each frame found.

    start: samples; carrier: cycles per sample; spacing: samples per symbol; channel (F, Nr, Nt).
    """

    start: Floats
    spacing: Floats
    carrier: Floats
    channel: NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Errors:
    """Squared errors of some frames, over their bounds where there are bounds.

    carrier, timing: over the bound of the known symbols; `_all`: of all symbols;
    channel: sum over coefficients, per N0.
    """

    carrier: Floats
    carrier_all: Floats
    timing: Floats
    timing_all: Floats
    timing_symbols: Floats
    channel: Floats


def _estimates(recording: Recording, link: Link, acquired_only: bool) -> Estimates:
    options = ReceiverOptions()
    stages = standard_stages(link, options, chain_parts(recording, link, options))
    parts: list[tuple[Floats, ...]] = []
    channels = []
    for batch in receive(recording, link, options, stages=stages[:1] if acquired_only else None):
        carrier = batch.carrier if acquired_only else batch.carrier_estimate
        parts.append((batch.first_sample + batch.t0, batch.step.copy(), carrier.copy()))
        # Frames that were whitened are in the whitener's coordinates.
        channels.append(np.linalg.solve(batch.whitener, batch.channel))
    columns = [np.concatenate(column) for column in zip(*parts, strict=True)]
    return Estimates(*columns, channel=np.concatenate(channels))


def _aligned_error(estimate: NDArray[np.complex128], truth: NDArray[np.complex128]) -> float:
    """Squared error, common phase taken out: each way of estimating has a reference of its own."""
    turn = np.vdot(estimate, truth)
    return float(np.sum(np.abs(estimate * turn / abs(turn) - truth) ** 2))


def _errors(truth: Truth, found: Estimates, centre: float) -> Errors:
    """Errors of the frames found; timing is compared at a period near the energy's centre."""
    layout = truth.link.layout
    hits = matched(truth, found.start, truth.spacing)
    rows = []
    for f in np.flatnonzero(hits >= 0):
        i, h = hits[f], truth.H[f]
        turn = 2 * np.pi * truth.spacing * (found.carrier[i] - truth.cfo_hz[f] / truth.sample_rate)
        late = found.start[i] - truth.starts[f] + centre * (found.spacing[i] - truth.spacing)
        late /= truth.spacing
        everything = truth.vectors(f, f + 1)[0]
        known = layout.known
        rows.append(
            (
                turn**2 / known_vectors_offset(known, h, truth.N0),
                turn**2 / known_vectors_offset(everything, h, truth.N0),
                late**2 / known_vectors_timing(known, h, truth.N0, _ROLLOFF),
                late**2 / known_vectors_timing(everything, h, truth.N0, _ROLLOFF),
                late**2,
                _aligned_error(found.channel[i], h) / truth.N0,
            )
        )
    return Errors(*np.array(rows).T)


def _least_squares(truth: Truth, samples: Samples) -> Floats:
    """Squared error of least squares at the true timing and carrier, per N0, of each frame."""
    known = truth.link.layout.known
    sent = np.flatnonzero(np.any(known != 0, axis=1))
    symbols = genie_symbols(truth, samples)[:, sent]
    fits = [np.linalg.lstsq(known[sent], y, rcond=None)[0].T for y in symbols]
    pairs = zip(fits, truth.H, strict=True)
    return np.array([_aligned_error(fit, h) for fit, h in pairs]) / truth.N0


def _trials(snr_db: float, frames: int) -> Iterator[tuple[Errors, Errors, Floats]]:
    """Errors of acquisition, of the whole chain, and of least squares with perfect sync."""
    link = campaign_link(4, "QPSK", payload=500)
    reach = 0.02 * link.symbol_rate_hz
    for first in range(0, frames, _FRAMES_AT_ONCE):
        count = min(_FRAMES_AT_ONCE, frames - first)
        seed = 31_000 + first
        angles = np.random.default_rng(seed).uniform(0, 2 * np.pi, (count, _RECEIVERS, 4))
        capture = simulate(
            link,
            receive_channels=_RECEIVERS,
            channels=Given(np.exp(1j * angles)),
            snr_db=snr_db,
            samples_per_symbol=4.0690104,
            frames=count,
            spacing=(40.0, 120.0),
            cfo_hz=(-reach, reach),
            seed=seed,
        )
        samples = capture.samples()
        with recorded(capture, samples) as recording:
            acquired = _estimates(recording, link, acquired_only=True)
            final = _estimates(recording, link, acquired_only=False)
        truth, centre = capture.truth, link.layout.length / 2
        ideal = _least_squares(truth, samples)
        yield _errors(truth, acquired, 0.0), _errors(truth, final, centre), ideal


def _db(ratio: float) -> float:
    return float(10 * np.log10(ratio))


def _pooled(parts: list[Errors], name: str) -> float:
    return float(np.mean(np.concatenate([getattr(part, name) for part in parts])))


def _keys(quick: bool) -> tuple[str, ...]:
    return tuple(f"{snr:g} dB" for snr in (_QUICK if quick else _SNRS))


def _measured(key: str, quick: bool) -> Row:
    snr_db = float(key.split()[0])
    trials = list(_trials(snr_db, 250 if quick else 1000))
    acquired, final, ideal = (list(part) for part in zip(*trials, strict=True))
    least = float(np.mean(np.concatenate(ideal)))
    figures = {name: _db(_pooled(acquired, name)) for name in ("carrier", "timing")} | {
        f"final {name}": _db(_pooled(final, name))
        for name in ("carrier", "carrier_all", "timing", "timing_all")
    }
    channel = _db(_pooled(acquired, "channel") / least)
    channel_final = _db(_pooled(final, "channel") / least)
    spread = 4 * np.pi**2 * rrc_mean_square_bandwidth(_ROLLOFF)
    evm = [_db(spread * _pooled(part, "timing_symbols")) for part in (acquired, final)]
    count = sum(part.carrier.size for part in final)
    text = f"{key:>6} {count:>6}  {figures['carrier']:+6.2f} {figures['final carrier']:+7.2f}"
    text += f" {figures['final carrier_all']:+7.2f}   {figures['timing']:+6.2f}"
    text += f" {figures['final timing']:+7.2f} {figures['final timing_all']:+7.2f}"
    text += f"   {channel:+6.2f} {channel_final:+7.2f}   {evm[0]:7.1f} {evm[1]:7.1f}"
    missed = {
        "carrier": snr_db <= 30 and figures["carrier"] > CARRIER_BAR_DB,
        "timing": snr_db <= 25 and figures["final timing"] > TIMING_BAR_DB,
        "channel": snr_db <= 30 and channel > CHANNEL_BAR_DB,
        "floor": snr_db > 30 and evm[1] > FLOOR_BAR_DB,
    }
    return Row(text, tuple(name for name, fault in missed.items() if fault))


SECTION = Section(
    name="estimators",
    heading=(
        "Mean squared errors over their bounds, dB, 4 x 2 QPSK, unit-magnitude channels,\n"
        "4.0690104 samples per symbol, 127 known symbols, 500 payload words; 'acq.': from the\n"
        "known symbols; 'final': what is reported, from all symbols.\n"
        f"Carrier: Cramer-Rao bound of the link's known symbols, channel unknown (after Rife and\n"
        f"Boorstyn 1974); bar: acq. at most {CARRIER_BAR_DB:g} dB, 0 to 30 dB; 'all': the bound of"
        " all symbols.\nTiming: modified bound (D'Andrea, Mengali, Reggiannini 1994) of the known"
        f" symbols; bar: final at\nmost {TIMING_BAR_DB:g} dB, 0 to 25 dB.\n"
        "Channel: over least squares with perfect synchronisation on the same noise (Biguesh and\n"
        f"Gershman 2006); bar: acq. at most {CHANNEL_BAR_DB:g} dB, 0 to 30 dB.\n"
        "EVM: what the timing error alone gives;"
        f" bar: final at most {FLOOR_BAR_DB:g} dB at 70 dB.\n"
        f"{'SNR':>6} {'frames':>6}  {'carrier':>22}   {'timing':>22}   {'channel':>14}"
        f"   {'timing as EVM':>15}\n"
        f"{'':>6} {'':>6}  {'acq.':>6} {'final':>7} {'all':>7}   {'acq.':>6} {'final':>7}"
        f" {'all':>7}   {'acq.':>6} {'final':>7}   {'acq.':>7} {'final':>7}"
    ),
    keys=_keys,
    measure=_measured,
)
