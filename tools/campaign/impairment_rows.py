"""BER under each impairment, over a genie's on the same noise."""

from __future__ import annotations

import zlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from campaign.captures import matched, recorded
from campaign.fidelity_figures import ratio
from campaign.impairments import IMPAIRMENTS, SILENCE, Impairment, impaired_link_text
from campaign.links import campaign_link
from campaign.operating_points import operating_snr
from campaign.plain_genie import genie_words, wrong_bits
from campaign.sections import Row, Section
from spatiq.link.loading import Link
from spatiq.metrics.measuring import measure
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.losses import spread
from spatiq.transmit.simulation import SimulatedCapture, simulate

BER_BAR = 1.15  # measured over genie
LOST_BAR = 0.01  # frames, where no samples are lost
_FRAMES_AT_ONCE = 75
_PULSES = 40  # reach of two frames' pulses, symbol periods
_ASTRAY = 2.0, 20  # errors of a frame that went astray: over genie's by a factor, and a few

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Counts:
    """One entry for each frame sent; found: 0 or 1; the rest 0 where it was not found.

    errors, bits: as the receiver counts them; genie: wrong bits of the genie; all_bits: bits of a
    frame; predicted: BER that the receiver predicts.
    """

    found: Floats
    errors: Floats
    bits: Floats
    genie: Floats
    predicted: Floats
    elsewhere: int


def link_of(row: Impairment) -> Link:
    """The link description of a row."""
    antennas, constellation, choices = impaired_link_text(row.link)
    return campaign_link(antennas, constellation, **choices)


def _counted(
    capture: SimulatedCapture, columns: dict[str, NDArray[np.generic]], genie: NDArray[np.int64]
) -> Counts:
    """What the receiver counted in the frames that it found and that no other transmitter hit."""
    truth = capture.truth
    hits = matched(truth, columns["start_sample"].astype(np.float64), 2 * truth.spacing)
    clear = np.ones(truth.frames, np.bool_)
    for other in capture.others:
        nearest = np.abs(truth.starts[:, None] - other.starts[None]).min(axis=1)
        clear &= nearest > (truth.link.layout.length + _PULSES) * truth.spacing
    elsewhere = int(columns["start_sample"].size - np.sum(hits >= 0))
    hits, genie = hits[clear], genie[clear]
    found = hits >= 0
    at = np.where(found, hits, 0)

    def of(name: str) -> Floats:
        if not columns[name].size:
            return np.zeros(hits.size)
        values = columns[name][at].astype(np.float64)
        return np.where(found, values, 0.0)

    predicted = of("predicted_ber")
    return Counts(
        found=found.astype(np.float64),
        errors=of("bit_errors"),
        bits=of("bits_compared"),
        genie=np.where(found, genie, 0).astype(np.float64),
        predicted=predicted,
        elsewhere=elsewhere,
    )


def _trial(row: Impairment, link: Link, snr_db: float, frames: int, seed: int) -> Counts:
    """Simulate, measure as a user would, and let the genie decide."""
    reach = 0.02 * link.symbol_rate_hz
    choices = {
        "receive_channels": row.receivers,
        "snr_db": snr_db,
        "samples_per_symbol": row.samples_per_symbol,
        "frames": frames,
        "spacing": SILENCE,
        "cfo_hz": (-reach, reach),
        "seed": seed,
        **row.scenario,
    }
    capture = simulate(link, **choices)
    samples = capture.samples()
    with recorded(capture, samples) as recording:
        measured = list(measure(recording, link, ReceiverOptions(**row.options)))
    names = ("start_sample", "bit_errors", "bits_compared", "predicted_ber")
    columns = {n: np.concatenate([batch.columns[n] for batch in measured]) for n in names}
    ideal, seen = capture, samples
    if row.clean is not None:
        ideal = simulate(link, **{**choices, **row.clean})
        seen = ideal.samples()
    seen = spread(seen, ideal.truth.gaps, ideal.n_clock)
    words = genie_words(ideal.truth, seen, whiten=row.whiten, dead=row.dead)
    genie = wrong_bits(words, ideal.truth.words())
    return _counted(capture, columns, genie)


def _joined(parts: list[Counts], name: str) -> Floats:
    return np.concatenate([getattr(part, name) for part in parts])


def _keys(quick: bool) -> tuple[str, ...]:
    return tuple(name for name, row in IMPAIRMENTS.items() if row.quick or not quick)


def _measured(key: str, quick: bool) -> Row:
    row = IMPAIRMENTS[key]
    link = link_of(row)
    snr_db = operating_snr(link, row.receivers, row.ber) if row.snr_db is None else row.snr_db
    frames = row.quick if quick else row.frames
    seed = 1000 * zlib.crc32(key.encode())  # the row's own, whatever stands beside it
    parts = [
        _trial(row, link, snr_db, min(_FRAMES_AT_ONCE, frames - first), seed + first)
        for first in range(0, frames, _FRAMES_AT_ONCE)
    ]
    return judged(key, row, snr_db, link.layout.payload_index.size * link.codebook.bits, parts)


def judged(key: str, row: Impairment, snr_db: float, frame_bits: int, parts: list[Counts]) -> Row:
    """The row's text and what it misses."""
    found, bits, errors = (_joined(parts, name) for name in ("found", "bits", "errors"))
    genie, predicted = _joined(parts, "genie"), _joined(parts, "predicted")
    elsewhere = sum(part.elsewhere for part in parts)
    lost = int(found.size - found.sum())
    known = bits > 0
    unknown = int(found.sum() - known.sum())
    text = f"{key:<70} {snr_db:5.1f} {found.size:>5} {lost:>5} {elsewhere:>5} {unknown:>5}"
    faults = [] if row.lossy or lost <= LOST_BAR * found.size else ["frames"]
    if not known.any() or not genie[known].sum():
        return Row(f"{text}  nothing to compare", (*faults, "BER"), compares=True)
    share = bits[known] / frame_bits  # of a frame that counts
    fair = genie[known] * share
    over = ratio(errors[known], fair)
    factor, few = _ASTRAY
    astray = errors[known] > factor * fair + few
    rest = ratio(errors[known][~astray], fair[~astray]).value if (~astray).any() else np.nan
    told = np.isfinite(predicted[known])
    foretold = predicted[known][told] @ bits[known][told] / fair[told].sum()
    text += f" {astray.sum():>5}  {genie[known].sum() / (known.sum() * frame_bits):.2e}"
    text += f"  {over.value:7.3f} +- {over.error:.3f}  {rest:6.3f}  {foretold:6.3f}"
    if not over.value <= BER_BAR:
        faults.append("BER")
    return Row(text, tuple(faults), over.value, compares=True)


SECTION = Section(
    name="impairments",
    heading=(
        "BER that the receiver reports over a genie's on the same noise (maximum likelihood, told\n"
        "timing, carrier, clock and channel at every symbol; front-end faults, interference of a\n"
        "known waveform and gain steps undone; the covariance of other noise over the channels),\n"
        "over the frames found whose reference was known. 4 x 2 QPSK, 1000 payload words,\n"
        "Rayleigh channels, carrier +-2 %, 4.069 samples per symbol, default options unless\n"
        "stated.\n"
        f"Bars: BER at most {BER_BAR} times the genie's; frames lost at most {LOST_BAR:.0%}.\n"
        "'elsewhere': found where none was sent; 'unkn.': place in the reference not known;\n"
        f"'astray': more than {_ASTRAY[0]:g} times the genie's errors and {_ASTRAY[1]} beyond;"
        " 'others': BER over genie\nwithout those. 'predicted': the receiver's predicted BER over"
        " the genie's\n(it allows for the channel estimate's error: metrics/prediction.py).\n"
        f"{'':<70} {'SNR':>5} {'sent':>5} {'lost':>5} {'elsew':>5} {'unkn.':>5} {'astray':>6}"
        f" {'genie BER':>9}  {'BER over genie':>16}  {'others':>6} {'predicted':>9}"
    ),
    keys=_keys,
    measure=_measured,
)
