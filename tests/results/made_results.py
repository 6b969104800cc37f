"""Made-up measurements with known contents, for tests of what is kept of them."""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np

from spatiq.metrics.frame_table import COLUMNS, Mark, MeasuredFrames, empty_columns
from spatiq.receiver.frame_batch import LostFrame
from spatiq.receiver.options import ReceiverOptions
from spatiq.results.hdf5 import ResultsWriter

SETS = ((0,), (1,), (3,))
ANTENNAS, CHANNELS, PERIODS, BITS = 4, 2, 5, 4


@dataclass
class MadeRecording:
    """As much of a recording as results ask for."""

    name: str = "run [07]"
    path: Path = Path("/somewhere/else/run [07].sigmf-meta")
    sample_rate: float = 4e6
    channels: int = CHANNELS
    datatype: str = "ci16_le"
    n_samples: int = 1_000_000
    carrier_hz: float | None = None
    warnings: tuple[str, ...] = ("half a sample at the end is left out",)
    digests: list[str] = field(default_factory=list)

    def digest(self) -> str:
        self.digests.append("taken")
        return "ab" * 32


def made_link(sets: tuple[tuple[int, ...], ...] = SETS, periods: int = PERIODS) -> Any:
    return SimpleNamespace(
        name="four by two",
        path=Path("/somewhere/else/four.link.toml"),
        text='format = 1\nname = "four by two"  # Ωµ\n',
        antennas=ANTENNAS,
        carrier_hz=2.4e9,
        symbol_rate_hz=1e6,
        frame_symbols=100,
        codebook=SimpleNamespace(
            antenna_sets=sets, bits=BITS, set_names=tuple("+".join(map(str, a)) for a in sets)
        ),
        layout=SimpleNamespace(payload_index=np.arange(periods), multicarrier=False),
        words_per_frame=periods,
    )


def made_frames(
    count: int,
    first: int = 0,
    *,
    seed: int = 1,
    symbols: bool = False,
    llr: bool = False,
    lost: list[LostFrame] | None = None,
) -> MeasuredFrames:
    """Frames whose every column differs from frame to frame; a few figures are missing."""
    rng = np.random.default_rng((seed, first))
    columns = empty_columns(count)
    for column in COLUMNS:
        if column.dtype.startswith("f"):
            columns[column.name] = rng.standard_normal(count)
        elif column.dtype not in ("i1", "u1"):
            columns[column.name] = rng.integers(0, 1000, count).astype(column.dtype)
    columns["frame"] = np.arange(first, first + count, dtype="i8")
    columns["start_sample"] = 1000.25 + 500.0 * columns["frame"]
    columns["marks"] = np.where(columns["frame"] % 7 == 3, int(Mark.CLIPPED), 0).astype("u4")
    columns["cfo_ppm"][:] = np.nan
    columns["crc_ok"] = (columns["frame"] % 2).astype("i1")
    size = len(SETS)
    vectors = rng.standard_normal((count, PERIODS, CHANNELS, 2)).astype("f4")
    channel = rng.standard_normal((count, CHANNELS, ANTENNAS, 2))
    evm = rng.random((count, ANTENNAS))
    evm[:, ANTENNAS // 2] = np.nan
    return MeasuredFrames(
        columns=columns,
        confusion=rng.integers(0, 50, (count, size, size)),
        channel=channel[..., 0] + 1j * channel[..., 1],
        antenna_evm_percent=evm,
        antenna_power=rng.random((count, ANTENNAS)),
        channel_error_variance=rng.random((count, ANTENNAS)),
        antenna_error_energy=rng.random((count, ANTENNAS)),
        antenna_reference_energy=rng.random((count, ANTENNAS)) if seed else None,
        words_decided=rng.integers(0, 16, (count, PERIODS)),
        words_sent=rng.integers(-1, 16, (count, PERIODS)),
        symbols=(vectors[..., 0] + 1j * vectors[..., 1]) if symbols else None,
        llr=rng.standard_normal((count, PERIODS * BITS)).astype("f4") if llr else None,
        lost=lost or [],
    )


def made_summary(**changes: Any) -> dict[str, Any]:
    """Figures in the nesting of a real summary."""
    error_free = {
        "value": 0.0,
        "low": 0.0,
        "high": 3.69e-6,
        "errors": 0,
        "compared": 1_000_000,
        "is_upper_bound": True,
    }
    some = {
        "value": 0.01,
        "low": 0.008,
        "high": 0.0124,
        "errors": 100,
        "compared": 10_000,
        "is_upper_bound": False,
    }
    summary: dict[str, Any] = {
        "frames": {
            "found": 98,
            "lost": 2,
            "expected": 100,
            "lost_by_reason": {"not found": 1, "cut off by the end": 1},
        },
        "ber": error_free,
        "ber_spatial": error_free,
        "ber_signal": error_free,
        "antenna_error_ratio": some,
        "symbol_error_ratio": some,
        "evm": {"percent": 8.21, "db": -21.7, "data_aided": True, "data_aided_frames": 98},
        "equalised_evm": {"percent": 7.9, "db": -22.05},
        "antennas": [
            {"antenna": 0, "evm_percent": 8.0, "power": 0.01},
            {"antenna": 1, "evm_percent": 8.1, "power": 0.02},
            {"antenna": 2, "evm_percent": None, "power": 0.0},
            {"antenna": 3, "evm_percent": 8.3, "power": 0.04},
        ],
        "cfo_hz": {"mean": 123.4, "std": 1.0, "min": 120.0, "max": 130.0},
        "cfo_ppm": {"mean": 0.051, "std": 0.001, "min": 0.05, "max": 0.054},
        "clock_ppm": {"mean": 1.25, "std": 0.1, "min": 1.0, "max": 1.5},
        "snr_db": {"mean": 21.7, "std": 0.2, "min": 21.0, "max": 22.4},
        "predicted_ber": 1.2e-7,
        "implementation_loss_db": None,
        "crc": {"passed": 97, "failed": 1},
        "two_step_ber": None,
        "marks": {"CLIPPED": 3, "CRC_FAILED": 1},
        "confidence": 0.95,
    }
    return summary | changes


def write_results(
    path: Path,
    batches: list[MeasuredFrames],
    summary: dict[str, Any] | None = None,
    *,
    keep_symbols: bool = False,
    soft_output: str = "none",
    channel: str = "flat",
    recording: MadeRecording | None = None,
) -> Path:
    """A results file of these batches."""
    options = ReceiverOptions(keep_symbols=keep_symbols, soft_output=soft_output, channel=channel)
    with ResultsWriter(path, made_link(), recording or MadeRecording(), options) as writer:
        for batch in batches:
            writer.add(batch)
        writer.close(made_summary() if summary is None else summary)
    return path
