"""Each drawn frame's own figures, for the page's frame picker."""

from __future__ import annotations

from typing import Any

import numpy as np

from spatiq.metrics.frame_table import COLUMNS
from spatiq.report.gathered import Gathered
from spatiq.report.plots import rounded
from spatiq.report.signal_plots import frame_symbols
from spatiq.report.thinning import spread_out
from spatiq.results.wording import marks_text

_SYMBOLS_OF = 24  # frames whose symbols go with the page
_SYMBOLS_EACH = 600
_TRACK = 40  # points of a phase track


def single_frames(seen: Gathered) -> dict[str, Any]:
    """Columns with unit and meaning, and for each drawn frame its values, confusions, symbols."""
    known = [c for c in COLUMNS if c.name in seen.columns]
    drawn = seen.drawn
    values = {c.name: rounded(seen.columns[c.name][drawn]) for c in known}
    marks = [marks_text(int(m), seen.flags) for m in seen.columns["marks"][drawn]]
    confused: dict[str, list[list[int]]] = {}
    for frame in drawn.tolist():
        if seen.columns["antenna_errors"][frame]:
            matrix = seen.row("confusion/per_frame", frame)
            rows, columns = np.nonzero(matrix - np.diag(np.diag(matrix)))
            confused[str(frame)] = [
                [int(i), int(j), int(matrix[i, j])] for i, j in zip(rows, columns, strict=True)
            ][:64]
    return {
        "frames": drawn.tolist(),
        "total": seen.count,
        "columns": [{"name": c.name, "unit": c.unit, "meaning": c.meaning} for c in known],
        "values": values,
        "marks": marks,
        "sets": list(seen.results.set_names),
        "confused": confused,
        "symbols": _symbols(seen),
    }


def _symbols(seen: Gathered) -> dict[str, Any]:
    """Symbols and phase track of the frames with most wrong bits and of some spread evenly."""
    link = seen.link
    if link is None or link.codebook.block > 1:
        return {}
    usable = np.intersect1d(seen.drawn, seen.symbol_frames())
    if not usable.size:
        return {}
    errors = seen.columns["bit_errors"][usable]
    worst = usable[np.argsort(-errors, kind="stable")[: _SYMBOLS_OF // 2]]
    chosen = np.union1d(worst, spread_out(usable, _SYMBOLS_OF // 2))
    first = np.where(link.codebook.vectors != 0, link.codebook.vectors, 0)
    value = first[np.arange(len(first)), (first != 0).argmax(axis=1)]
    told = {}
    for frame in chosen.tolist():
        z, words, _ = frame_symbols(seen, frame, link)
        good = np.isfinite(z)
        turned = np.where(good, z * np.conj(value[words]), 0)
        edges = np.unique(np.linspace(0, z.size, min(_TRACK, z.size) + 1).astype(int))
        phase = np.degrees(np.angle(np.add.reduceat(turned, edges[:-1])))
        part = spread_out(np.flatnonzero(good), _SYMBOLS_EACH)
        told[str(frame)] = {
            "i": [round(float(v), 3) for v in z[part].real],
            "q": [round(float(v), 3) for v in z[part].imag],
            "word": rounded((edges[:-1] + edges[1:] - 1) / 2),
            "phase_deg": [round(float(v), 3) for v in phase],
        }
    return told
