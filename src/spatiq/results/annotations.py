"""SigMF annotations of the frames, found and lost, in a copy of the recording's metadata."""

from __future__ import annotations

import json
import math
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import spatiq
from spatiq.errors import InputError
from spatiq.receiver.frame_batch import LostFrame
from spatiq.recording.annotating import annotated_copy
from spatiq.results.reader import Results
from spatiq.results.wording import DASH, fixed, marks_text, number, printable, ratio

if TYPE_CHECKING:
    from spatiq.recording.recording import Recording

# At some 300 bytes each, more would make metadata that few programs open.
MOST_ANNOTATIONS = 200_000


def annotation_targets(recording: Recording, stem: Path) -> list[Path]:
    """One metadata file for each data file of the recording, named after `stem`."""
    if len(recording.datasets) == 1:
        return [stem.with_name(f"{stem.name}.sigmf-meta")]
    width = len(str(len(recording.datasets) - 1))
    numbers = range(len(recording.datasets))
    return [stem.with_name(f"{stem.name}-{i:0{width}}.sigmf-meta") for i in numbers]


def write_annotations(
    results: Results, recording: Recording, stem: Path, *, overwrite: bool = False
) -> list[Path]:
    """Annotate every frame in copies of the metadata; the originals stay as they are.

    Returns:
        The files written, as `annotation_targets` names them.

    Raises:
        InputError: too many frames to annotate, or a file that could not be written.
    """
    total = results.count + results.file["lost/segment"].shape[0]
    if total > MOST_ANNOTATIONS:
        expected = f"at most {MOST_ANNOTATIONS} frames; the results file holds them all"
        raise InputError(stem.name, "annotations", f"{total} frames", expected)
    annotations = list(frame_annotations(results, recording.n_samples))
    targets = annotation_targets(recording, stem)
    for dataset, target in enumerate(targets):
        annotated_copy(recording, annotations, target, dataset=dataset, overwrite=overwrite)
    return targets


def frame_annotations(results: Results, n_samples: int) -> Iterator[dict[str, Any]]:
    """An annotation for each frame found, then for each frame lost.

    A frame reaches from half a symbol before its first symbol to half a symbol behind its last; the
    part of it that the recording holds is annotated.
    """
    facts = results.provenance
    symbol = float(facts["sample_rate_hz"]) / float(facts["symbol_rate_hz"])
    symbols = int(facts["frame_symbols"])
    flags = json.loads(results.file["frames/marks"].attrs["flags"])
    for block in results.blocks():
        columns = {name: values.tolist() for name, values in block.items()}
        for i in range(len(columns["frame"])):
            row = {name: values[i] for name, values in columns.items()}
            clock = row["clock_ppm"]
            longer = 1.0 if math.isnan(clock) else 1 + 1e-6 * clock
            span = _span(row["start_sample"], symbols * symbol * longer, symbol, n_samples)
            yield _annotation(span, f"frame {row['frame']}", _figures(row, flags))
    for lost in results.lost():
        span = _span(lost.start_sample, symbols * symbol, symbol, n_samples)
        yield _annotation(span, "lost frame", _loss(lost))


def _span(start: float, length: float, symbol: float, n_samples: int) -> tuple[int, int]:
    """First sample and count of the part that lies in the recording; at least one sample."""
    first = min(max(0, round(start - symbol / 2)), n_samples - 1)
    stop = min(max(first + 1, round(start - symbol / 2 + length)), n_samples)
    return first, stop - first


def _annotation(span: tuple[int, int], label: str, comment: str) -> dict[str, Any]:
    return {
        "core:sample_start": span[0],
        "core:sample_count": span[1],
        "core:label": label,
        "core:comment": comment,
        "core:generator": f"spatiq {spatiq.__version__}",
    }


def _figures(row: dict[str, Any], flags: dict[str, int]) -> str:
    errors = row["bit_errors"] if row["bits_compared"] else None
    parts = [
        f"SNR {fixed(row['snr_db'], 'dB')}",
        f"CFO {fixed(row['cfo_hz'], 'Hz', 1)}",
        f"EVM {fixed(row['evm_percent'], '%')}",
        f"BER {ratio(row['ber'], row['ber_high'], errors)}",
        f"predicted BER {number(row['predicted_ber'])}",
        f"transmitter's number {row['frame_number'] if row['frame_number'] >= 0 else DASH}",
    ]
    marks = marks_text(row["marks"], flags)
    return "; ".join([*parts, f"marked: {marks}"] if marks else parts)


def _loss(lost: LostFrame) -> str:
    number_text = "" if lost.frame_number < 0 else f"; transmitter's number {lost.frame_number}"
    return f"{printable(lost.reason)}; expected from sample {lost.start_sample:.1f}{number_text}"
