"""At which SNR does a genie show a given bit error ratio?"""

from __future__ import annotations

import numpy as np
import scipy.optimize

from spatiq.link.loading import Link
from spatiq.metrics.prediction import predict_ber
from spatiq.metrics.union_bound import rayleigh_union_bound

_TIGHT = 2e-3  # below this the union bound is within 10 % of the truth
_CHANNELS = 400


def operating_snr(link: Link, receivers: int, ber: float) -> float:
    """SNR in dB at which the genie's BER on i.i.d. Rayleigh channels is about `ber`.

    From the union bound where it is tight; above, from the mean over drawn channels. It only places
    the point: what the genie really shows there is counted.
    """
    codebook = link.codebook

    def excess_of_bound(snr_db: float) -> float:
        return float(np.log(rayleigh_union_bound(codebook, receivers, 10 ** (snr_db / 10)) / ber))

    highest = float(scipy.optimize.brentq(excess_of_bound, -20.0, 60.0, xtol=0.01))
    if ber < _TIGHT:
        return highest
    rng = np.random.default_rng(1)
    parts = rng.standard_normal((2, _CHANNELS, receivers, link.antennas)) * np.sqrt(0.5)
    channels = parts[0] + 1j * parts[1]
    known = np.zeros((_CHANNELS, link.antennas))

    def excess(snr_db: float) -> float:
        noise = np.full(_CHANNELS, 10 ** (-snr_db / 10))
        return float(np.log(predict_ber(channels, noise, known, codebook).ber.mean() / ber))

    return float(scipy.optimize.brentq(excess, highest - 12.0, highest + 1.0, xtol=0.1))
