"""The floor of the whole chain: EVM of captures without noise."""

from __future__ import annotations

import numpy as np

from campaign.captures import recorded
from campaign.links import campaign_link
from campaign.sections import Row, Section
from spatiq.metrics.measuring import measure
from spatiq.transmit.simulation import simulate

FLOOR_BAR_DB = -55.0
# Samples per symbol: roll-off, span of the pulse in symbol periods.
CASES = {
    "1.25": (0.2, 64),
    "1.7320508": (0.25, 64),
    "2.5": (0.25, 64),
    "4": (0.25, 64),
    "4.0690104": (0.25, 64),
    "7.3": (0.25, 64),
    "33.3": (0.35, 32),
    "64": (0.35, 32),
}
_QUICK = ("1.7320508", "4.0690104")


def _measured(key: str, quick: bool) -> Row:
    rolloff, span = CASES[key]
    link = campaign_link(4, "16QAM", rolloff=rolloff, span=span)
    reach = 0.02 * link.symbol_rate_hz
    capture = simulate(
        link,
        receive_channels=2,
        snr_db=np.inf,
        samples_per_symbol=float(key),
        frames=4 if quick else 12,
        spacing=(80.0, 160.0),
        cfo_hz=(-reach, reach),
        clock_ppm=11.0,
        seed=41_000,
    )
    with recorded(capture) as recording:
        frames = list(measure(recording, link))
    columns = [
        np.concatenate([batch.columns[name] for batch in frames])
        for name in ("evm_error_energy", "evm_reference_energy", "bit_errors")
    ]
    evm = float(10 * np.log10(columns[0].sum() / columns[1].sum()))
    each = 10 * np.log10(columns[0] / columns[1])
    text = f"{key:>10} {rolloff:>9} {span:>5} {evm:>8.1f} {each.max():>9.1f} {columns[2].sum():>7}"
    return Row(text, ("floor",) if not evm <= FLOOR_BAR_DB else ())


SECTION = Section(
    name="floor",
    heading=(
        "EVM of captures without noise, cf32, 4 x 2 16QAM, Rayleigh channels, carrier +-2 % of\n"
        f"the symbol rate, clock 11 ppm, all estimated; bar: at most {FLOOR_BAR_DB:g} dB over the\n"
        "frames. The pulse is cut off at its span and has an intersymbol interference of its own.\n"
        f"{'samples':>10} {'roll-off':>9} {'span':>5} {'EVM dB':>8} {'worst':>9} {'errors':>7}"
    ),
    keys=lambda quick: _QUICK if quick else tuple(CASES),
    measure=_measured,
)
