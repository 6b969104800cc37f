"""From a batch's estimates and counts to the columns of the frame table."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import scipy.stats
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.intervals import clopper_pearson
from spatiq.metrics.loss import local_loss
from spatiq.metrics.moving_figures import fill_motion, predict_moved
from spatiq.metrics.prediction import predict_ber
from spatiq.metrics.receive_channels import fill_front_end
from spatiq.metrics.reference_following import Numbering
from spatiq.receiver.frame_batch import (
    ANTENNAS_ALIGNED,
    RECEIVE_ALIGNED,
    FrameBatch,
    MatchedFrame,
)
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording

_BREAKS = {
    "samples_lost": "samples_lost",
    "lost_at": "lost_at",
    "lost_at_std": "lost_std",
    "lost_phase": "phase_jump",
    "gain_step_db": "gain_db",
    "gain_step_std_db": "gain_std",
    "gain_step_at": "gain_at",
    "noise_step_db": "noise_db",
    "noise_step_at": "noise_at",
}
Columns = dict[str, NDArray[Any]]
# Probability that chance raises the payload's noise so far over that of the known symbols.
_LOST_TRACK = 1e-6
_OF_THE_CHANNEL = (
    "signal_power", "noise_power", "snr", "evm_percent", "evm_db", "evm_error", "evm_reference",
    "equalised", "predicted", "implementation",
)  # fmt: skip


def as_received(batch: FrameBatch) -> FrameBatch:
    """The batch as it was before whitening: symbols, channel and mean noise at the antennas."""
    coloured = np.flatnonzero(batch.coloured)
    if not coloured.size:
        return batch
    seen = replace(
        batch,
        symbols=batch.symbols.copy(),
        channel=batch.channel.copy(),
        noise=batch.noise.copy(),
        moving=list(batch.moving),
    )
    for i in coloured:
        back = np.linalg.pinv(batch.whitener[i])
        seen.symbols[i] = batch.symbols[i] @ back.T
        seen.channel[i] = back @ batch.channel[i]
        if seen.moving and (moving := seen.moving[i]) is not None:
            seen.moving[i] = moving.through(back)
        seen.noise[i] *= np.mean(np.sum(np.abs(back) ** 2, axis=1))
    return seen


def fill_figures(
    columns: Columns,
    batch: FrameBatch,
    white: FrameBatch,
    sums: NDArray[np.float64],
    numbering: Numbering,
    link: Link,
    recording: Recording,
    options: ReceiverOptions,
) -> None:
    """Fill all derived columns.

    Args:
        columns: counts are in already.
        batch: received frames, figures at the receive antennas.
        white: the same after whitening, as detected.
        sums: (F, 6, Nt) of `error_vectors`.
        numbering: which frames' numbers are known.
        link, recording, options: as measured with.
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        _synchronisation(columns, batch, link, recording)
        fill_motion(columns, batch, link)
        _power(columns, batch, sums, link)
        _error_vector(columns, sums, link)
        _ratios(columns, options.confidence)
        if white.dispersive is None:  # else no bound of a single word holds: missing
            _prediction(columns, white, link)
        inverted = options.spectrum == "inverted"
        front_end = fill_front_end(columns, batch, recording.sample_rate, inverted)
    _marks(columns, batch, numbering, link)
    columns["marks"] |= front_end
    if link.codebook.block > 1:
        _withhold(columns, white, sums)


def _withhold(columns: Columns, white: FrameBatch, sums: NDArray[np.float64]) -> None:
    """In differential form words do not need the channel; figures that do are missing where the
    channel's estimate does not explain what was received."""
    lost = (columns["marks"] & np.uint32(Mark.TRACKING_LOST)) > 0
    for name in columns:
        if name.startswith(_OF_THE_CHANNEL):
            columns[name][lost] = np.nan
    white.noise[lost] = np.nan
    sums[lost] = 0.0


def _synchronisation(columns: Columns, batch: FrameBatch, link: Link, recording: Recording) -> None:
    rate = recording.sample_rate
    nominal = rate / link.symbol_rate_hz
    columns["segment"][:] = batch.segment
    columns["sync_metric"][:] = batch.sync_metric
    columns["cfo_hz"][:] = batch.carrier_estimate * rate
    columns["cfo_std_hz"][:] = np.sqrt(batch.frequency_var) / (2 * np.pi) * link.symbol_rate_hz
    if link.carrier_hz:
        columns["cfo_ppm"][:] = columns["cfo_hz"] / link.carrier_hz * 1e6
    columns["clock_ppm"][:] = (batch.step / nominal - 1.0) * 1e6
    columns["clock_std_ppm"][:] = np.sqrt(batch.step_var) / nominal * 1e6
    columns["timing_std_samples"][:] = np.sqrt(batch.timing_var)
    columns["clipped_samples"][:] = batch.clipped
    for i, moving in enumerate(batch.moving):
        if moving is not None:  # what moved explains residuals that change
            batch.breaks["noise_db"][i] = batch.breaks["noise_at"][i] = np.nan
    for column, name in _BREAKS.items():
        columns[column][:] = batch.breaks[name]


def _power(columns: Columns, batch: FrameBatch, sums: NDArray[np.float64], link: Link) -> None:
    channels = batch.channel.shape[1]
    periods = np.maximum(_periods(sums), 1)
    gain = float(np.mean(link.layout.payload_amplitude**2))
    measured = gain * sums[:, 4].sum(axis=1) / periods / channels
    # The estimate's own error adds N0 |x_a|^2 / energy behind it to |H x|^2.
    share = np.where(batch.antenna_energy > 0, sums[:, 5] / batch.antenna_energy, 0.0)
    excess = gain * batch.noise * share.sum(axis=1) / periods
    columns["signal_power"][:] = np.maximum(measured - excess, 0.0)
    columns["noise_power"][:] = batch.noise
    snr = columns["signal_power"] / batch.noise
    columns["snr_db"][:] = 10 * np.log10(snr)
    freedom = channels * periods
    spread = np.sqrt(1.0 / freedom + 2.0 / (snr * freedom))
    columns["snr_std_db"][:] = 10 / np.log(10) * spread


def _periods(sums: NDArray[np.float64]) -> NDArray[np.float64]:
    """Payload periods that entered the sums."""
    return np.asarray(sums[:, 3].sum(axis=1))


def _error_vector(columns: Columns, sums: NDArray[np.float64], link: Link) -> None:
    power = float(np.mean(np.sum(np.abs(link.codebook.vectors) ** 2, axis=1)))
    columns["evm_error_energy"][:] = sums[:, 0].sum(axis=1)
    columns["evm_reference_energy"][:] = sums[:, 1].sum(axis=1)
    columns["equalised_error_energy"][:] = sums[:, 2].sum(axis=1)
    columns["equalised_reference_energy"][:] = power * _periods(sums)
    for kind in ("evm", "equalised"):
        error = columns[f"{kind}_error_energy"]
        ratio = np.sqrt(error / columns[f"{kind}_reference_energy"])
        name = "evm" if kind == "evm" else "equalised_evm"
        columns[f"{name}_percent"][:] = 100 * ratio
        columns[f"{name}_db"][:] = 20 * np.log10(ratio)


def _ratios(columns: Columns, confidence: float) -> None:
    """Ratios of counts with exact binomial intervals; missing where nothing was compared."""
    columns["ber"][:] = columns["bit_errors"] / columns["bits_compared"]
    columns["ber_spatial"][:] = columns["spatial_bit_errors"] / columns["spatial_bits_compared"]
    columns["ber_signal"][:] = columns["signal_bit_errors"] / columns["signal_bits_compared"]
    two_step = columns["two_step_bit_errors"].astype(float)
    two_step[two_step < 0] = np.nan
    columns["two_step_ber"][:] = two_step / columns["bits_compared"]
    right = columns["periods_compared"] - columns["antenna_errors"]
    for name, errors, trials in (
        ("ber", columns["bit_errors"], columns["bits_compared"]),
        ("antenna_error_ratio", columns["antenna_errors"], columns["periods_compared"]),
        ("symbol_error_ratio", columns["symbol_errors"], right),
    ):
        columns[name][:] = errors / trials
        low, high = clopper_pearson(errors, trials, confidence)
        columns[f"{name}_low"][:] = low
        columns[f"{name}_high"][:] = high


def channel_error_variance(batch: FrameBatch) -> NDArray[np.float64]:
    """Variance of each channel coefficient's estimate, (F, Nt): N0 over the energy behind it.

    Zero for antennas that the link never uses; those in use always have pilot energy.

    Source: M. Biguesh and A. B. Gershman, IEEE Trans. Signal Process. 54(3), 2006.
    """
    energy = batch.antenna_energy
    return np.where(energy > 0, batch.noise[:, None] / np.maximum(energy, 1e-300), 0.0)


def _prediction(columns: Columns, batch: FrameBatch, link: Link) -> None:
    amplitude = float(np.sqrt(np.mean(link.layout.payload_amplitude**2)))
    channel = batch.channel * amplitude
    variance = channel_error_variance(batch) * amplitude**2
    predicted = predict_ber(channel, batch.noise, variance, link.codebook)
    columns["predicted_ber"][:] = predicted.ber
    columns["predicted_ber_spatial"][:] = predicted.spatial
    columns["predicted_ber_signal"][:] = predicted.signal
    some = columns["bit_errors"] > 0
    if np.any(some):
        columns["implementation_loss_db"][some] = local_loss(
            channel[some],
            batch.noise[some],
            variance[some],
            link.codebook,
            columns["bit_errors"][some],
            columns["bits_compared"][some],
            predicted.ber[some],
        )
    predict_moved(columns, batch, variance, link)
    for i, matched in batch.matched.items():
        _predict_matched(columns, i, matched, float(batch.noise[i]), variance[i], link)


def _predict_matched(
    columns: Columns,
    i: int,
    matched: MatchedFrame,
    noise: float,
    variance: NDArray[np.float64],
    link: Link,
) -> None:
    """Prediction of frame i whose antennas differ in delay.

    Of a receiver that is told its neighbours' symbols: what delays cost beyond that is in the
    implementation loss.
    """
    amplitude = float(np.sqrt(np.mean(link.layout.payload_amplitude**2)))
    channel, level = matched.channel[None] * amplitude, np.array([noise])
    predicted = predict_ber(channel, level, variance[None], link.codebook)
    columns["predicted_ber"][i] = predicted.ber[0]
    columns["predicted_ber_spatial"][i] = predicted.spatial[0]
    columns["predicted_ber_signal"][i] = predicted.signal[0]
    columns["implementation_loss_db"][i] = np.nan
    if columns["bit_errors"][i] > 0:
        columns["implementation_loss_db"][i] = local_loss(
            channel,
            level,
            variance[None],
            link.codebook,
            columns["bit_errors"][i : i + 1],
            columns["bits_compared"][i : i + 1],
            predicted.ber,
        )[0]


def _marks(columns: Columns, batch: FrameBatch, numbering: Numbering, link: Link) -> None:
    marks = np.zeros(batch.count, np.uint32)
    marks[batch.clipped > 0] |= np.uint32(Mark.CLIPPED)
    marks[~numbering.resolved] |= np.uint32(Mark.REFERENCE_UNKNOWN)
    marks[batch.coloured] |= np.uint32(Mark.COLOURED_NOISE)
    if batch.echoes is not None:
        marks[batch.echoes] |= np.uint32(Mark.ECHOES)
    marks[(batch.aligned & RECEIVE_ALIGNED) > 0] |= np.uint32(Mark.RECEIVE_DELAYS)
    marks[(batch.aligned & ANTENNAS_ALIGNED) > 0] |= np.uint32(Mark.ANTENNA_DELAYS)
    marks[np.isfinite(batch.breaks["lost_at"])] |= np.uint32(Mark.SAMPLES_LOST)
    marks[np.isfinite(batch.breaks["gain_at"])] |= np.uint32(Mark.GAIN_STEP)
    marks[np.isfinite(batch.breaks["noise_at"])] |= np.uint32(Mark.NOISE_STEP)
    marks[columns["crc_ok"] == 0] |= np.uint32(Mark.CRC_FAILED)
    channels = batch.channel.shape[1]
    header = max(batch.header_freedom, 1)
    payload = channels * link.layout.payload_index.size
    limit = scipy.stats.f.isf(_LOST_TRACK, 2 * payload, 2 * header)
    # Below an EVM of -50 dB both are rounding and pulse truncation, which no chance law describes.
    floor = 1e-5 * columns["signal_power"]
    expected = np.maximum(batch.header_noise, floor)
    marks[batch.noise > limit * expected] |= np.uint32(Mark.TRACKING_LOST)
    columns["marks"][:] = marks
