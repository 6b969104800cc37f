"""Make the recordings of captures_demo/ and state what should come out of them.

    .venv/bin/python tools/make_demo.py

Seeds are fixed: the same files come out each time. The link descriptions are kept by hand; this
writes NAME.sigmf-meta, NAME.sigmf-data and NAME.expected.json beside them. Expectations come from
the simulation's truth (and, for error ratios, from a receiver that is told timing, carrier and
channel), never from measured results.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.link.loading import load_link
from spatiq.metrics.intervals import clopper_pearson
from spatiq.receiver.detection import maximum_likelihood
from spatiq.recording.writing import write_recording
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.simulation import SimulatedCapture, simulate
from spatiq.transmit.transmitter_faults import Permuted

FOLDER = Path(__file__).resolve().parent.parent / "captures_demo"
STARTED = "2026-03-14T22:40:00Z"
Expected = dict[str, dict[str, Any]]


def around(value: float, margin: float) -> dict[str, float]:
    """An expectation of value +- margin."""
    return {"from": round(value - margin, 9), "to": round(value + margin, 9)}


def write(
    name: str, capture: SimulatedCapture, samples: NDArray[np.complex64], **more: Any
) -> None:
    """Write the recording, replacing an earlier one."""
    write_recording(
        FOLDER / name,
        samples,
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        description=f"Simulated demo recording: {capture.link.name}",
        overwrite=True,
        **more,
    )


def expect(name: str, about: str, figures: Expected) -> None:
    """Write what is expected, figure by figure."""
    text = json.dumps({"about": about, "figures": figures}, indent=2)
    (FOLDER / f"{name}.expected.json").write_text(text + "\n", encoding="utf-8")


def genie_words(capture: SimulatedCapture, samples: NDArray[np.complex64]) -> NDArray[np.int64]:
    """Words that a maximum-likelihood receiver decides with timing, carrier and channel known."""
    truth, link = capture.truth, capture.link
    y = genie_symbols(truth, samples)[:, link.layout.payload_index].astype(np.complex64)
    each = zip(y, truth.H, strict=True)
    return np.stack([maximum_likelihood(f, h, truth.N0, link.codebook) for f, h in each])


def from_truth(capture: SimulatedCapture) -> Expected:
    """What timing, carrier, channel and noise say."""
    truth = capture.truth
    snr = float(np.mean(truth.snr_db))
    # EVM = 1/sqrt(SNR), pooled: noise energy over signal energy.
    power = float(np.mean(10 ** (truth.snr_db / 10)))
    evm = 100 / np.sqrt(power)
    return {
        "frames.found": {"equals": truth.frames},
        "snr_db.mean": around(snr, 0.15),
        "cfo_hz.mean": around(float(np.mean(truth.cfo_hz)), 2.0),
        "evm.percent": around(evm, 0.02 * evm),
    }


def error_figures(capture: SimulatedCapture, samples: NDArray[np.complex64]) -> Expected:
    """Bit errors as the genie makes them, and which antennas it confuses."""
    truth, codebook = capture.truth, capture.link.codebook
    sent, decided = truth.words(), genie_words(capture, samples)
    counted = np.flatnonzero(capture.link.payload.known_mask)
    wrong = codebook.words_to_bits(sent) != codebook.words_to_bits(decided)
    errors, bits = int(wrong[:, counted].sum()), truth.frames * counted.size
    ratio = errors / bits
    low, high = (float(x) for x in clopper_pearson(errors, bits))
    confused = int(np.count_nonzero(codebook.set_index[sent] != codebook.set_index[decided]))
    periods = sent.size
    if not errors:
        return {"ber.errors": {"equals": 0}, "antenna_error_ratio.errors": {"equals": 0}}
    return {
        "ber.value": {"from": round(0.95 * ratio, 9), "to": round(1.1 * ratio, 9)},
        "predicted_ber": {"from": round(0.9 * low, 9), "to": round(1.1 * high, 9)},
        "antenna_error_ratio.value": around(confused / periods, 0.1 * confused / periods),
    }


def yard() -> None:
    """Four well separated antennas: no error is expected."""
    link = load_link(FOLDER / "hook_yard.link.toml")
    rng = np.random.default_rng(41)
    signature = np.exp(2j * np.pi * rng.random((2, 4))) * np.array([1.0, 0.9, 1.1, 0.8])
    signature[1] *= np.exp(1j * np.pi * np.array([0.1, 0.65, 1.2, 1.7]))
    capture = simulate(
        link,
        receive_channels=2,
        channels=signature,
        snr_db=23.0,
        sample_rate=1.953125e6,  # 4.0690104 samples per symbol period
        frames=64,
        first_frame=812,
        reference_ppm=3.1,
        seed=20260314,
        datatype="ci16_le",
    )
    samples = capture.samples()
    write("hook_yard", capture, samples, carrier_hz=2.31e9, datetime=STARTED)
    figures = from_truth(capture) | error_figures(capture, samples)
    # Shared reference: a carrier high by 3.1 ppm comes with a symbol period short by 3.1 ppm.
    figures["clock_ppm.mean"] = around(-3.1, 0.05)
    figures["cfo_ppm.mean"] = around(3.1, 0.05)
    figures["crc.passed"] = {"equals": capture.truth.frames}
    expect("hook_yard", "four antennas easily told apart, 23 dB, shared reference", figures)


def twins() -> None:
    """Antennas 2 and 3 look nearly the same to the receiver: these two are confused."""
    link = load_link(FOLDER / "hook_twins.link.toml")
    signature = np.array(
        [
            [1.0, 0.3 + 0.9j, -0.8 + 0.5j, -0.72 + 0.62j],
            [0.6j, -0.9 - 0.2j, 0.5 + 0.9j, 0.47 + 0.78j],
        ]
    )
    capture = simulate(
        link,
        receive_channels=2,
        channels=signature,
        snr_db=17.0,
        sample_rate=1.953125e6,
        frames=64,
        first_frame=90,
        reference_ppm=-1.4,
        seed=20260315,
        datatype="ci16_le",
    )
    samples = capture.samples()
    write("hook_twins", capture, samples, carrier_hz=2.31e9, datetime=STARTED)
    figures = from_truth(capture) | error_figures(capture, samples)
    expect("hook_twins", "antennas 2 and 3 are easily confused, 17 dB", figures)


def crossed() -> None:
    """A prototype's fault: antennas 1 and 2 are crossed, in the payload only."""
    link = load_link(FOLDER / "hook_crossed.link.toml")
    rng = np.random.default_rng(43)
    signature = np.exp(2j * np.pi * rng.random((2, 4)))
    signature[1] = signature[0] * np.exp(1j * np.pi * np.array([0.1, 0.6, 1.15, 1.6]))
    capture = simulate(
        link,
        receive_channels=2,
        channels=signature,
        snr_db=23.0,
        sample_rate=1.953125e6,
        frames=24,
        reference_ppm=0.8,
        seed=20260317,
        datatype="ci16_le",
        faults=[Permuted((0, 2, 1, 3))],
    )
    write("hook_crossed", capture, capture.samples(), carrier_hz=2.31e9, datetime=STARTED)
    figures = from_truth(capture)
    del figures["evm.percent"]  # against the symbols expected: not those that were sent
    expect("hook_crossed", "antennas 1 and 2 crossed in the payload: see spatiq verify", figures)


def keys() -> None:
    """No reference bits, a CRC in each frame, samples lost half way (known from the metadata)."""
    link = load_link(FOLDER / "gantry_keys.link.toml")
    capture = simulate(
        link,
        receive_channels=3,
        snr_db=24.0,
        samples_per_symbol=5.2,
        frames=60,
        cfo_hz=910.0,
        clock_ppm=6.0,
        seed=20260316,
        datatype="ci8",
    )
    samples = capture.samples()
    spacing = capture.truth.spacing
    # From the middle of frame 30 to the middle of frame 31.
    first, last = (int(capture.truth.starts[f] + 300 * spacing) for f in (30, 31))
    kept = np.concatenate([samples[:, :first], samples[:, last:]], axis=1)
    segments = [
        {"core:sample_start": 0, "core:global_index": 0, "core:frequency": 868.4e6,
         "core:datetime": STARTED},
        {"core:sample_start": first, "core:global_index": last, "core:frequency": 868.4e6},
    ]  # fmt: skip
    write("gantry_keys", capture, kept, captures=segments)
    figures: Expected = {
        "frames.found": {"equals": 58},
        "frames.lost": {"equals": 2},
        "frames.lost_by_reason.cut off by a gap": {"equals": 2},
        "ber": {"missing": True},
        "evm.data_aided": {"equals": False},
        "cfo_hz.mean": around(910.0, 1.0),
        # 560 symbols tell the clock to some 5 ppm each: three standard errors of 58 frames' mean.
        "clock_ppm.mean": around(6.0, 2.0),
        "snr_db.mean": around(float(np.mean(np.delete(capture.truth.snr_db, [30, 31]))), 0.2),
    }
    expect(
        "gantry_keys", "no reference bits, 8 antennas, samples lost in frames 30 and 31", figures
    )


if __name__ == "__main__":
    yard()
    twins()
    crossed()
    keys()
    for path in sorted(FOLDER.glob("*.sigmf-data")):
        print(f"{path.name:<28} {path.stat().st_size / 1e6:.2f} MB")
