"""Every scheme against a genie with the same detector: how many dB the receiver loses."""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from campaign.fidelity_figures import EVM_BAR, PREDICTION_BAR, PointFigures, point_figures
from campaign.links import campaign_text
from campaign.operating_points import operating_snr
from campaign.sections import Row, Section
from campaign.trial import Setting, join, run_trial
from spatiq.link.loading import Link, parse_link
from spatiq.metrics.union_bound import rayleigh_union_bound

LOSS_BAR = 0.3  # dB
BER = 1e-3
RECEIVERS = 4
_ERRORS, _QUICK_ERRORS = 3000, 500
_FRAMES_AT_ONCE = 200
_QPSK = 'constellation = { name = "QPSK" }'


@dataclass(frozen=True)
class Scheme:
    """A row: transmit antennas, the [modulation] table, whether there are pilots."""

    antennas: int
    modulation: str
    pilots: bool = True


SCHEMES = {
    "spatial modulation, 4 QPSK": Scheme(4, f'scheme = "spatial-modulation"\n{_QPSK}'),
    "space-shift keying, 8": Scheme(8, 'scheme = "space-shift-keying"'),
    "2 of 4 active, same QPSK": Scheme(
        4, f'scheme = "generalised-spatial-modulation"\nactive_antennas = 2\n{_QPSK}'
    ),
    "2 of 4 active, own QPSK": Scheme(
        4,
        f'scheme = "generalised-spatial-modulation"\nactive_antennas = 2\n'
        f'streams = "independent"\n{_QPSK}',
    ),
    "2 of 5 active, no symbols": Scheme(
        5, 'scheme = "generalised-space-shift-keying"\nactive_antennas = 2'
    ),
    "quadrature, 4 QPSK": Scheme(4, f'scheme = "quadrature-spatial-modulation"\n{_QPSK}'),
    "differential, 2 QPSK": Scheme(
        2, f'scheme = "differential-spatial-modulation"\n{_QPSK}', pilots=False
    ),
    "differential, 4 BPSK": Scheme(
        4,
        'scheme = "differential-spatial-modulation"\nconstellation = { name = "BPSK" }',
        pilots=False,
    ),
    "table, 3 antennas": Scheme(
        3,
        'scheme = "vector-table"\nnormalise = true\nwords = [\n'
        '{ word = "000", antennas = [0], symbols = [1] },\n'
        '{ word = "001", antennas = [0], symbols = [-1] },\n'
        '{ word = "010", antennas = [1], symbols = [1] },\n'
        '{ word = "011", antennas = [1], symbols = [-1] },\n'
        '{ word = "100", antennas = [2], symbols = [1] },\n'
        '{ word = "101", antennas = [2], symbols = [-1] },\n'
        '{ word = "110", antennas = [0, 1], symbols = [0.6, [0, 0.8]] },\n'
        '{ word = "111", antennas = [0, 1], symbols = [-0.6, [0, -0.8]] }]',
    ),
}
_QUICK = ("quadrature, 4 QPSK", "differential, 2 QPSK")


def family_link(name: str) -> Link:
    """The link of a row: 63 sync symbols, 16 pilots an antenna or none, 1000 payload periods."""
    scheme = SCHEMES[name]
    text = campaign_text(scheme.antennas, None)
    text = text.replace('scheme = "space-shift-keying"', scheme.modulation)
    if not scheme.pilots:
        text = re.sub(r'\[\[frame.section\]\]\nkind = "pilots"\n(?:[^\[\n].*\n)+', "", text)
    return parse_link(text)


def _loss(setting: Setting, figures: PointFigures) -> tuple[float, float]:
    """dB between the receiver's BER and the genie's, and its standard error.

    By the slope of the union bound there: BER over genie is near 1.
    """
    steps = np.array([-0.25, 0.25])
    ratio = 10 ** ((setting.snr_db + steps) / 10)
    bound = rayleigh_union_bound(setting.link.codebook, setting.receivers, ratio)
    per_db = float(np.log(bound[0] / bound[1])) / 0.5
    value = np.log(figures.ber.value) / per_db
    return float(value), figures.ber.error / figures.ber.value / per_db


def _measured(key: str, quick: bool) -> Row:
    link = family_link(key)
    setting = Setting(link, RECEIVERS, 4.0690104, operating_snr(link, RECEIVERS, BER))
    frame_bits = link.words_per_frame * link.codebook.bits
    errors = _QUICK_ERRORS if quick else _ERRORS
    frames = int(np.ceil(errors / BER / frame_bits * 1.03)) + 1
    seed = 40_000_000 + 1_000_000 * list(SCHEMES).index(key)
    outcome = join(
        [
            run_trial(setting, min(_FRAMES_AT_ONCE, frames - first), seed + first)
            for first in range(0, frames, _FRAMES_AT_ONCE)
        ]
    )
    f = point_figures(setting, outcome)
    loss, error = _loss(setting, f)
    exact = "exact" if not f.miscounts else f"{f.miscounts} wrong"
    faults = [name for name in f.faults() if name != "BER"]
    faults += ["loss"] if not loss <= LOSS_BAR else []
    text = (
        f"{key:<27} {setting.snr_db:5.1f} {f.bits:>9} {f.missed:>4} {f.unresolved:>4}"
        f"   {f.genie_ber:.2e} {f.bound_sigmas:+6.1f}   {f.ber.value:.4f} +- {f.ber.error:.4f}"
        f"   {loss:+.3f} +- {error:.3f}   {100 * (f.evm - 1):+5.2f} %"
        f"   {f.prediction.value:.3f} +- {f.prediction.error:.3f}   {exact}"
    )
    return Row(text, tuple(faults), f.ber.value, compares=True)


SECTION = Section(
    name="family",
    heading=(
        "Every scheme: receiver against a genie with the same detector, told timing, carrier and\n"
        f"(but for the differential form) channel; genie's BER about {BER:g}, {RECEIVERS} receive"
        " channels,\nflat i.i.d. Rayleigh channel and carrier offset drawn for each frame; 63 sync"
        " symbols,\n16 pilots an antenna (differential form: none), 1000 payload periods.\n"
        f"Bars: loss {LOSS_BAR} dB, by the slope of the union bound; EVM error"
        f" {100 * EVM_BAR:.0f} %; predicted BER\nwithin {100 * PREDICTION_BAR:.0f} % of the"
        " genie's; confusion matrix exact.\n"
        "scheme                        SNR      bits frames     genie's   over     BER over genie"
        "     loss dB            EVM     predicted        confusion\n"
        "                               dB           miss unkn.  BER       bound"
        "                                         error    over genie"
    ),
    keys=lambda quick: _QUICK if quick else tuple(SCHEMES),
    measure=_measured,
)
