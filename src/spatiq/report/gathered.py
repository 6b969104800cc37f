"""What all plots of a recording are drawn from, read once from its results file."""

from __future__ import annotations

import json
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.link.loading import parse_link
from spatiq.report.thinning import frames_drawn, spread_out
from spatiq.results.reader import Results

_SYMBOL_FRAMES = 60  # frames whose received symbols are looked at
_CHANNEL_FRAMES = 400


@dataclass(frozen=True, eq=False)
class Gathered:
    """A recording's results, whole columns and as much of the rest as is drawn.

    Attributes:
        results: the open file.
        columns: frame table, name -> (F,).
        flags: name of each mark -> its bit.
        link: built anew from the text kept with the results; None when that needs other files.
        link_fault: why there is none.
        drawn: indices of the frames drawn over time.
        channel_frames, channel: indices (n,) and channels, complex128 (n, Nr, Nt), of frames
            spread over the recording.
        lost: segment, start sample, reason of each frame lost.
        lost_time_s: when each was expected; NaN when that cannot be told.
    """

    results: Results
    columns: dict[str, NDArray[Any]]
    flags: dict[str, int]
    link: Link | None
    link_fault: str
    drawn: NDArray[np.int64]
    channel_frames: NDArray[np.int64]
    channel: NDArray[np.complex128]
    lost: list[tuple[int, float, str]]
    lost_time_s: NDArray[np.float64]

    @property
    def count(self) -> int:
        """Number of frames found, F."""
        return int(self.columns["frame"].size)

    def symbol_frames(self) -> NDArray[np.int64]:
        """Frames whose symbols are drawn; none when they were not kept.

        Where the channel moved within a frame, the one channel kept of it says nothing of its
        symbols: such frames are left out.
        """
        if not self.results.has_symbols:
            return np.zeros(0, np.int64)
        still = np.flatnonzero(self.columns["channel_model"] == 0)
        return spread_out(still, _SYMBOL_FRAMES)

    def row(self, name: str, frame: int) -> NDArray[Any]:
        """One frame's row of a dataset."""
        return np.asarray(self.results.rows(name, int(frame), int(frame) + 1)[0])


def gather(results: Results) -> Gathered:
    """Read what pages and figures of a recording need."""
    columns = {name: results.column(name) for name in results.column_names}
    flags = json.loads(results.file["frames/marks"].attrs["flags"])
    link, fault = _link(results)
    count = results.count
    picked = spread_out(np.arange(count), _CHANNEL_FRAMES)
    antennas = results.file["channel/real"].shape[1:]
    channel = np.empty((picked.size, *antennas), np.complex128)
    for i, frame in enumerate(picked.tolist()):
        channel[i] = results.channel(frame, frame + 1)[0]
    lost = [(f.segment, f.start_sample, f.reason) for f in results.lost()]
    return Gathered(
        results,
        columns,
        flags,
        link,
        fault,
        frames_drawn(columns),
        picked,
        channel,
        lost,
        _lost_times(lost, columns, float(results.provenance["sample_rate_hz"])),
    )


def _link(results: Results) -> tuple[Link | None, str]:
    provenance = results.provenance
    try:
        return parse_link(provenance["link_text"], provenance["link_file"]), ""
    except InputError as error:
        return None, str(error)


def _lost_times(
    lost: list[tuple[int, float, str]], columns: dict[str, NDArray[Any]], rate: float
) -> NDArray[np.float64]:
    """From the nearest frame found of the same segment: gaps between segments take time."""
    times = np.full(len(lost), np.nan)
    segments = np.array([s for s, _, _ in lost], np.int64)
    samples = np.array([s for _, s, _ in lost], np.float64)
    for segment in np.unique(segments):
        here = segments == segment
        found = np.flatnonzero(columns["segment"] == segment)
        if not found.size:
            continue
        starts = columns["start_sample"][found]
        place = np.clip(np.searchsorted(starts, samples[here]), 0, found.size - 1)
        apart = (samples[here] - starts[place]) / rate
        times[here] = columns["time_s"][found][place] + apart
    return times
