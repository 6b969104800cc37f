"""The truth kept beside a simulated recording: one JSON file for people, one npz for programs."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from spatiq.transmit.echoes import Echoes
from spatiq.transmit.truth import Truth

# Words are left out beyond this many: frame numbers, link description and seed determine them.
MOST_WORDS = 1 << 26


def truth_names(base: str) -> tuple[str, str]:
    """File names of the truth of recording `base`: JSON, npz."""
    return f"{base}.truth.json", f"{base}.truth.npz"


def write_truth(truth: Truth, folder: Path, base: str) -> None:
    """Write both files.

    The npz holds, a row per frame: frame_numbers, starts (samples), cfo_hz, phase (radians at the
    start), snr_db, H (complex, Nr x Nt, in the scale of the samples), and words (uint32, Kw) unless
    there are more than `MOST_WORDS`. The JSON holds what is the same for all frames. Beside the
    rows there are, where they apply, the attributes of `Truth` of the same names: antenna_delays,
    receive_delays, noise_covariance, gaps; recorded_starts (sample numbers in the file, NaN for
    lost ones); gain_places and gain_factors of its gain steps; and a moving channel, see
    `spatiq.transmit.moving_channel.Field`: field_doppler, field_phases, field_gain, field_scale,
    field_direct, field_at_receiver, field_at_transmitter. A dispersive channel: path_delays
    (nominal symbol periods), and path_matrices (F, P, Nr, Nt); or for one that moves the same as
    above, where they differ with the paths as first axis: path_doppler, path_phases, path_gain,
    path_scale, path_direct, path_at_receiver, path_at_transmitter.
    """
    as_json, as_npz = truth_names(base)
    words = truth.frames * truth.link.words_per_frame
    arrays: dict[str, Any] = {
        "frame_numbers": truth.frame_numbers,
        "starts": truth.starts,
        "cfo_hz": truth.cfo_hz,
        "phase": truth.phase,
        "snr_db": truth.snr_db,
        "H": truth.H,
        **_further_arrays(truth),
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
        "cfo_drift_hz_per_s": truth.drift_hz_per_s,
        "common_phase": [repr(rotation) for rotation in truth.rotations],
        "lost_samples": int(truth.gaps[:, 1].sum()),
        "N0": truth.N0,
        "gain": truth.gain,
        "seed": truth.seed,
        "words_kept": words <= MOST_WORDS,
        "mean_snr_db": None if truth.N0 == 0 else float(_mean_db(truth)),
    }
    with (folder / as_json).open("x", encoding="utf-8") as text:
        json.dump(summary, text, indent=2, allow_nan=False)
        text.write("\n")


def _further_arrays(truth: Truth) -> dict[str, Any]:
    """What only some recordings have."""
    found: dict[str, Any] = {
        "antenna_delays": truth.antenna_delays,
        "receive_delays": truth.receive_delays,
        "noise_covariance": truth.noise_covariance,
    }
    if len(truth.gaps):
        found |= {"gaps": truth.gaps, "recorded_starts": truth.recorded_starts}
    if truth.gain_steps is not None:
        found["gain_places"] = truth.gain_steps.places
        found["gain_factors"] = truth.gain_steps.factors
    if truth.echoes is not None:
        found |= _path_arrays(truth.echoes)
    if truth.moving is not None:
        mixing = truth.moving.mixing
        found |= {
            "field_doppler": truth.moving.doppler,
            "field_phases": truth.moving.phases,
            "field_gain": truth.moving.gain,
            "field_scale": np.float64(mixing.scale),
            "field_direct": mixing.direct,
            "field_at_receiver": mixing.at_receiver,
            "field_at_transmitter": mixing.at_transmitter,
        }
    return {name: value for name, value in found.items() if value is not None}


def _path_arrays(echoes: Echoes) -> dict[str, Any]:
    """The paths of a dispersive channel."""
    found: dict[str, Any] = {"path_delays": echoes.delays, "path_matrices": echoes.matrices}
    if echoes.fields:
        none = np.zeros_like(echoes.fields[0].doppler[..., 0], np.complex128)
        mixings = [field.mixing for field in echoes.fields]
        found |= {
            "path_doppler": np.stack([field.doppler for field in echoes.fields]),
            "path_phases": np.stack([field.phases for field in echoes.fields]),
            "path_gain": np.stack([field.gain for field in echoes.fields]),
            "path_scale": np.array([mixing.scale for mixing in mixings]),
            "path_direct": np.stack([none if m.direct is None else m.direct for m in mixings]),
            "path_at_receiver": mixings[0].at_receiver,
            "path_at_transmitter": mixings[0].at_transmitter,
        }
    return found


def _mean_db(truth: Truth) -> float:
    """SNR of the mean power over frames, dB."""
    return float(10 * np.log10(np.mean(10 ** (truth.snr_db / 10))))
