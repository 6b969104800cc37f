"""Figures of a point with their standard errors, and the bars they are held against."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from campaign.trial import Outcome, Setting
from spatiq.metrics.union_bound import rayleigh_union_bound

BER_BAR = 1.10  # measured over genie
EVM_BAR = 0.02  # relative error
PREDICTION_BAR = 0.10  # relative error of the predicted BER against the genie's
BOUND_SIGMAS = 4.0
_RESAMPLINGS = 400


@dataclass(frozen=True)
class Ratio:
    """A ratio of sums over frames, and its standard error by resampling frames."""

    value: float
    error: float


def ratio(above: NDArray[np.generic], below: NDArray[np.generic]) -> Ratio:
    """Sum of `above` over sum of `below`, paired by frame (bootstrap: B. Efron, Ann. Statist. 7(1),
    1979)."""
    top, bottom = above.astype(np.float64), below.astype(np.float64)
    rng = np.random.default_rng(0)
    share = np.full(top.size, 1.0 / top.size)
    again = []
    for _ in range(_RESAMPLINGS):
        times = rng.multinomial(top.size, share)
        again.append(float(times @ top) / max(float(times @ bottom), 1e-300))
    return Ratio(float(top.sum() / bottom.sum()), float(np.std(again)))


@dataclass(frozen=True)
class PointFigures:
    """What a point shows.

    Attributes:
        bits: payload bits of the frames found.
        sent, missed, false_frames, unresolved: frames.
        miscounts: see `Outcome`.
        genie_ber: over the frames found.
        bound: union bound.
        bound_sigmas: how far the genie's BER over all frames lies above the bound, in its standard
            deviations; negative below.
        ber, channel, sampling: BER over the genie's: the receiver's; with nothing but the channel
            estimated; with nothing but timing and carrier estimated.
        prediction: predicted BER over the genie's.
        evm: measured EVM over the true one.
    """

    bits: int
    sent: int
    missed: int
    false_frames: int
    unresolved: int
    miscounts: int
    genie_ber: float
    bound: float
    bound_sigmas: float
    ber: Ratio
    channel: Ratio
    sampling: Ratio
    prediction: Ratio
    evm: float

    def faults(self) -> list[str]:
        """Bars that are missed."""
        missed = {
            "BER": self.ber.value > BER_BAR,
            "EVM": abs(self.evm - 1) > EVM_BAR,
            "confusion": self.miscounts > 0,
            "prediction": abs(self.prediction.value - 1) > PREDICTION_BAR,
            "bound": self.bound_sigmas > BOUND_SIGMAS,
        }
        # Written so that a figure that is not a number is a fault.
        numbers = (self.ber.value, self.evm, self.prediction.value, self.bound_sigmas)
        if not np.isfinite(numbers).all():
            return ["not a number"]
        return [name for name, fault in missed.items() if fault]


def point_figures(setting: Setting, outcome: Outcome) -> PointFigures:
    """Pool the frames of a point."""
    codebook = setting.link.codebook
    frame_bits = setting.link.words_per_frame * codebook.bits
    sent, found = outcome.all_genie_errors.size, outcome.errors.size
    bound = float(rayleigh_union_bound(codebook, setting.receivers, 10 ** (setting.snr_db / 10)))
    each = outcome.all_genie_errors / frame_bits
    above = (each.mean() - bound) / (each.std(ddof=1) / np.sqrt(sent))
    genie = outcome.genie_errors
    measured = outcome.error_energy.sum() / outcome.reference_energy.sum()
    true = outcome.noise_energy.sum() / outcome.signal_energy.sum()
    return PointFigures(
        bits=found * frame_bits,
        sent=sent,
        missed=sent - found,
        false_frames=int(outcome.false_frames.sum()),
        unresolved=int(outcome.unresolved.sum()),
        miscounts=int(outcome.miscounts.sum()),
        genie_ber=float(genie.mean() / frame_bits),
        bound=bound,
        bound_sigmas=float(above),
        ber=ratio(outcome.errors, genie),
        channel=ratio(outcome.channel_errors, genie),
        sampling=ratio(outcome.sampling_errors, genie),
        prediction=ratio(outcome.predicted * frame_bits, genie),
        evm=float(np.sqrt(measured / true)),
    )
