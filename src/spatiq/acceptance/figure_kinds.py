"""Every figure that a transmitter is judged by: name, unit, meaning, stated once.

Limits files, results and documents are derived from `KINDS`. To add a figure: add a `Kind` here and
compute it in the file of this folder whose subject it belongs to.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Scope = Literal["whole", "antenna", "pair", "channel"]


@dataclass(frozen=True)
class Kind:
    """A kind of figure.

    Attributes:
        name: as in limits files.
        unit: empty for ratios.
        scope: "whole": one value; "antenna": one for each transmit antenna, and where it makes
            sense one over all of them; "pair": one for each pair of antennas; "channel": one for
            each stated adjacent channel.
        meaning: one line.
    """

    name: str
    unit: str
    scope: Scope
    meaning: str


KINDS: tuple[Kind, ...] = (
    Kind("evm_rms", "%", "antenna", "error vector magnitude, known symbols, after the fit"),
    Kind("evm_95", "%", "antenna", "95th percentile of the error vectors' magnitude"),
    Kind("evm_peak", "%", "antenna", "largest error vector, median over frames"),
    Kind("evm_after_change", "%", "antenna", "EVM of symbols that follow an antenna change"),
    Kind("evm_same_antenna", "%", "antenna", "EVM of symbols sent by the antenna before them"),
    Kind("carrier_error_hz", "Hz", "whole", "mean carrier frequency error"),
    Kind("carrier_error_ppm", "ppm", "whole", "the same over the carrier frequency"),
    Kind("carrier_settling_hz", "Hz", "whole", "carrier at the frame's start less that at its end"),
    Kind("clock_error_ppm", "ppm", "whole", "symbol-clock frequency error"),
    Kind("frame_period_error_ppm", "ppm", "whole", "frame period less the one described"),
    Kind("frame_jitter_ns", "ns", "whole", "standard deviation of frame starts about their grid"),
    Kind("power_db", "dB", "antenna", "mean power, relative to the converter's full scale"),
    Kind("power_imbalance_db", "dB", "whole", "strongest antenna over the weakest"),
    Kind("power_droop_db", "dB", "antenna", "power at the frame's end over that at its start"),
    Kind("edge_ramp_db", "dB", "whole", "power of the frame's outer symbols over its mean"),
    Kind("isolation_db", "dB", "antenna", "an antenna's power sending over its power when silent"),
    Kind("switching_time_ns", "ns", "antenna", "rise from 10 to 90 % on an antenna change"),
    Kind("switching_overlap_ns", "ns", "antenna", "time in which old and new antenna both send"),
    Kind("switching_delay_ns", "ns", "antenna", "how late the antenna takes over"),
    Kind("carrier_leakage_db", "dB", "antenna", "unmodulated carrier over mean power"),
    Kind("iq_gain_db", "dB", "antenna", "gain imbalance of the modulator"),
    Kind("iq_phase_deg", "degrees", "antenna", "quadrature error of the modulator"),
    Kind("image_rejection_db", "dB", "antenna", "wanted signal over its mirror image"),
    Kind("occupied_bandwidth_hz", "Hz", "whole", "band that holds 99 % of the power"),
    Kind("adjacent_power_db", "dB", "channel", "power in an adjacent channel over the channel's"),
    Kind("adjacent_switching_db", "dB", "channel", "the part of it that antenna switching makes"),
    Kind("bit_error_ratio", "", "whole", "wrong payload bits over those compared"),
    Kind("antenna_error_ratio", "", "whole", "symbol periods with the wrong antenna"),
    Kind("signature_correlation", "", "pair", "magnitude of the channels' normalised product"),
    Kind("smallest_distance", "", "whole", "smallest distance of received codewords, over sqrt N0"),
    Kind("predicted_ber", "", "whole", "BER of the best receiver on this channel and noise"),
    Kind("predicted_ber_at_snr", "", "whole", "the same at the noise stated in the limits file"),
)

# Named already, so that limits files may hold them; until they are measured, a limit on one leaves
# the verdict undecided.
NOT_YET = (
    "switching_time_ns",
    "switching_overlap_ns",
    "switching_delay_ns",
    "occupied_bandwidth_hz",
    "adjacent_power_db",
    "adjacent_switching_db",
)

BY_NAME = {kind.name: kind for kind in KINDS}


@dataclass(frozen=True)
class Figure:
    """One measured value.

    Attributes:
        kind: what it is.
        subject: antenna ("0"), pair ("0-1") or channel it belongs to; empty for the whole.
        value: in the kind's unit.
        low, high: ends of its interval at `confidence`.
        confidence: level of that interval, two-sided.
        frames: number of frames behind it.
        note: what limits its meaning in this set-up; empty when nothing does.
    """

    kind: Kind
    subject: str
    value: float
    low: float
    high: float
    confidence: float
    frames: int
    note: str = ""

    @property
    def title(self) -> str:
        """Name and subject, for people."""
        if not self.subject:
            return self.kind.name
        word = {"antenna": "antenna ", "pair": "antennas ", "channel": "channel "}
        return f"{self.kind.name}, {word.get(self.kind.scope, '')}{self.subject}"
