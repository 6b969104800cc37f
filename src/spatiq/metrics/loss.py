"""Implementation loss: the SNR, in dB, by which a measured link lies behind the predicted one.

It is the shift of the noise at which the predicted bit error ratio, on the same channels, equals
the measured one; positive when the measured ratio is the worse. The quality of the channel
estimate is held while the noise is shifted: `error_variance` belongs to the estimates as they are.

`predicted_curve` gives sums over frames that pool by adding, batch after batch; `loss_from_curve`
reads the loss off them. `pooled_loss` does both; `local_loss` is the cheap figure per
frame.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.interpolate import PchipInterpolator

from spatiq.errors import InputError
from spatiq.metrics.intervals import clopper_pearson, upper_bound
from spatiq.metrics.prediction import predict_ber
from spatiq.signal.codebooks import Codebook

OFFSETS_DB = (-6.0, -4.0, -3.0, -2.0, -1.0, 0.0, 1.0, 2.0, 3.0, 4.0, 6.0, 8.0, 12.0, 16.0)
SLOPE_STEP_DB = 1.0


@dataclass(frozen=True)
class Loss:
    """Implementation loss and its interval, dB.

    Attributes:
        value: NaN when there were no errors, no bits, or when it lies outside the curve.
        low: smallest loss that the count allows; -inf when the count sets no lower limit.
        high: largest loss that the count allows; +inf when the curve does not reach that far.
    """

    value: float
    low: float
    high: float


def predicted_curve(
    h: ArrayLike,
    n0: ArrayLike,
    error_variance: ArrayLike,
    codebook: Codebook,
    bits: ArrayLike,
    offsets_db: ArrayLike = OFFSETS_DB,
) -> NDArray[np.float64]:
    """Wrong bits predicted with the noise raised by each offset, summed over frames.

    Args:
        h, n0, error_variance, codebook: as for `predict_ber`.
        bits: (F,) bits compared in each frame.
        offsets_db: (G,) ascending.

    Returns:
        float64 (G,); add the results of batches. NaN when a frame cannot be predicted: leave such
        frames out of this and of the measured count alike.

    Raises:
        InputError: as for `predict_ber`.
    """
    weight = np.asarray(bits, dtype=np.float64)
    noise = np.asarray(n0, dtype=np.float64)
    sums = []
    for offset in np.asarray(offsets_db, dtype=np.float64):
        ber = predict_ber(h, noise * 10.0 ** (offset / 10.0), error_variance, codebook).ber
        sums.append(float(np.sum(ber * weight)))
    return np.asarray(sums, dtype=np.float64)


def loss_from_curve(
    wrong_bits: ArrayLike,
    errors: int,
    bits: int,
    offsets_db: ArrayLike = OFFSETS_DB,
    level: float = 0.95,
) -> Loss:
    """Read the loss off pooled sums, by interpolation in log BER.

    Args:
        wrong_bits: (G,) predicted sums, see `predicted_curve`.
        errors, bits: measured, over the same frames.
        offsets_db: (G,) offsets of the curve, ascending, two at least.
        level: of the interval, taken from the exact binomial ends of the measured ratio (one-sided
            above when there were no errors). Bits of one word err together, so that it is a guide.

    Raises:
        InputError: fewer than two offsets or offsets not ascending; counts as for
        `clopper_pearson`.
    """
    offsets = np.asarray(offsets_db, dtype=np.float64)
    curve = np.asarray(wrong_bits, dtype=np.float64)
    if offsets.ndim != 1 or offsets.size < 2 or curve.shape != offsets.shape:
        found = f"{offsets.shape} offsets, {curve.shape} sums"
        raise InputError("implementation loss", "offsets_db", found, "two or more of each")
    if not (np.diff(offsets) > 0).all():
        raise InputError("implementation loss", "offsets_db", list(offsets), "ascending values")
    low, high = clopper_pearson(errors, bits, level)
    if errors == 0:
        high = upper_bound(errors, bits, level)
    if bits == 0 or not np.isfinite(curve).all():
        return Loss(np.nan, -np.inf, np.inf)
    ratio = curve / bits
    middle = _crossing(offsets, ratio, errors / bits)
    return Loss(
        value=middle if np.isfinite(middle) else np.nan,
        low=min(_crossing(offsets, ratio, float(low)), float(offsets[-1])),
        high=max(_crossing(offsets, ratio, float(high)), float(offsets[0])),
    )


def _crossing(offsets: NDArray[np.float64], ratio: NDArray[np.float64], target: float) -> float:
    """Offset at which the curve reaches the target; -inf below its start, +inf above its end."""
    rising = np.concatenate([[True], np.diff(np.maximum.accumulate(ratio)) > 0]) & (ratio > 0)
    x, y = offsets[rising], ratio[rising]
    if y.size < 2 or target < y[0]:
        return -np.inf
    if target > y[-1]:
        return np.inf
    return float(PchipInterpolator(np.log(y), x)(np.log(target)))


def pooled_loss(
    h: ArrayLike,
    n0: ArrayLike,
    error_variance: ArrayLike,
    codebook: Codebook,
    errors: int,
    bits: int,
    level: float = 0.95,
    predicted: float | None = None,
) -> Loss:
    """Loss over many frames of equal weight, with its interval.

    Args:
        h, n0, error_variance, codebook: as for `predict_ber`; all frames or an even choice of them.
            Frames that cannot be predicted are left out.
        errors, bits: wrong bits and bits compared, measured over all frames.
        level: of the interval, see `loss_from_curve`.
        predicted: BER predicted over all frames, where h holds only some of them: their curve is
            scaled to it, so that it is only their slope that stands for the others'.

    Raises:
        InputError: as for `predict_ber` and `clopper_pearson`.
    """
    channels, noise = np.asarray(h), np.asarray(n0, dtype=np.float64)
    variance = np.asarray(error_variance, dtype=np.float64)
    used = np.isfinite(predict_ber(channels, noise, variance, codebook).ber)
    share = bits / max(int(used.sum()), 1)
    weight = np.full(int(used.sum()), share)
    curve = predicted_curve(channels[used], noise[used], variance[used], codebook, weight)
    at_rest = curve[OFFSETS_DB.index(0.0)]
    if predicted is not None and at_rest > 0.0:
        curve *= predicted * bits / at_rest
    return loss_from_curve(curve, errors, bits, level=level)


def local_loss(
    h: ArrayLike,
    n0: ArrayLike,
    error_variance: ArrayLike,
    codebook: Codebook,
    errors: ArrayLike,
    bits: ArrayLike,
    predicted: ArrayLike | None = None,
    together: bool = False,
) -> NDArray[np.float64]:
    """Loss of each frame from the local slope of its predicted curve, dB.

    Two predictions a frame, or one when `predicted`, the BER of `predict_ber`, is given; the second
    lies 1 dB away on the side of the measured ratio. Good within some 2 dB; farther out log BER is
    extrapolated along a straight line in dB, which overstates the size of a gain and of a loss.

    With `together`, the rows are instants of one frame, whose counts they all hold: the loss is
    that of their mean, the same in each row.

    Returns:
        float64 (F,); NaN where no bit was wrong, none was compared, or the prediction has no slope.

    Raises:
        InputError: as for `predict_ber`.
    """
    noise = np.asarray(n0, dtype=np.float64)
    if predicted is None:
        predicted = predict_ber(h, noise, error_variance, codebook).ber
    at = np.asarray(predicted, dtype=np.float64)
    if together:
        at = np.full(at.shape, np.mean(at))
    wrong = np.asarray(errors, dtype=np.float64)
    compared = np.asarray(bits, dtype=np.float64)
    some = (wrong > 0) & (compared > 0)
    measured = np.where(some, wrong, np.nan) / np.where(some, compared, 1.0)
    step = np.where(measured < at, -SLOPE_STEP_DB, SLOPE_STEP_DB)
    beside = predict_ber(h, noise * 10.0 ** (step / 10.0), error_variance, codebook).ber
    if together:
        beside = np.full(at.shape, np.mean(beside))
    usable = some & (at > 0) & (beside > 0) & ((beside - at) * step > 0)
    loss = np.full(at.shape, np.nan)
    slope = np.log(beside[usable] / at[usable]) / step[usable]
    loss[usable] = np.log(measured[usable] / at[usable]) / slope
    return loss
