"""The frame table: every per-frame figure with its name, type, unit and meaning, stated once.

Results files, tables and documents are derived from `COLUMNS`. To add a figure: add a `Column` here
and fill it in `measuring.py`.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import IntFlag
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.metrics.path_figures import PathFigures
from spatiq.receiver.frame_batch import LostFrame


class Mark(IntFlag):
    """Why a found frame deserves a second look. Bits of the column `marks`."""

    NONE = 0
    CLIPPED = 1  # samples at the converter's full scale inside the frame
    REFERENCE_UNKNOWN = 2  # the position in the reference sequence could not be told
    CRC_FAILED = 4
    TRACKING_LOST = 8  # the carrier-phase or timing track left its expected error
    COLOURED_NOISE = 16  # noise differs between receive channels or is correlated: whitened
    ECHOES = 1024  # symbols reach into their neighbours on a channel taken for flat
    RECEIVE_DELAYS = 4096  # receive channels differ in delay: taken out
    ANTENNA_DELAYS = 8192  # transmit antennas differ in delay: taken into account
    IQ_CORRECTED = 256  # gain or phase of I and Q differed in a receive channel: set right
    DC_CORRECTED = 512  # a constant offset besides that of the whole recording: taken out
    INTERFERER = 32  # a narrow-band interferer: taken out
    ERRORS_CORRELATED = 2048  # errors are correlated in time: coloured noise, or an echo
    SPECTRUM_INVERTED = 16384  # samples were conjugated before they were received
    SAMPLES_LOST = 32768  # samples are missing inside the frame; what they held is not compared
    GAIN_STEP = 65536  # the gain stepped inside the frame: taken out
    NOISE_STEP = 131072  # noise or interference set in or ended inside the frame


@dataclass(frozen=True)
class Column:
    """One column of the frame table."""

    name: str
    dtype: str
    unit: str
    meaning: str


_INT_MISSING = "-1 when unknown"

COLUMNS: tuple[Column, ...] = (
    Column("frame", "i8", "", "running index of the frame in the recording, from 0"),
    Column("segment", "i4", "", "index of the contiguous run of samples it lies in"),
    Column("start_sample", "f8", "samples", "centre of its first symbol, per-channel file index"),
    Column("time_s", "f8", "s", "the same since the recording's first sample, gaps counted"),
    Column("frame_number", "i8", "", f"number the transmitter gave it; {_INT_MISSING}"),
    Column("marks", "u4", "", "bit flags: see the marks table"),
    Column("sync_metric", "f8", "", "normalised correlation with the sync section, 0 to 1"),
    Column("cfo_hz", "f8", "Hz", "carrier offset"),
    Column("cfo_std_hz", "f8", "Hz", "its standard deviation, from the frame's own residuals"),
    Column("cfo_ppm", "f8", "ppm", "carrier offset relative to the carrier; missing without one"),
    Column("clock_ppm", "f8", "ppm", "symbol clock offset: positive when symbols are too long"),
    Column("clock_std_ppm", "f8", "ppm", "its standard deviation"),
    Column("timing_std_samples", "f8", "samples", "standard deviation of start_sample"),
    Column(
        "channel_model",
        "i1",
        "",
        "0 still; 1 moved, followed by decisions; 2 moved, interpolated between known symbols",
    ),
    Column("doppler_spread_hz", "f8", "Hz", "largest Doppler shift supposed; missing: none"),
    Column("linewidth_hz", "f8", "Hz", "of the carrier's phase noise; missing: none was seen"),
    Column("signal_power", "f8", "", "mean over payload of |h s|^2 / Nr, full scale squared"),
    Column("noise_power", "f8", "", "N0, per complex component after the matched filter"),
    Column("snr_db", "f8", "dB", "signal_power over noise_power"),
    Column("snr_std_db", "f8", "dB", "its standard deviation"),
    Column("image_rejection_db", "f8", "dB", "signal over its image, of the worst receive channel"),
    Column("dc_db", "f8", "dB", "largest DC offset of a receive channel, over the signal's power"),
    Column("interferer_hz", "f8", "Hz", "strongest narrow-band interferer; missing: none"),
    Column("interferer_db", "f8", "dB", "its power, mean over receive channels, over the signal's"),
    Column("error_correlation", "f8", "", "largest correlation of errors 1 to 3 periods apart"),
    Column("clipped_samples", "i8", "samples", "samples at full scale inside the frame"),
    Column("samples_lost", "i8", "samples", "missing inside the frame, untold; -1: number unknown"),
    Column("lost_at", "f8", "symbol periods", "where the first of them are missing"),
    Column("lost_at_std", "f8", "symbol periods", "its standard deviation"),
    Column("lost_phase", "f8", "rad", "jump of the recorded carrier's phase there"),
    Column("bits_erased", "i8", "bits", "payload lost with samples or not placed: not compared"),
    Column("gain_step_db", "f8", "dB", "step of the gain inside the frame; the largest one"),
    Column("gain_step_std_db", "f8", "dB", "its standard deviation"),
    Column("gain_step_at", "f8", "symbol periods", "where it is"),
    Column("noise_step_db", "f8", "dB", "change of the residuals' power inside the frame"),
    Column("noise_step_at", "f8", "symbol periods", "where it is, to 32 periods"),
    Column("crc_ok", "i1", "", "1 passed, 0 failed, -1 no CRC in the link"),
    Column("bits_compared", "i8", "bits", "payload bits with a known value"),
    Column("bit_errors", "i8", "bits", "of these, wrong"),
    Column("spatial_bits_compared", "i8", "bits", "of bits_compared, those that chose the antenna"),
    Column("spatial_bit_errors", "i8", "bits", "of these, wrong"),
    Column("signal_bits_compared", "i8", "bits", "of bits_compared, those in the symbol"),
    Column("signal_bit_errors", "i8", "bits", "of these, wrong"),
    Column("ber", "f8", "", "bit error ratio; missing when nothing was compared"),
    Column("ber_low", "f8", "", "lower end of its interval"),
    Column("ber_high", "f8", "", "upper end of its interval; the figure to quote at zero errors"),
    Column("ber_spatial", "f8", "", "bit error ratio of the spatial bits"),
    Column("ber_signal", "f8", "", "bit error ratio of the signal bits"),
    Column("periods_compared", "i8", "words", "payload words that are known"),
    Column("antenna_errors", "i8", "words", "of these, wrong antennas"),
    Column("symbol_errors", "i8", "words", "right antennas, wrong symbol"),
    Column("antenna_error_ratio", "f8", "", "antenna_errors / periods_compared"),
    Column("antenna_error_ratio_low", "f8", "", "lower end of its interval"),
    Column("antenna_error_ratio_high", "f8", "", "upper end of its interval"),
    Column("symbol_error_ratio", "f8", "", "symbol_errors / words with the right antennas"),
    Column("symbol_error_ratio_low", "f8", "", "lower end of its interval"),
    Column("symbol_error_ratio_high", "f8", "", "upper end of its interval"),
    Column("evm_data_aided", "u1", "", "1: against known symbols (of half or more); 0: decided"),
    Column("evm_percent", "f8", "%", "EVM rms at the receive antennas"),
    Column("evm_db", "f8", "dB", "the same in dB"),
    Column("evm_error_energy", "f8", "", "sum of |y - h s|^2: add over frames to pool EVM"),
    Column("evm_reference_energy", "f8", "", "sum of |h s|^2"),
    Column("equalised_evm_percent", "f8", "%", "EVM rms after projection on the word as received"),
    Column("equalised_evm_db", "f8", "dB", "the same in dB"),
    Column("equalised_error_energy", "f8", "", "sum of |z - s|^2: add over frames to pool"),
    Column("equalised_reference_energy", "f8", "", "mean power sent times symbol periods"),
    Column(
        "predicted_ber", "f8", "", "BER of a maximum-likelihood receiver on this channel, noise"
    ),
    Column("predicted_ber_spatial", "f8", "", "the same for the spatial bits"),
    Column("predicted_ber_signal", "f8", "", "the same for the signal bits"),
    Column("implementation_loss_db", "f8", "dB", "SNR between measured and predicted BER"),
    Column(
        "two_step_bit_errors", "i8", "bits", "wrong bits with the two-step detector; -1 not run"
    ),
    Column("two_step_ber", "f8", "", "bit error ratio of the two-step detector"),
)

COLUMN_NAMES = tuple(c.name for c in COLUMNS)


@dataclass(frozen=True, eq=False)
class ReceiveFigures:
    """Each receive channel's front end in F frames, all of shape (F, Nr); NaN: cannot be told.

    Attributes:
        image, image_var: complex coefficient c of the image, samples s + c conj(s); its variance.
        constant, constant_var: DC offset in the samples' scale; its variance.
        iq_gain_db, iq_gain_std_db: gain of Q over I, and its standard deviation.
        iq_phase_deg, iq_phase_std_deg: departure from quadrature, and its standard deviation.
        sample_power: (F,); mean power of the signal in a sample while payload is sent.
    """

    image: NDArray[np.complex128]
    image_var: NDArray[np.float64]
    constant: NDArray[np.complex128]
    constant_var: NDArray[np.float64]
    iq_gain_db: NDArray[np.float64]
    iq_gain_std_db: NDArray[np.float64]
    iq_phase_deg: NDArray[np.float64]
    iq_phase_std_deg: NDArray[np.float64]
    sample_power: NDArray[np.float64]


@dataclass
class MeasuredFrames:
    """A batch of F measured frames.

    Attributes:
        columns: one array of shape (F,) for each of `COLUMN_NAMES`.
        confusion: int64, shape (F, A, A); row = antenna set sent, column = antenna set decided.
        channel: complex128, shape (F, Nr, Nt); estimated channel, phase at the centre of the known
            symbols; the columns of antennas that the link never uses are zero.
        antenna_evm_percent: float64, shape (F, Nt); EVM of the periods that each antenna sent, NaN
            if none.
        antenna_power: float64, shape (F, Nt); ||h_a||^2 / Nr.
        lost: frames found to be lost before or between these.
        subcarriers: float64, shape (F, N, 5); sums of each subcarrier, see
            `spatiq.metrics.subcarriers.SUMS`; None without subcarriers.
        taps: complex128, shape (F, L, Nr, Nt); impulse responses at the lags of
            `spatiq.receiver.dispersive_plan.WIDEST`; None on a flat channel.
        matched_channels: of frames whose antennas differ in delay, by index, the channel (Nd, Nt)
            that words were decided on, see `MatchedFrame`.
        paths: figures of each receive channel and each antenna's path.
        symbols: complex64, shape (F, Kp, Nr); received payload vectors, carrier removed; or None.
        white_channel, white_noise: channel (F, Nr, Nt) and N0 (F,) after whitening, as detected
            with; the same as channel and noise_power where the noise is white.
        channel_error_variance: float64, shape (F, Nt); variance of each coefficient of `channel`.
        antenna_error_energy, antenna_reference_energy: float64, shape (F, Nt); the sums behind
            antenna_evm_percent, to be added over frames.
        words_decided: int64, shape (F, Kw).
        words_sent: int64, shape (F, Kw); -1 where unknown.
        llr: float32, shape (F, Kw * b); log-likelihood ratios of the bits as sent (scrambled, where
            the link scrambles), positive when 0 is likelier; or None.
        receive: the front end of each receive channel; None when no stage looked at it.
    """

    columns: dict[str, NDArray[Any]]
    confusion: NDArray[np.int64]
    channel: NDArray[np.complex128]
    antenna_evm_percent: NDArray[np.float64]
    antenna_power: NDArray[np.float64]
    words_decided: NDArray[np.int64]
    words_sent: NDArray[np.int64]
    symbols: NDArray[np.complex64] | None = None
    channel_error_variance: NDArray[np.float64] | None = None
    white_channel: NDArray[np.complex128] | None = None
    white_noise: NDArray[np.float64] | None = None
    antenna_error_energy: NDArray[np.float64] | None = None
    antenna_reference_energy: NDArray[np.float64] | None = None
    llr: NDArray[np.float32] | None = None
    subcarriers: NDArray[np.float64] | None = None
    taps: NDArray[np.complex128] | None = None
    paths: PathFigures | None = None
    receive: ReceiveFigures | None = None
    matched_channels: dict[int, NDArray[np.complex128]] = field(default_factory=dict)
    lost: list[LostFrame] = field(default_factory=list)

    @property
    def count(self) -> int:
        """Number of frames, F."""
        return int(self.columns["frame"].size)


def empty_columns(count: int) -> dict[str, NDArray[Any]]:
    """All columns for `count` frames: NaN in floats, 0 in counts, -1 where the column says so."""
    columns: dict[str, NDArray[Any]] = {}
    for c in COLUMNS:
        if c.dtype.startswith("f"):
            columns[c.name] = np.full(count, np.nan, c.dtype)
        else:
            value = -1 if "-1" in c.meaning else 0
            columns[c.name] = np.full(count, value, c.dtype)
    return columns
