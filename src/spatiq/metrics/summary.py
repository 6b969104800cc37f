"""Figures over all frames: counts and energies are added, ratios are never averaged."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.metrics.frame_table import Mark, MeasuredFrames
from spatiq.metrics.intervals import clopper_pearson
from spatiq.metrics.loss import pooled_loss
from spatiq.metrics.path_summary import NO_DELAY, PathSummary
from spatiq.metrics.receive_channels import ReceivePool
from spatiq.metrics.subcarriers import SubcarrierSummary
from spatiq.receiver.moving_channel import Following

_KEPT_FRAMES = 64  # channels kept for the implementation loss, spread over the recording
_SPREAD = (
    "cfo_hz",
    "cfo_ppm",
    "clock_ppm",
    "snr_db",
    "doppler_spread_hz",
    "linewidth_hz",
    "interferer_hz",
    "interferer_db",
)
_COUNTS = (
    "bits_compared",
    "bit_errors",
    "spatial_bits_compared",
    "spatial_bit_errors",
    "signal_bits_compared",
    "signal_bit_errors",
    "periods_compared",
    "antenna_errors",
    "symbol_errors",
)
_ENERGIES = (
    "evm_error_energy",
    "evm_reference_energy",
    "equalised_error_energy",
    "equalised_reference_energy",
)


@dataclass
class Spread:
    """Count, mean, standard deviation and range of a column, added up batch by batch."""

    count: int = 0
    mean: float = 0.0
    square: float = 0.0
    low: float = np.inf
    high: float = -np.inf

    def add(self, values: NDArray[np.float64]) -> None:
        """Take in finite values (Chan, Golub and LeVeque's pairwise update, 1979)."""
        values = values[np.isfinite(values)]
        if not values.size:
            return
        mean = float(values.mean())
        total = self.count + values.size
        shift = mean - self.mean
        self.square += float(np.sum((values - mean) ** 2))
        self.square += shift * shift * self.count * values.size / total
        self.mean += shift * values.size / total
        self.count = total
        self.low = min(self.low, float(values.min()))
        self.high = max(self.high, float(values.max()))

    def as_dict(self) -> dict[str, float | None] | None:
        """Mean, std, min, max; None when there was no value."""
        if not self.count:
            return None
        std = float(np.sqrt(self.square / (self.count - 1))) if self.count > 1 else None
        return {"mean": self.mean, "std": std, "min": self.low, "max": self.high}


@dataclass
class Summary:
    """Pooled figures of a recording.

    Attributes:
        link: as measured with.
        confidence: level of the intervals.
    """

    link: Link
    confidence: float = 0.95
    frames: int = 0
    lost: Counter[str] = field(default_factory=Counter)
    marks: Counter[str] = field(default_factory=Counter)
    crc: Counter[int] = field(default_factory=Counter)
    channel_models: Counter[str] = field(default_factory=Counter)
    _sums: Counter[str] = field(default_factory=Counter)
    _energies: dict[str, float] = field(default_factory=lambda: dict.fromkeys(_ENERGIES, 0.0))
    _spreads: dict[str, Spread] = field(default_factory=dict)
    _kept: list[tuple[int, Any]] = field(default_factory=list)
    _stride: int = 1
    _paths: PathSummary = field(default_factory=PathSummary)
    _subcarriers: SubcarrierSummary = field(default_factory=SubcarrierSummary)
    _receive: ReceivePool = field(default_factory=ReceivePool)

    def __post_init__(self) -> None:
        """Start all sums at nothing."""
        sets = len(self.link.codebook.antenna_sets)
        self._confusion = np.zeros((sets, sets), np.int64)
        self._antenna = np.zeros((4, self.link.antennas))
        self._two_step = [0, 0]
        self._aided = 0
        self._predicted = np.zeros((3, 2))
        self._spreads = {name: Spread() for name in _SPREAD}

    def add(self, measured: MeasuredFrames) -> None:
        """Take in a batch."""
        columns = measured.columns
        for frame in measured.lost:
            self.lost[frame.reason] += 1
        if not measured.count:
            return
        for name in _COUNTS:
            self._sums[name] += int(columns[name].sum())
        for name in _ENERGIES:
            self._energies[name] += float(np.nansum(columns[name]))
        for name, spread in self._spreads.items():
            spread.add(columns[name])
        for mark in Mark:
            self.marks[mark.name or ""] += int(np.count_nonzero(columns["marks"] & mark.value))
        for model in Following:
            share = np.count_nonzero(columns["channel_model"] == model)
            self.channel_models[model.name.lower()] += int(share)
        for value, count in zip(*np.unique(columns["crc_ok"], return_counts=True), strict=True):
            self.crc[int(value)] += int(count)
        run = columns["two_step_bit_errors"] >= 0
        self._two_step[0] += int(columns["two_step_bit_errors"][run].sum())
        self._two_step[1] += int(columns["bits_compared"][run].sum())
        self._aided += int(columns["evm_data_aided"].sum())
        self._confusion += measured.confusion.sum(axis=0)
        self._receive.add(measured)
        self._add_losses(columns)
        self._add_antennas(measured)
        if measured.subcarriers is not None:
            self._subcarriers.add(measured.subcarriers)
        if measured.paths is not None:
            used = int(np.count_nonzero(np.any(self.link.codebook.vectors != 0, axis=0)))
            self._paths.add(measured.paths, used)
        self._add_predictions(measured)
        self._keep(measured)
        self.frames += measured.count

    def _add_losses(self, columns: dict[str, NDArray[Any]]) -> None:
        lost = columns["samples_lost"]
        self._sums["frames_torn"] += int(np.isfinite(columns["lost_at"]).sum())
        self._sums["frames_unsized"] += int((lost < 0).sum())
        self._sums["samples_lost"] += int(lost[lost > 0].sum())
        self._sums["bits_erased"] += int(columns["bits_erased"].sum())

    def _add_antennas(self, measured: MeasuredFrames) -> None:
        if measured.antenna_error_energy is not None:
            self._antenna[0] += measured.antenna_error_energy.sum(axis=0)
        if measured.antenna_reference_energy is not None:
            self._antenna[1] += measured.antenna_reference_energy.sum(axis=0)
        self._antenna[2] += measured.antenna_power.sum(axis=0)
        self._antenna[3] += measured.count

    def _add_predictions(self, measured: MeasuredFrames) -> None:
        """Weighted by the bits that the measured figure counts; by frames without a reference."""
        columns = measured.columns
        names = ("ber", "ber_spatial", "ber_signal")
        kinds = ("bits_compared", "spatial_bits_compared", "signal_bits_compared")
        for i, (name, kind) in enumerate(zip(names, kinds, strict=True)):
            value = columns[f"predicted_{name}"]
            weight = columns[kind] if self.link.payload.has_reference else np.ones(value.size)
            good = np.isfinite(value)
            self._predicted[i, 0] += float(np.sum(value[good] * weight[good]))
            self._predicted[i, 1] += float(np.sum(weight[good]))

    def _keep(self, measured: MeasuredFrames) -> None:
        """Keep every n-th frame, n doubling: spread over the recording, however long it gets."""
        columns = measured.columns
        for i in range(measured.count):
            index = self.frames + i
            if index % self._stride:
                continue
            variance = measured.channel_error_variance
            spread = np.zeros(self.link.antennas) if variance is None else variance[i]
            channel = measured.white_channel
            noise = measured.white_noise
            if channel is None or noise is None:
                channel, noise = measured.channel, columns["noise_power"]
            decided_on = measured.matched_channels.get(i, channel[i])
            self._kept.append((index, (decided_on, noise[i], spread)))
            if len(self._kept) > _KEPT_FRAMES:
                self._stride *= 2
                self._kept = [k for k in self._kept if k[0] % self._stride == 0]

    def as_dict(self) -> dict[str, Any]:
        """All figures, nested, plain numbers; None where a figure could not be measured."""
        s = self._sums
        right = s["periods_compared"] - s["antenna_errors"]
        lost = sum(self.lost.values())
        passed, failed = self.crc[1], self.crc[0]
        return {
            "link": self.link.name,
            "confidence": self.confidence,
            "frames": {
                "found": self.frames,
                "lost": lost,
                "expected": self.frames + lost,
                "lost_by_reason": dict(sorted(self.lost.items())),
            },
            "ber": self._ratio(s["bit_errors"], s["bits_compared"]),
            "ber_spatial": self._ratio(s["spatial_bit_errors"], s["spatial_bits_compared"]),
            "ber_signal": self._ratio(s["signal_bit_errors"], s["signal_bits_compared"]),
            "antenna_error_ratio": self._ratio(s["antenna_errors"], s["periods_compared"]),
            "symbol_error_ratio": self._ratio(s["symbol_errors"], right),
            "two_step_ber": self._ratio(*self._two_step),
            "predicted_ber": self._prediction(0),
            "predicted_ber_spatial": self._prediction(1),
            "predicted_ber_signal": self._prediction(2),
            "implementation_loss_db": self._loss(),
            "evm": self._evm("evm"),
            "equalised_evm": self._evm("equalised"),
            "antennas": self._antennas(),
            "subcarriers": self._subcarriers.as_dicts(),
            "receive_channels": self._paths.receive_channels(),
            "front_end": self._receive.as_list(self.confidence),
            "spectrum": self._spectrum(),
            **{name: spread.as_dict() for name, spread in self._spreads.items()},
            "channel_models": {name: n for name, n in self.channel_models.items() if n},
            "crc": {"passed": passed, "failed": failed} if passed + failed else None,
            "lost_inside_frames": self._losses(),
            "marks": {name: n for name, n in self.marks.items() if n},
            "antenna_sets": [list(a) for a in self.link.codebook.antenna_sets],
            "confusion": self._confusion.tolist(),
        }

    def _losses(self) -> dict[str, int] | None:
        """Samples missing inside frames, untold; None when none are."""
        s = self._sums
        if not s["frames_torn"] and not s["bits_erased"]:
            return None
        return {
            "frames": s["frames_torn"],
            "samples": s["samples_lost"],
            "frames_of_unknown_number": s["frames_unsized"],
            "bits_not_compared": s["bits_erased"],
        }

    def _ratio(self, errors: int, trials: int) -> dict[str, Any] | None:
        if not trials:
            return None
        low, high = clopper_pearson(errors, trials, self.confidence)
        return {
            "value": errors / trials,
            "low": float(low),
            "high": float(high),
            "errors": int(errors),
            "compared": int(trials),
            "is_upper_bound": errors == 0,
        }

    def _spectrum(self) -> str | None:
        """As it was received; unknown without frames."""
        if not self.frames:
            return None
        inverted = self.marks[Mark.SPECTRUM_INVERTED.name or ""] == self.frames
        return "inverted" if inverted else "normal"

    def _prediction(self, i: int) -> float | None:
        total, weight = self._predicted[i]
        return float(total / weight) if weight > 0 else None

    def _loss(self) -> dict[str, Any] | None:
        errors, trials = self._sums["bit_errors"], self._sums["bits_compared"]
        if not trials or not self._kept or self._prediction(0) is None:
            return None
        # Rows of zeros change no distance.
        rows = max(len(k[1][0]) for k in self._kept)
        channel = np.stack(
            [np.pad(k[1][0], ((0, rows - len(k[1][0])), (0, 0))) for k in self._kept]
        )
        noise = np.array([k[1][1] for k in self._kept])
        amplitude = float(np.sqrt(np.mean(self.link.layout.payload_amplitude**2)))
        variance = np.stack([k[1][2] for k in self._kept])
        loss = pooled_loss(
            channel * amplitude,
            noise,
            variance * amplitude**2,
            self.link.codebook,
            errors,
            trials,
            self.confidence,
            self._prediction(0),
        )
        ends = {"value": loss.value, "low": loss.low, "high": loss.high}
        # Off the predicted curve there is no finite figure: missing, not a large number.
        return {name: float(x) if np.isfinite(x) else None for name, x in ends.items()}

    def _evm(self, kind: str) -> dict[str, Any] | None:
        error = self._energies[f"{kind}_error_energy"]
        reference = self._energies[f"{kind}_reference_energy"]
        if reference <= 0:
            return None
        ratio = float(np.sqrt(error / reference))
        return {
            "percent": 100 * ratio,
            "db": float(20 * np.log10(ratio)) if ratio > 0 else None,
            "data_aided": self._aided == self.frames,
            "data_aided_frames": self._aided,
        }

    def _antennas(self) -> list[dict[str, Any]]:
        rows = []
        delays = self._paths.antenna_delays(self.link.symbol_rate_hz)
        delays = delays or [NO_DELAY] * self.link.antennas
        for a in range(self.link.antennas):
            error, reference, power, frames = self._antenna[:, a]
            evm = 100 * float(np.sqrt(error / reference)) if reference > 0 else None
            mean = float(power / frames) if frames > 0 else None
            rows.append({"antenna": a, "evm_percent": evm, "power": mean, **delays[a]})
        return rows
