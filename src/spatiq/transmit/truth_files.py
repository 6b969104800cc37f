"""The truth kept beside a simulated recording: one JSON file for people, one npz for programs."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from spatiq.transmit.truth import Truth

# Words are left out beyond this many: frame numbers, link description and seed determine them.
MOST_WORDS = 1 << 26


def truth_names(base: str) -> tuple[str, str]:
    """File names of the truth of recording `base`: JSON, npz."""
    return f"{base}.truth.json", f"{base}.truth.npz"


def write_truth(truth: Truth, folder: Path, base: str) -> None:
    """Write both files.

    The npz holds, a row per frame: frame_numbers, starts (samples), cfo_hz, phase (radians at the
    start), snr_db, H (complex, Nr x Nt, in the scale of the samples), and words (uint32, Kp) unless
    there are more than `MOST_WORDS`. The JSON holds what is the same for all frames.
    """
    as_json, as_npz = truth_names(base)
    words = truth.frames * len(truth.link.layout.payload_index)
    arrays: dict[str, Any] = {
        "frame_numbers": truth.frame_numbers,
        "starts": truth.starts,
        "cfo_hz": truth.cfo_hz,
        "phase": truth.phase,
        "snr_db": truth.snr_db,
        "H": truth.H,
    }
    if words <= MOST_WORDS:
        arrays["words"] = truth.words().astype(np.uint32)
    with (folder / as_npz).open("xb") as file:
        np.savez(file, **arrays)
    summary = {
        "link": truth.link.name,
        "frames": truth.frames,
        "samples_per_symbol": truth.samples_per_symbol,
        "sample_rate_hz": truth.sample_rate,
        "clock_ppm": truth.clock_ppm,
        "N0": truth.N0,
        "gain": truth.gain,
        "seed": truth.seed,
        "words_kept": words <= MOST_WORDS,
        "mean_snr_db": None if truth.N0 == 0 else float(_mean_db(truth)),
    }
    with (folder / as_json).open("x", encoding="utf-8") as text:
        json.dump(summary, text, indent=2, allow_nan=False)
        text.write("\n")


def _mean_db(truth: Truth) -> float:
    """SNR of the mean power over frames, dB."""
    return float(10 * np.log10(np.mean(10 ** (truth.snr_db / 10))))
